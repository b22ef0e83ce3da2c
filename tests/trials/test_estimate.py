"""The joint estimate: how well it does on invented trials, its invariances, and what it refuses."""

import numpy as np
import pytest
from invented_trials import FAMILIES, informed_fit, simulate_trial

from habitat.errors import InputError
from habitat.trials.estimate import (
    CLEAR_MARGIN,
    EVIDENCE_PER_OBSERVATION,
    LEAST_EVIDENCE,
    LEAST_OBSERVATIONS,
    JointEstimate,
    joint_estimate,
)

STUDIED = 15
STATED_BACKGROUND_SD = {"background drift": 0.03}
"""Where the background drifts by up to 5 % of rest either way, an analyst with blanks knows its spread."""
QUANTITIES = ("sensor_offset", "supply_capacity", "resting_rate", "critical_po2")


@pytest.fixture(scope="module")
def trial():
    return simulate_trial("wandering", np.random.default_rng(21))


@pytest.fixture(scope="module")
def estimate(trial) -> JointEstimate:
    return joint_estimate(trial.po2, trial.rate)


@pytest.fixture(scope="module")
def unlimited() -> JointEstimate:
    trial = simulate_trial("constant", np.random.default_rng(22), reaches_limit=False)
    return joint_estimate(trial.po2, trial.rate)


def standard_deviation(estimate, row):
    """Of ln supply capacity (0), sensor offset (1) or ln resting rate (2)."""
    return np.sqrt(estimate.covariance[row, row])


# --- a small study of invented trials ----------------------------------------------------------------------------


@pytest.fixture(scope="module")
def studied() -> dict:
    """Trials and estimates of each family."""
    results = {}
    for number, family in enumerate(FAMILIES):
        rng = np.random.default_rng([1, number])
        background = {"background_sd": STATED_BACKGROUND_SD[family]} if family in STATED_BACKGROUND_SD else {}
        trials = [simulate_trial(family, rng) for _ in range(STUDIED)]
        results[family] = [(trial, joint_estimate(trial.po2, trial.rate, **background)) for trial in trials]
    return results


@pytest.mark.parametrize("family", FAMILIES)
def test_estimates_come_near_the_informed_bound(studied, family):
    pairs = studied[family]
    assert not any("never-limited" in estimate.flags for _, estimate in pairs)
    errors = [np.log(estimate.supply_capacity.value / trial.supply_capacity) for trial, estimate in pairs]
    bound = np.sqrt(np.mean([informed_fit(trial)[2][0, 0] for trial, _ in pairs]))
    assert np.sqrt(np.mean(np.square(errors))) < 1.8 * bound


@pytest.mark.parametrize(
    ("name", "truth"),
    [
        ("sensor_offset", "offset"),
        ("supply_capacity", "supply_capacity"),
        ("resting_rate", "resting_rate"),
        ("critical_po2", "critical_po2"),
    ],
)
def test_intervals_hold_the_truth(studied, name, truth):
    pairs = [pair for family in FAMILIES for pair in studied[family]]
    intervals = [(getattr(trial, truth), getattr(estimate, name)) for trial, estimate in pairs]
    held = sum(interval.p025 <= value <= interval.p975 for value, interval in intervals)
    # Of 105 intervals of 95 %, fewer than 92 hold the truth once in 300 times (binomial distribution).
    assert held >= 92


@pytest.mark.parametrize("family", ["wandering", "heavy noise", "18 observations"])
def test_trials_that_stop_above_the_limit_are_recognised(family):
    rng = np.random.default_rng(1)
    trials = [simulate_trial(family, rng, reaches_limit=False) for _ in range(12)]
    recognised = sum("never-limited" in joint_estimate(trial.po2, trial.rate).flags for trial in trials)
    assert recognised >= 11


def test_activity_that_imitates_a_limit_is_not_believed():
    # The fourth of the settling animals: its rate falls with its excitement, and so with oxygen.
    rng = np.random.default_rng(1)
    for _ in range(4):
        trial = simulate_trial("settling", rng, reaches_limit=False)
    found = joint_estimate(trial.po2, trial.rate)
    assert found.evidence_of_limit > LEAST_EVIDENCE  # enough, were there only a few observations
    assert found.evidence_of_limit < EVIDENCE_PER_OBSERVATION * trial.po2.size
    assert "never-limited" in found.flags


