"""Sensor offset, supply capacity, resting rate and Pcrit of one trial, estimated together, with intervals.

The model is that of `likelihood`; its posterior is explored by `sampling`. The estimates are posterior means (of the
logarithm, for what must be positive) and the intervals hold 95 % of the posterior.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtri

from habitat.errors import InputError
from habitat.trials.flags import raised_flags
from habitat.trials.likelihood import PARAMETERS, Observations
from habitat.trials.sampling import WeightedDraws, importance_sample, laplace_spread, maximise

LEAST_OBSERVATIONS = 6
"""Fewer cannot bear an estimate of offset, capacity and rest."""
GAIN_SD = 0.017
"""Assumed spread of the probe's gain about 1 [1]. No trial can show it; it widens the intervals of alpha and Pcrit."""
BACKGROUND_SD = 0.0075
"""Assumed spread of the background left in the rate at the end of a trial, of the resting rate [1]."""
EVIDENCE_PER_OBSERVATION, LEAST_EVIDENCE = 0.2, 6.0
"""Gain in log posterior below which a supply limit is not believed. It grows with the number of observations because
activity that lasts over several of them can imitate a limit."""
CLEAR_MARGIN = 0.75
"""A limit is believed when the lowest PO2 is below this share of Pcrit, and Pcrit surely below the highest."""
LOWEST_REST, LOWEST_PO2 = 0.05, 0.05
"""Least resting rate [rate scale] and oxygen [kPa] from which a search starts."""
NEIGHBOURS = 0.25
"""Distance in ln(rest) and ln(capacity) within which two starts count as one."""

CAPACITY, OFFSET, REST = (PARAMETERS.index(name) for name in ("ln_supply_capacity", "offset", "ln_rest"))


@dataclass(frozen=True)
class WithInterval:
    """A value and the ends of its 95 % interval, all in the unit of the quantity."""

    value: float
    p025: float
    p975: float


@dataclass(frozen=True)
class JointEstimate:
    """What one trial says about its animal and its probe.

    Attributes
    ----------
    sensor_offset : WithInterval
        Added to the readings it corrects them [kPa].
    supply_capacity : WithInterval
        alpha [umol/g/h/kPa]. Of a never-limited trial the value is nan, p025 the lower bound and p975 infinite.
    resting_rate : WithInterval
        [umol/g/h].
    critical_po2 : WithInterval
        Pcrit, resting rate over supply capacity [kPa]. Of a never-limited trial the value is nan, p975 the upper bound.
    covariance : ndarray, shape (3, 3)
        Of (ln supply capacity, sensor offset, ln resting rate); nan where a never-limited trial says nothing.
    limited : ndarray, shape (n,)
        Chance that each observation was limited by supply, 0 to 1.
    evidence_of_limit : float
        Gain in log posterior density over an animal that oxygen never limits.
    effective_draws : float
        How many independent draws the intervals are worth.
    flags : tuple of str
        Words of `habitat trials`' flags column.
    """

    sensor_offset: WithInterval
    supply_capacity: WithInterval
    resting_rate: WithInterval
    critical_po2: WithInterval
    covariance: np.ndarray
    limited: np.ndarray
    evidence_of_limit: float
    effective_draws: float
    flags: tuple[str, ...]


def joint_estimate(
    po2: np.ndarray, rate: np.ndarray, *, background_sd: float = BACKGROUND_SD, gain_sd: float = GAIN_SD
) -> JointEstimate:
    """Estimate sensor offset, supply capacity, resting rate and Pcrit of one trial.

    A trial is never-limited when a limit explains it hardly better than none, when its lowest PO2 is not clearly below
    Pcrit, or when it never shows the animal free: then the supply capacity has only a lower bound.

    Parameters
    ----------
    po2 : ndarray, shape (n,)
        Readings of oxygen partial pressure, in the order of time [kPa].
    rate : ndarray, shape (n,)
        Oxygen consumption rates [umol/g/h].
    background_sd : float
        Standard deviation of the additive error of the rate that is left at the end of the trial, growing from none
        at its start, of the resting rate [1]. In the limited phase such an error cannot be told from a sensor offset:
        state what the blanks allow.
    gain_sd : float
        Standard deviation of the probe's gain [1].

    Returns
    -------
    JointEstimate

    Raises
    ------
    InputError
        For fewer than `LEAST_OBSERVATIONS` observations, unequal numbers, values that are not finite, or no positive
        PO2 or rate; for a spread of background or gain that is not positive.
    """
    po2, rate = np.asarray(po2, float), np.asarray(rate, float)
    _check(po2, rate, {"background_sd": background_sd, "gain_sd": gain_sd})
    observations = Observations.of_trial(po2, rate, background_sd)
    fit = _fit(observations)
    limited, free, outlier = (density[0] for density in observations.densities(fit.limited_mode[None]))
    limited = limited / (limited + free + outlier)
    spread = laplace_spread(observations.log_posterior, fit.limited_mode, observations.step, observations.prior_sd)
    draws = importance_sample(observations.log_posterior, fit.limited_mode, spread)
    quantities = _quantities(draws, observations.rate_scale, gain_sd)
    seen, reached = _limit_seen(po2, fit.evidence, quantities)
    never_limited = not (seen and reached)
    if seen and not reached:  # rest is known, and which observations were limited, but hardly by how much
        quantities |= _only_bounds(quantities)
    elif not seen:
        draws, bounds = _without_limit(observations, fit, draws)
        quantities = _quantities(draws, observations.rate_scale, gain_sd)
        quantities |= _only_bounds(_quantities(bounds, observations.rate_scale, gain_sd))
        limited = np.zeros_like(limited)
    covariance = _covariance(draws, gain_sd)
    if never_limited:
        covariance[:2] = covariance[:, :2] = np.nan
    return JointEstimate(
        **quantities,
        covariance=covariance,
        limited=limited,
        evidence_of_limit=fit.evidence,
        effective_draws=draws.effective_size,
        flags=raised_flags(po2, rate, limited, quantities, never_limited=never_limited),
    )


