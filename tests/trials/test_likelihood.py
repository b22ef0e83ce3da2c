"""The likelihood in closed form against integrals over the demand, done slowly; and its laws."""

import itertools

import numpy as np
import pytest
from scipy.integrate import quad, trapezoid
from scipy.stats import expon, norm

from habitat.trials.likelihood import (
    FAST_EXCESS,
    OUTLIER_SHARE,
    PARAMETERS,
    PO2_SD,
    PRIOR_REACH,
    Observations,
)

PO2 = np.array([18.0, 9.0, 4.0, 2.2, 1.6, 0.7, 0.25, -0.05])
RATE = np.array([2.1, 5.5, 2.0, 2.6, 1.7, 0.9, 0.35, 0.1])


def parameters(**changed):
    """Give one plausible parameter set, by name, with changes."""
    values = {
        "ln_supply_capacity": np.log(0.5),
        "offset": 0.1,
        "ln_rest": 0.0,
        "ln_rest_spread": np.log(0.03),
        "logit_active": -0.5,
        "logit_slow": 0.3,
        "ln_excess": np.log(0.8),
        "ln_relative_error": np.log(0.05),
        "ln_absolute_error": np.log(0.03),
        "background": 0.004,
    }
    return np.array([(values | changed)[name] for name in PARAMETERS])


def trial(po2=PO2, rate=RATE, background_sd=0.0075):
    return Observations.of_trial(po2, rate, background_sd)


def integrated(density, low, high, kinks):
    """Integrate over [low, high], narrow places named."""
    edges = np.unique(np.clip([low, *kinks, high], low, high))
    return sum(quad(density, a, b, epsabs=1e-15, epsrel=1e-11)[0] for a, b in itertools.pairwise(edges))


def by_integration(observations, theta):
    """Limited and free density of each observation, integrated over what the animal may have asked for."""
    named = dict(zip(PARAMETERS, theta, strict=True))
    capacity, rest, relative = (np.exp(named[k]) for k in ("ln_supply_capacity", "ln_rest", "ln_relative_error"))
    spread, excess, absolute = (rest * np.exp(named[k]) for k in ("ln_rest_spread", "ln_excess", "ln_absolute_error"))
    active, slow = (1.0 / (1.0 + np.exp(-named[k])) for k in ("logit_active", "logit_slow"))
    demands = [
        (1.0 - active, norm(rest, spread), False),
        (active * slow, expon(rest, excess), True),
        (active * (1.0 - slow), expon(rest, FAST_EXCESS * excess), True),
    ]
    limited, free = [], []
    for number, (po2, rate) in enumerate(zip(observations.po2, observations.rate, strict=True)):
        y = rate - named["background"] * rest * number / (observations.po2.size - 1)
        supply = capacity * (po2 + named["offset"])
        supply_sd = np.sqrt((relative * supply) ** 2 + absolute**2 + (capacity * PO2_SD) ** 2)
        asked_more = below = 0.0
        for share, demand, burst in demands:
            error = np.hypot(relative * (max(y, rest) if burst else rest), absolute)
            low, high = demand.ppf(1e-16), min(supply, demand.isf(1e-16))
            places = [y + k * error for k in (-8, -3, 0, 3, 8)] + [demand.ppf(q) for q in (1e-6, 0.5, 1 - 1e-6)]
            if high > low:
                below += share * integrated(
                    lambda d, y=y, e=error, x=demand: x.pdf(d) * norm.pdf(y, d, e), low, high, places
                )
            asked_more += share * demand.sf(supply)
        limited.append((1.0 - OUTLIER_SHARE) * asked_more * norm.pdf(y, supply, supply_sd))
        free.append((1.0 - OUTLIER_SHARE) * below)
    return np.array(limited), np.array(free)


@pytest.mark.parametrize(
    "theta",
    [
        parameters(),
        parameters(ln_supply_capacity=np.log(0.3), offset=-0.05, logit_active=1.5, logit_slow=-1.0),
        parameters(ln_rest=0.3, ln_rest_spread=np.log(0.10), ln_relative_error=np.log(0.15), background=-0.02),
        parameters(ln_supply_capacity=np.log(0.9), ln_excess=np.log(2.0), ln_absolute_error=np.log(0.01)),
    ],
)
def test_densities_agree_with_integration_over_the_demand(theta):
    observations = trial()
    limited, free, outlier = (density[0] for density in observations.densities(theta[None]))
    slow_limited, slow_free = by_integration(observations, theta)
    # 1e-6 relative of the sum that enters the likelihood; each part as far as it matters in it.
    total = slow_limited + slow_free + outlier
    assert limited + free + outlier == pytest.approx(total, rel=1e-6)
    assert limited / total == pytest.approx(slow_limited / total, abs=1e-6)
    assert free / total == pytest.approx(slow_free / total, abs=1e-6)


@pytest.mark.parametrize("po2", [12.0, 2.5, 1.9, 1.0])
def test_densities_of_all_possible_rates_integrate_to_one(po2):
    # One reading and a fine grid of rates. The relative error is negligible here, since a burst's is taken at the
    # observed rate, which is a density only as far as that error hardly changes over itself.
    rate = np.linspace(-3.0, 14.0, 6001)
    observations = Observations(np.full(rate.size, po2), rate, 1.0, trial().prior_mean, trial().prior_sd)
    theta = parameters(ln_relative_error=np.log(0.002), background=0.0)[None]
    limited, free, _ = observations.densities(theta)
    assert trapezoid(limited + free, rate)[0] == pytest.approx(1.0 - OUTLIER_SHARE, rel=1e-3)