@pytest.mark.parametrize(("lowest_share", "believed"), [(0.85, False), (0.6, True)])
def test_a_limit_hardly_reached_is_not_believed_however_good_the_evidence(lowest_share, believed):
    # Capacity 1.1, rest 2.2, Pcrit 2 kPa; the trial ends at a share of it.
    assert 0.6 < CLEAR_MARGIN < 0.85
    po2 = np.concatenate([np.linspace(20.0, 2.1, 30), np.linspace(2.05, 2.0 * lowest_share, 30)])
    rate = np.minimum(2.2, 1.1 * po2) * (1.0 + 0.01 * np.random.default_rng(1).standard_normal(60))
    found = joint_estimate(po2, rate)
    assert found.evidence_of_limit > EVIDENCE_PER_OBSERVATION * po2.size
    assert ("never-limited" not in found.flags) == believed
    assert np.isfinite(found.supply_capacity.value) == believed
    assert found.resting_rate.p025 < 2.2 < found.resting_rate.p975  # rest is known all the same
    assert found.limited[-20:].min() > 0.5


# --- what an estimate holds --------------------------------------------------------------------------------------


def test_values_lie_within_their_intervals(estimate):
    for name in QUANTITIES:
        quantity = getattr(estimate, name)
        assert quantity.p025 < quantity.value < quantity.p975, name


def test_pcrit_is_rest_over_capacity(estimate):
    # Means of logarithms: exact up to the zero-mean draws of the gain, weighted.
    expected = estimate.resting_rate.value / estimate.supply_capacity.value
    assert estimate.critical_po2.value == pytest.approx(expected, rel=1e-9)


def test_covariance_is_symmetric_and_positive(estimate):
    assert estimate.covariance == pytest.approx(estimate.covariance.T, rel=1e-12)
    assert np.linalg.eigvalsh(estimate.covariance).min() > 0.0


def test_covariance_agrees_with_the_intervals(estimate):
    # 95 % of a normal distribution is 3.92 standard deviations wide; the posterior is nearly normal.
    widths = [
        np.log(estimate.supply_capacity.p975 / estimate.supply_capacity.p025),
        estimate.sensor_offset.p975 - estimate.sensor_offset.p025,
        np.log(estimate.resting_rate.p975 / estimate.resting_rate.p025),
    ]
    assert widths == pytest.approx(3.92 * np.sqrt(np.diag(estimate.covariance)), rel=0.15)


def test_an_observation_is_believed_limited_where_it_was(trial, estimate):
    assert estimate.limited.min() >= 0.0
    assert estimate.limited.max() <= 1.0
    assert ((estimate.limited > 0.5) == trial.limited).mean() > 0.9


def test_a_never_limited_trial_keeps_rest_and_bounds_only(unlimited):
    assert unlimited.flags[0] == "never-limited"
    capacity, critical, offset = unlimited.supply_capacity, unlimited.critical_po2, unlimited.sensor_offset
    assert np.isnan([capacity.value, critical.value, offset.value]).all()
    assert (capacity.p975, critical.p025, offset.p025, offset.p975) == (np.inf, 0.0, -np.inf, np.inf)
    assert not unlimited.limited.any()
    assert np.isnan(unlimited.covariance[:2]).all()
    assert np.isnan(unlimited.covariance[:, :2]).all()
    assert unlimited.covariance[2, 2] > 0.0


def test_bounds_of_a_never_limited_trial_hold_the_truth(unlimited):
    truth = simulate_trial("constant", np.random.default_rng(22), reaches_limit=False)
    assert 0.0 < unlimited.supply_capacity.p025 < truth.supply_capacity
    assert truth.critical_po2 < unlimited.critical_po2.p975 < truth.po2.max()
    assert unlimited.resting_rate.p025 < truth.resting_rate < unlimited.resting_rate.p975


# --- laws --------------------------------------------------------------------------------------------------------


def test_the_same_trial_gives_the_same_answer(trial, estimate):
    again = joint_estimate(trial.po2, trial.rate)
    for name in (*QUANTITIES, "evidence_of_limit", "effective_draws", "flags"):
        assert getattr(again, name) == getattr(estimate, name)
    assert np.array_equal(again.covariance, estimate.covariance)


def test_another_unit_of_rate_scales_capacity_and_rest_only(trial, estimate):
    factor = 32.0  # a power of two, so that scaling rounds nothing
    scaled = joint_estimate(trial.po2, factor * trial.rate)
    for name, by in zip(QUANTITIES, (1.0, factor, factor, 1.0), strict=True):
        one, other = getattr(estimate, name), getattr(scaled, name)
        expected = [by * one.value, by * one.p025, by * one.p975]
        assert [other.value, other.p025, other.p975] == pytest.approx(expected, rel=1e-9), name