def _check(po2: np.ndarray, rate: np.ndarray, spreads: dict[str, float]) -> None:
    """Refuse a trial that cannot be estimated."""
    for name, spread in spreads.items():
        if not 0 < spread < 1:
            raise InputError(
                f"{name} {spread:g}",
                expected="a share between 0 and 1",
                remedy=f"give {name} as a fraction, such as 0.01",
            )
    if po2.shape != rate.shape or po2.ndim != 1:
        raise InputError(
            f"PO2 of shape {po2.shape} and rate of shape {rate.shape}",
            expected="two one-dimensional arrays of one length",
            remedy="give one rate for every PO2 reading",
        )
    if po2.size < LEAST_OBSERVATIONS:
        raise InputError(
            f"{po2.size} observations",
            expected=f"at least {LEAST_OBSERVATIONS}",
            remedy="use shorter windows, or leave the trial out",
        )
    bad = int((~np.isfinite(po2) | ~np.isfinite(rate)).sum())
    if bad:
        raise InputError(
            f"{bad} observations without a finite PO2 and rate",
            expected="finite numbers",
            remedy="leave them out and count them",
        )
    if po2.max() <= 0:
        raise InputError(
            f"no PO2 above zero (largest {po2.max():g} kPa)",
            expected="a trial that begins in water with oxygen",
            remedy="check the unit and the probe's calibration",
        )
    if rate.max() <= 0:
        raise InputError(
            f"no rate above zero (largest {rate.max():g} umol/g/h)",
            expected="oxygen consumption as positive rates",
            remedy="check the sign and the background",
        )


@dataclass(frozen=True)
class _Fit:
    """Best parameters with a limit and without, and how much better the limit explains the trial."""

    limited_mode: np.ndarray
    unlimited_mode: np.ndarray
    evidence: float


def _fit(observations: Observations) -> _Fit:
    """Climb to the best parameters with a limit and without, from several starts each."""
    step, everything = observations.step, np.arange(len(PARAMETERS))
    found = [maximise(observations.log_posterior, start, step, everything) for start in _starts(observations)]
    best, _ = max(found, key=lambda pair: pair[1])

    plain = observations.prior_mean.copy()
    plain[REST] = np.log(max(float(np.quantile(observations.rate, 0.2)), LOWEST_REST))
    of_best = np.concatenate([plain[:REST], best[REST:]])
    unlimited, without = max(
        (
            maximise(observations.log_posterior_without_limit, start, step, everything[REST:])
            for start in (plain, of_best)
        ),
        key=lambda pair: pair[1],
    )
    # A limit just above everything the animal did explains the trial no worse than none: let it compete.
    touching = unlimited.copy()
    touching[CAPACITY] = np.log(1.05 * np.max(observations.rate / np.maximum(observations.po2, LOWEST_PO2)))
    found.append(maximise(observations.log_posterior, touching, step, everything))
    mode, height = max(found, key=lambda pair: pair[1])
    return _Fit(mode, unlimited, height - without)


def _limit_seen(po2: np.ndarray, evidence: float, quantities: dict[str, WithInterval]) -> tuple[bool, bool]:
    """Whether the trial left water where rest is free, beyond chance, and far enough to measure the limit."""
    enough = max(EVIDENCE_PER_OBSERVATION * po2.size, LEAST_EVIDENCE)
    offset, critical = quantities["sensor_offset"].value, quantities["critical_po2"]
    seen = evidence >= enough and critical.p975 < po2.max() + offset
    return bool(seen), bool(po2.min() + offset < CLEAR_MARGIN * critical.value)