def test_outliers_are_as_wide_as_the_largest_rate():
    observations = trial()
    outlier = observations.densities(parameters()[None])[2][0]
    assert outlier == pytest.approx(
        OUTLIER_SHARE * norm.pdf(observations.rate - 0.004 * observations.elapsed, 1.0, observations.rate.max())
    )


def test_without_a_limit_nothing_is_limited_and_capacity_and_offset_do_not_matter():
    observations = trial()
    theta = np.array([parameters(), parameters(ln_supply_capacity=np.log(0.1), offset=0.3)])
    limited, free, _ = observations.densities(theta, limit=False)
    assert not limited.any()
    assert free[0] == pytest.approx(free[1], rel=1e-12)
    # With ample supply the limit does not matter either.
    ample = observations.densities(parameters(ln_supply_capacity=6.0, offset=0.5)[None])[1][0]
    assert ample == pytest.approx(free[0], rel=1e-9)


def test_observations_far_below_and_above_pcrit_are_told_apart():
    limited, free, outlier = (d[0] for d in trial().densities(parameters()[None]))
    chance = limited / (limited + free + outlier)
    # Capacity 0.5 per kPa and rest 1: Pcrit is 2 kPa, of readings 1.9 kPa.
    assert chance[PO2 > 3.0].max() < 0.01
    assert chance[5] > 0.9


def test_background_is_a_rate_that_grows_from_none():
    observations = trial()
    shift = 0.05 * np.linspace(0.0, 1.0, PO2.size)  # rest is 1
    shifted = Observations(PO2, observations.rate + shift, 1.0, observations.prior_mean, observations.prior_sd)
    without, with_it = parameters(background=0.0)[None], parameters(background=0.05)[None]
    for one, other in zip(observations.densities(without)[:2], shifted.densities(with_it)[:2], strict=True):
        assert one == pytest.approx(other, rel=1e-9)


def test_posterior_is_prior_times_densities():
    observations = trial()
    theta = np.array([parameters(), parameters(offset=-0.1)])
    for limit in (True, False):
        total = sum(observations.densities(theta, limit=limit))
        expected = np.log(total).sum(axis=1) + observations.log_prior(theta, limit=limit)
        assert observations.log_posterior(theta, limit=limit) == pytest.approx(expected)
    assert observations.log_posterior_without_limit(theta) == pytest.approx(expected)


def test_prior_falls_by_a_half_squared_for_every_standard_deviation():
    observations = trial(po2=PO2 + 2.0)  # no reading near zero
    centre = observations.prior_mean
    theta = np.array([centre, *(centre + 2.0 * np.diag(observations.prior_sd))])
    prior = observations.log_prior(theta)
    offset = PARAMETERS.index("offset")
    assert np.delete(prior - prior[0], [0, 1 + offset]) == pytest.approx(np.full(len(PARAMETERS) - 1, -2.0))


def test_true_oxygen_is_not_negative_where_there_is_a_limit():
    observations = trial()  # lowest reading -0.05 kPa
    theta = np.array([parameters(offset=-0.05), parameters(offset=0.15)])
    penalty = observations.log_prior(theta) - observations.log_prior(theta, limit=False)
    # norm.logcdf(-0.1 / 0.02) = -15.06, norm.logcdf(0.1 / 0.02) = -2.9e-7
    assert penalty == pytest.approx([norm.logcdf(-5.0), norm.logcdf(5.0)], abs=1e-9)


def test_many_parameter_sets_at_once_are_as_one_by_one():
    observations = trial()
    theta = parameters() + 0.2 * np.random.default_rng(8).standard_normal((5, len(PARAMETERS)))
    assert observations.log_posterior(theta) == pytest.approx([observations.log_posterior(t[None])[0] for t in theta])


def test_densities_stay_finite_far_out_and_are_held_beyond_the_reach_of_the_prior():
    observations = trial()
    corners = np.random.default_rng(9).choice([-1.0, 1.0], (64, len(PARAMETERS))) * observations.prior_sd
    far, farther = (observations.prior_mean + reach * corners for reach in (PRIOR_REACH, 5.0 * PRIOR_REACH))
    for limit in (True, False):
        held, beyond = observations.densities(far, limit=limit), observations.densities(farther, limit=limit)
        for one, other in zip(held, beyond, strict=True):
            assert np.isfinite(one).all()
            assert (one >= 0.0).all()
            assert np.array_equal(one, other)
        assert np.isfinite(observations.log_posterior(farther, limit=limit)).all()


def test_scaled_rates_do_not_depend_on_the_unit():
    one, other = trial(), trial(rate=RATE * 7.0)
    assert other.rate == pytest.approx(one.rate)
    assert other.rate_scale == pytest.approx(7.0 * one.rate_scale)


def test_scale_is_the_lower_quartile_in_the_better_half_of_the_oxygen():
    # The four best readings carry 2.0, 2.1, 2.6, 5.5; their 0.25 quantile lies 3/4 of the way from 2.0 to 2.1.
    assert trial().rate_scale == pytest.approx(2.075)


def test_scale_stays_positive_when_most_rates_are_not():
    rate = np.full(8, -0.1)
    rate[0] = 4.0
    assert trial(rate=rate).rate_scale == pytest.approx(0.05 * 4.0)


def test_steps_are_a_fifth_or_the_spread_of_a_narrower_prior():
    step = dict(zip(PARAMETERS, trial(background_sd=0.01).step, strict=True))
    assert step["background"] == 0.01
    assert step["ln_supply_capacity"] == 0.2
