"""Published estimators: by hand on a few observations, and the envelope against a slow search."""

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.special import ndtri

from habitat.trials.classic import (
    LARGEST_MIXTURE_CV,
    PLAUSIBLE_SHARE,
    largest_provision,
    lowest_normal,
    lowest_ten,
    lowest_ten_per_cent,
    provision_kinks,
    resting_quantile,
    resting_rate,
    two_point_correction,
)

PO2 = np.array([10.0, 5.0, 2.0, 1.0, 0.5])
RATE = np.array([3.0, 3.0, 2.4, 1.0, 0.6])
# Provisions by hand: 0.3, 0.6, 1.2, 1.0, 1.2.


def normal_scores(count):
    """Evenly spread standard normal values with mean 0 and population standard deviation 1."""
    z = ndtri((np.arange(count) + 0.5) / count)
    return z / z.std()


# --- supply capacity without a correction ------------------------------------------------------------------------


def test_largest_provision_is_the_largest_rate_over_po2():
    assert largest_provision(PO2, RATE) == pytest.approx(1.2)


def test_three_largest_provisions_are_averaged():
    assert largest_provision(PO2, RATE, count=3) == pytest.approx((1.2 + 1.2 + 1.0) / 3)


def test_readings_of_zero_or_less_have_no_provision():
    po2, rate = np.append(PO2, [0.0, -0.1]), np.append(RATE, [5.0, 5.0])
    assert largest_provision(po2, rate) == pytest.approx(1.2)


def test_without_a_positive_reading_there_is_no_provision():
    assert np.isnan(largest_provision(np.array([0.0, -1.0]), np.array([1.0, 1.0])))


def test_a_reading_too_high_hides_supply_capacity():
    # Relative error -d/(P + d): 0.1 kPa too high at 1 kPa is -9.1 % (arithmetic of rate / PO2).
    assert largest_provision(np.array([1.1]), np.array([1.0])) == pytest.approx(1.0 - 0.0909, abs=1e-4)


# --- kinks of the envelope ---------------------------------------------------------------------------------------


def test_two_noiseless_limited_observations_give_back_offset_and_capacity():
    # True line: alpha 1.5 umol/g/h/kPa; the probe reads 0.12 kPa too high, so the correction is -0.12 kPa.
    alpha, offset = 1.5, -0.12
    true = np.array([2.0, 0.8])
    po2, rate = true - offset, alpha * true
    (kink,) = provision_kinks(po2, rate, -0.5, 0.5)
    (m1, m2), (p1, p2) = rate[::-1], po2[::-1]
    assert kink.offset == pytest.approx((m1 * p2 - m2 * p1) / (m2 - m1), abs=1e-12)
    assert kink.offset == pytest.approx(offset, abs=1e-12)
    assert kink.provision == pytest.approx(alpha, abs=1e-12)
    assert (kink.first, kink.second) == (1, 0)  # the poorer water leads below the correction


def test_a_kink_outside_the_range_is_not_reported():
    po2, rate = np.array([2.12, 0.92]), 1.5 * np.array([2.0, 0.8])
    assert provision_kinks(po2, rate, -0.10, 0.5) == []
    assert provision_kinks(po2, rate, -0.5, -0.13) == []


@given(
    st.lists(st.tuples(st.floats(0.6, 20.0), st.floats(-0.5, 5.0)), min_size=2, max_size=12),
    st.floats(-0.5, 0.0),
    st.floats(0.01, 3.0),
)
def test_leaders_between_kinks_are_those_of_a_slow_search(observations, lowest, width):
    po2, rate = np.array(observations).T
    assume(rate.max() > 0.01)
    highest = lowest + width
    kinks = provision_kinks(po2, rate, lowest, highest)
    offsets = [kink.offset for kink in kinks]
    assert offsets == sorted(offsets)
    assert all(lowest <= offset <= highest for offset in offsets)
    leader_at_first = int(np.argmax(np.maximum(rate, 0.0) / (po2 + lowest)))
    leaders = [leader_at_first] + [kink.second for kink in kinks]
    for correction in np.linspace(lowest, highest, 41):
        provision = rate / (po2 + correction)
        leader = leaders[np.searchsorted(offsets, correction, side="right")]
        assert provision[leader] == pytest.approx(provision.max(), rel=1e-9)
    for kink in kinks:
        envelope = (rate / (po2 + kink.offset)).max()
        assert kink.provision == pytest.approx(envelope, rel=1e-9)