def _without_limit(
    observations: Observations, fit: _Fit, limited_draws: WeightedDraws
) -> tuple[WeightedDraws, WeightedDraws]:
    """Posterior of an animal that was never limited, and that of the limit which the trial leaves possible.

    The second is known from two sides, its own draws and those of the first weighted anew; the fuller sample is kept.
    """
    free = observations.log_posterior_without_limit
    spread = laplace_spread(free, fit.unlimited_mode, observations.step, observations.prior_sd)
    draws = importance_sample(free, fit.unlimited_mode, spread)
    change = observations.log_posterior(draws.points) - free(draws.points)
    weights = draws.weights * np.exp(change - change.max())
    anew = WeightedDraws(draws.points, weights / weights.sum())
    return draws, max(limited_draws, anew, key=lambda sample: sample.effective_size)


def _starts(observations: Observations, count: int = 3) -> list[np.ndarray]:
    """Pick the most likely of a coarse grid of rest, Pcrit and offset, no two of them neighbours."""
    po2, rate = observations.po2, observations.rate
    rests = np.maximum(np.quantile(rate[po2 >= np.quantile(po2, 0.2)], [0.1, 0.2, 0.3, 0.45]), LOWEST_REST)
    readings = np.quantile(po2, [0.08, 0.12, 0.17, 0.23, 0.3, 0.4, 0.55])
    offsets = observations.prior_sd[OFFSET] * np.array([-1.2, -0.6, 0.0, 0.6, 1.2])
    rest, reading, offset = (g.ravel() for g in np.meshgrid(rests, readings, offsets, indexing="ij"))
    grid = np.tile(observations.prior_mean, (rest.size, 1))
    grid[:, REST], grid[:, OFFSET] = np.log(rest), offset
    grid[:, CAPACITY] = np.log(rest / np.maximum(reading + offset, LOWEST_PO2))
    chosen: list[np.ndarray] = []
    for start in grid[np.argsort(-observations.log_posterior(grid))]:
        if all(abs(start[REST] - c[REST]) + abs(start[CAPACITY] - c[CAPACITY]) > NEIGHBOURS for c in chosen):
            chosen.append(start)
        if len(chosen) == count:
            break
    return chosen


def _quantities(draws: WeightedDraws, rate_scale: float, gain_sd: float) -> dict[str, WithInterval]:
    """Summaries of the quantities of `JointEstimate`, the probe's gain included."""
    ln_capacity, offset, ln_rest = draws.points[:, :3].T
    gain, ln_rate_scale = _gain(gain_sd, ln_capacity.size), np.log(rate_scale)
    return {
        "sensor_offset": _summary(offset, draws.weights),
        "supply_capacity": _exponential(_summary(ln_capacity + ln_rate_scale + gain, draws.weights)),
        "resting_rate": _exponential(_summary(ln_rest + ln_rate_scale, draws.weights)),
        "critical_po2": _exponential(_summary(ln_rest - ln_capacity - gain, draws.weights)),
    }


def _gain(gain_sd: float, count: int) -> np.ndarray:
    """Evenly spread normal draws of the logarithm of the probe's gain, in an order that no other quantity shares."""
    return gain_sd * np.random.default_rng(0).permutation(ndtri((np.arange(count) + 0.5) / count))


def _covariance(draws: WeightedDraws, gain_sd: float) -> np.ndarray:
    """Covariance of (ln supply capacity, sensor offset, ln resting rate)."""
    covariance = np.cov(draws.points[:, :3].T, aweights=draws.weights, ddof=0)
    covariance[0, 0] += gain_sd**2
    return covariance


def _summary(values: np.ndarray, weights: np.ndarray) -> WithInterval:
    """Mean and 95 % interval of weighted draws."""
    order = np.argsort(values)
    cumulative = np.cumsum(weights[order]) - 0.5 * weights[order]
    low, high = np.interp([0.025, 0.975], cumulative, values[order])
    return WithInterval(float(weights @ values), float(low), float(high))


def _exponential(logarithm: WithInterval) -> WithInterval:
    """Turn a summary of the logarithm into one of the quantity."""
    return WithInterval(*(float(np.exp(x)) for x in (logarithm.value, logarithm.p025, logarithm.p975)))


def _only_bounds(quantities: dict[str, WithInterval]) -> dict[str, WithInterval]:
    """Keep what remains known of the limit when oxygen never limited the animal."""
    unknown = float("nan")
    return {
        "sensor_offset": WithInterval(unknown, -np.inf, np.inf),
        "supply_capacity": WithInterval(unknown, quantities["supply_capacity"].p025, np.inf),
        "critical_po2": WithInterval(unknown, 0.0, quantities["critical_po2"].p975),
    }