@pytest.mark.parametrize("shift", [0.05, -0.05])
def test_readings_shifted_by_a_constant_shift_the_offset_back(trial, estimate, shift):
    shifted = joint_estimate(trial.po2 + shift, trial.rate)
    # The prior of the offset is centred on none, so it takes back a little: its precision over that of the posterior.
    returned = (standard_deviation(estimate, 1) / 0.2) ** 2
    tolerance = returned * abs(shift) + 0.1 * standard_deviation(estimate, 1)
    assert returned < 0.1
    assert shifted.sensor_offset.value == pytest.approx(estimate.sensor_offset.value - shift, abs=tolerance)
    capacity = np.log(shifted.supply_capacity.value / estimate.supply_capacity.value)
    assert capacity == pytest.approx(0.0, abs=0.3 * standard_deviation(estimate, 0))


def test_negative_readings_are_used_and_prove_an_offset(trial):
    shift = trial.po2.min() + 0.1
    found = joint_estimate(trial.po2 - shift, trial.rate)
    assert found.sensor_offset.p975 > 0.1
    assert found.sensor_offset.value == pytest.approx(trial.offset + shift, abs=4.0 * standard_deviation(found, 1))
    assert found.limited.size == trial.po2.size


def test_a_less_certain_gain_widens_capacity_and_pcrit_only(trial):
    sure, unsure = (joint_estimate(trial.po2, trial.rate, gain_sd=sd) for sd in (1e-6, 0.05))
    assert unsure.sensor_offset == sure.sensor_offset
    assert unsure.resting_rate == sure.resting_rate
    assert unsure.covariance[0, 0] - sure.covariance[0, 0] == pytest.approx(0.05**2, rel=1e-6)
    for name in ("supply_capacity", "critical_po2"):
        one, other = getattr(sure, name), getattr(unsure, name)
        assert other.p025 < one.p025 < one.p975 < other.p975, name


def test_a_less_certain_background_widens_the_offset(trial):
    sure, unsure = (joint_estimate(trial.po2, trial.rate, background_sd=sd) for sd in (0.001, 0.05))
    assert standard_deviation(unsure, 1) > 1.5 * standard_deviation(sure, 1)


def test_a_rate_that_never_changes_is_never_limited():
    found = joint_estimate(np.linspace(20.0, 5.0, 30), np.full(30, 2.0))
    assert "never-limited" in found.flags
    assert found.resting_rate.value == pytest.approx(2.0, rel=0.05)


# --- refusals ----------------------------------------------------------------------------------------------------

PO2 = np.array([20.0, 15.0, 10.0, 5.0, 2.0, 1.0])
RATE = np.array([2.0, 2.1, 2.0, 1.9, 2.0, 1.0])


def replaced(values, number):
    """Give the values with one of them, the third, replaced."""
    changed = values.copy()
    changed[2] = number
    return changed


@pytest.mark.parametrize(
    ("po2", "rate", "message"),
    [
        (PO2[:5], RATE[:5], "5 observations; expected at least 6; use shorter windows, or leave the trial out"),
        (
            PO2,
            RATE[:5],
            r"PO2 of shape \(6,\) and rate of shape \(5,\); expected two one-dimensional arrays of one length; give",
        ),
        (PO2[None], RATE[None], r"PO2 of shape \(1, 6\) and rate of shape \(1, 6\); expected two one-dimensional"),
        (
            replaced(PO2, np.nan),
            replaced(RATE, np.inf),
            "1 observations without a finite PO2 and rate; expected finite",
        ),
        (replaced(PO2, np.nan), RATE, "1 observations without a finite PO2 and rate; expected finite numbers; leave"),
        (PO2 - 25.0, RATE, r"no PO2 above zero \(largest -5 kPa\); expected a trial that begins in water with oxygen"),
        (
            PO2,
            -RATE,
            r"no rate above zero \(largest -1 umol/g/h\); expected oxygen consumption as positive rates; check",
        ),
    ],
)
def test_a_trial_that_cannot_be_estimated_is_refused(po2, rate, message):
    with pytest.raises(InputError, match=message):
        joint_estimate(po2, rate)


@pytest.mark.parametrize("name", ["background_sd", "gain_sd"])
@pytest.mark.parametrize(("spread", "shown"), [(0.0, "0"), (-0.01, "-0.01"), (1.7, "1.7"), (np.nan, "nan")])
def test_a_spread_that_is_no_share_is_refused(name, spread, shown):
    message = f"^{name} {shown}; expected a share between 0 and 1; give {name} as a fraction, such as 0.01"
    with pytest.raises(InputError, match=message):
        joint_estimate(PO2, RATE, **{name: spread})


def test_the_fewest_observations_suffice():
    assert PO2.size == LEAST_OBSERVATIONS
    assert joint_estimate(PO2, RATE).limited.shape == (LEAST_OBSERVATIONS,)