def test_two_point_correction_recovers_a_noiseless_trial():
    # alpha 1.1, rest 2.2 (Pcrit 2 kPa), probe reading 0.15 kPa too low: within 2 % of 20 kPa.
    true = np.array([20.0, 15.0, 10.0, 5.0, 3.0, 1.5, 1.0, 0.5])
    kink = two_point_correction(true - 0.15, np.minimum(2.2, 1.1 * true))
    assert kink.offset == pytest.approx(0.15, abs=1e-9)
    assert kink.provision == pytest.approx(1.1, rel=1e-9)


def test_two_point_correction_takes_the_last_kink_of_the_range():
    kinks = provision_kinks(PO2, RATE, -0.2, 0.2)
    assert len(kinks) == 1
    # By hand: (0.5, 0.6) and (2, 2.4) share the provision 1.2 at no correction; (2, 2.4) leads from there on until
    # (5, 3) catches up at (2.4 x 5 - 3 x 2) / 0.6 = 10 kPa, far outside of 2 % of 10 kPa.
    assert two_point_correction(PO2, RATE) == kinks[-1]
    assert kinks[-1].offset == pytest.approx(0.0, abs=1e-12)
    assert two_point_correction(PO2, RATE, plausible=1.01).offset == pytest.approx(10.0)


def test_no_kink_within_the_plausible_range_is_no_correction():
    true = np.array([20.0, 2.0, 1.0])
    beyond = 1.5 * PLAUSIBLE_SHARE * 20.0
    assert two_point_correction(true + beyond, np.array([2.0, 2.0, 1.0])) is None


def test_a_negative_reading_proves_a_correction_of_its_size():
    true = np.array([20.0, 10.0, 2.0, 1.0, 0.2])
    kink = two_point_correction(true - 0.5, np.minimum(2.2, 1.1 * true))  # 0.5 kPa is beyond 2 % of 19.5 kPa
    assert kink.offset == pytest.approx(0.5, abs=1e-9)
    assert kink.provision == pytest.approx(1.1, rel=1e-9)


# --- resting rate ------------------------------------------------------------------------------------------------


def test_quantile_lies_between_the_sorted_rates():
    # Sorted 1..5: the 0.2 quantile lies at position 0.8 between 1 and 2.
    assert resting_quantile(np.array([5.0, 3.0, 1.0, 2.0, 4.0]), 0.2) == pytest.approx(1.8)


def test_lowest_ten_is_the_mean_of_ten_however_many_there_are():
    rates = np.random.default_rng(3).permutation(np.arange(1.0, 101.0))
    assert lowest_ten(rates) == pytest.approx(5.5)  # mean of 1..10


def test_lowest_ten_per_cent_drops_five_first():
    # 105 rates 1..105: drop 1..5, ten per cent of the other hundred are 6..15.
    rates = np.random.default_rng(4).permutation(np.arange(1.0, 106.0))
    assert lowest_ten_per_cent(rates) == pytest.approx(10.5)


def test_lowest_ten_per_cent_of_few_rates_is_the_sixth_lowest_or_nothing():
    assert lowest_ten_per_cent(np.arange(1.0, 7.0)) == 6.0
    assert np.isnan(lowest_ten_per_cent(np.arange(1.0, 6.0)))


def test_lowest_normal_finds_the_resting_part_of_a_known_mixture():
    # 60 % at rest about 2.0 with 3 %, 40 % active about 3.5 with 10 %.
    rate = np.concatenate([2.0 * (1 + 0.03 * normal_scores(120)), 3.5 * (1 + 0.10 * normal_scores(80))])
    mixture = lowest_normal(np.random.default_rng(5).permutation(rate))
    assert mixture.mean == pytest.approx(2.0, rel=0.005)
    assert mixture.variation == pytest.approx(0.03, rel=0.1)


def test_a_few_stray_low_rates_are_not_taken_for_rest():
    rate = np.concatenate([2.0 * (1 + 0.03 * normal_scores(120)), 0.5 + 0.01 * normal_scores(4)])
    assert lowest_normal(rate).mean == pytest.approx(2.0, rel=0.005)


@pytest.mark.parametrize(("variation", "quantile_used"), [(-0.0005, False), (0.0005, True)])
def test_published_rule_turns_to_the_quantile_above_5_4_per_cent(variation, quantile_used):
    assert LARGEST_MIXTURE_CV == 0.054  # Chabot, Steffensen & Farrell 2016, J. Fish Biol. 88:81
    rate = 2.0 * (1.0 + (0.054 + variation) * normal_scores(100))
    value, estimator = resting_rate(rate, quantile=0.25)
    if quantile_used:
        assert (value, estimator) == (np.quantile(rate, 0.25), "quantile 0.25")
    else:
        assert value == pytest.approx(2.0, rel=1e-3)
        assert estimator == "lowest normal distribution"
