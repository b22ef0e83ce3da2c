"""Every flag raised by a made case, and by that case only."""

from dataclasses import dataclass

import numpy as np
import pytest

from habitat.trials.flags import PLAUSIBLE_OFFSET, raised_flags

ALPHA, REST = 1.1, 2.2  # umol/g/h/kPa and umol/g/h: Pcrit 2 kPa


@dataclass(frozen=True)
class Summary:
    """A value and its interval."""

    value: float
    p025: float
    p975: float

    @classmethod
    def about(cls, value):
        return cls(value, 0.95 * value, 1.05 * value)


def made(count=60, *, offset=0.0, capacity=ALPHA, never_limited=False, change=None, lowest=0.3, **replaced):
    """Flags of a nearly noiseless trial; `change` alters the rates of the free animal, given PO2."""
    po2 = np.linspace(20.0, lowest, count)
    rng = np.random.default_rng(12)
    free_rate = REST * (1.0 + 0.01 * rng.standard_normal(count)) * (1.0 if change is None else change(po2))
    limited = (ALPHA * po2 < REST).astype(float)
    rate = np.where(limited > 0.5, ALPHA * po2, free_rate)
    posterior = {
        "sensor_offset": Summary.about(offset),
        "supply_capacity": Summary.about(capacity),
        "resting_rate": Summary.about(REST),
    }
    case = {"po2": po2, "rate": rate, "limited": limited, "posterior": posterior} | replaced
    return raised_flags(case["po2"], case["rate"], case["limited"], case["posterior"], never_limited=never_limited)


def test_a_clean_trial_raises_nothing():
    assert made() == ()


def test_never_limited_says_so_and_silences_what_is_said_about_the_limited_phase():
    assert made(never_limited=True, lowest=5.0, offset=1.0, capacity=9.0) == ("never-limited",)


def test_three_limited_observations_are_a_short_limited_phase():
    # 38 readings from 20 to 1 kPa, 0.514 kPa apart: 1.0 and 1.51 kPa are below Pcrit.
    assert made(38, lowest=1.0) == ("short-limited-phase",)


def test_half_believed_limits_count_half():
    limited = np.zeros(60)
    limited[-6:] = 0.6  # 3.6 observations' worth
    assert made(limited=limited) == ("short-limited-phase",)
    limited[-7:] = 0.6  # 4.2
    assert made(limited=limited) == ()


@pytest.mark.parametrize(
    ("offset", "raised"), [(0.39, ()), (0.41, ("offset-implausible",)), (-0.41, ("offset-implausible",))]
)
def test_an_offset_beyond_two_per_cent_of_air_saturation_is_implausible(offset, raised):
    assert PLAUSIBLE_OFFSET == 0.4  # 2 % of the 20 kPa or so of air-saturated water
    assert made(offset=offset) == raised


def test_a_resting_rate_that_falls_over_the_trial_drifts():
    # From +8 % at the start to -4 % at Pcrit.
    assert made(change=lambda po2: 0.96 + 0.12 * (po2 - 2.0) / 18.0) == ("drift",)


def test_a_drift_too_small_to_matter_is_passed_over():
    assert made(change=lambda po2: 1.0 + 0.03 * (po2 - 10.0) / 20.0) == ()


@pytest.mark.parametrize(
    ("capacity", "raised"),
    [(1.5 * ALPHA, ()), (1.7 * ALPHA, ("estimators-disagree",)), (ALPHA / 1.7, ("estimators-disagree",))],
)
def test_a_capacity_far_from_the_two_point_correction_is_a_disagreement(capacity, raised):
    # The interval is 5 % wide on either side and the tolerated factor 1.5: 1.5 x 1.05 = 1.575.
    assert made(capacity=capacity) == raised


def test_a_slope_that_scatter_explains_is_no_drift():
    # 6 % from start to Pcrit in a scatter of 10 % either way: the slope has a standard error of 5 %.
    assert made(change=lambda po2: 1.0 + 0.06 * (po2 - 11.0) / 18.0 + 0.10 * (-1.0) ** np.arange(po2.size)) == ()


def test_without_a_two_point_correction_nothing_disagrees():
    # A constant rate from 10 to 3 kPa: no other observation ever takes the lead.
    po2 = np.linspace(10.0, 3.0, 60)
    limited = (po2 < 4.0).astype(float)
    assert made(po2=po2, rate=np.full(60, REST), limited=limited, capacity=9.0) == ()


def test_a_free_animal_busier_in_poorer_water_raises_the_flag():
    assert "rate-rises-as-oxygen-falls" in made(change=lambda po2: 1.5 - 0.025 * po2)


def test_the_rise_is_not_sought_among_few_free_observations():
    limited = np.ones(60)
    limited[:7] = 0.0
    assert made(change=lambda po2: 1.5 - 0.025 * po2, limited=limited) == ()


def test_few_observations_are_flagged_below_twenty():
    assert made(19, lowest=0.1, limited=np.r_[np.zeros(14), np.ones(5)]) == ("few-observations",)
    assert made(20, lowest=0.1, limited=np.r_[np.zeros(15), np.ones(5)]) == ()


def test_flags_come_in_a_fixed_order():
    assert made(19, offset=1.0, capacity=9.0) == (
        "short-limited-phase",
        "offset-implausible",
        "estimators-disagree",
        "few-observations",
    )
