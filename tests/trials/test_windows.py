"""Windows: how phases are cut, the line through each, and which are left out."""

import numpy as np
import pytest
from scipy.stats import linregress

from habitat.errors import InputError
from habitat.trials.windows import Phase, Window, window_slopes

CAPACITANCE = 13.4476  # umol/l/kPa at 10 degC, S 35 (SCOR WG 142, doi:10.13155/45915)


def straight(minutes=60, fall=6.0):
    """Time, PO2 and concentration of a straight trace with a reading a minute."""
    hours = np.arange(minutes + 1) / 60
    po2 = 20 - fall * hours
    return hours, po2, po2 * CAPACITANCE


def whole(hours):
    return [Phase(slice(0, hours.size))]


def test_equal_time():
    hours, po2, oxygen = straight()
    result = window_slopes(hours, po2, oxygen, whole(hours), Window("time", 10))
    np.testing.assert_allclose(result.slope, -6 * CAPACITANCE)
    np.testing.assert_allclose(result.error, 0, atol=1e-9)
    np.testing.assert_allclose(result.time * 60, [4.5, 14.5, 24.5, 34.5, 44.5, 55])  # the last holds the last reading
    np.testing.assert_allclose(result.po2, 20 - 6 * result.time)
    assert result.used.all()
    assert result.excluded == {}


@pytest.mark.parametrize(("size", "number"), [(10, 6), (9, 6), (25, 2), (31, 1), (119, 1), (123, 0)])
def test_windows_share_a_phase_equally(size, number):
    hours, po2, oxygen = straight()
    for window in (Window("time", size, 3), Window("oxygen", size / 10, 3)):  # 0.1 kPa a minute
        assert window_slopes(hours, po2, oxygen, whole(hours), window).slope.size == number


def test_kinds_agree_on_a_straight_trace():
    hours, po2, oxygen = straight()
    by_time = window_slopes(hours, po2, oxygen, whole(hours), Window("time", 10))
    by_oxygen = window_slopes(hours, po2, oxygen, whole(hours), Window("oxygen", 1.0))
    for name in ("time", "po2", "slope"):
        np.testing.assert_allclose(getattr(by_oxygen, name), getattr(by_time, name))


def test_slope_and_error_are_those_of_least_squares():
    rng = np.random.default_rng(1)
    hours, po2, oxygen = straight()
    oxygen = oxygen + rng.normal(0, 0.5, oxygen.size)
    result = window_slopes(hours, po2, oxygen, whole(hours), Window("time", 30))
    for rows, slope, error in zip([slice(0, 30), slice(30, 61)], result.slope, result.error, strict=True):
        reference = linregress(hours[rows], oxygen[rows])
        assert slope == pytest.approx(reference.slope)
        assert error == pytest.approx(reference.stderr)


def test_error_is_the_scatter_of_slopes():
    rng = np.random.default_rng(2)
    hours, po2, oxygen = straight(2000)
    noisy = oxygen + rng.normal(0, 0.5, oxygen.size)
    result = window_slopes(hours, po2, noisy, whole(hours), Window("time", 20))
    scatter = (result.slope + 6 * CAPACITANCE) / result.error
    assert scatter.size == 100
    assert np.std(scatter) == pytest.approx(1.06, abs=0.2)  # Student's t with 18 degrees of freedom: sqrt(18 / 16)


def test_one_stray_reading_ends_no_oxygen_window():
    hours, po2, oxygen = straight()
    stray = po2.copy()
    stray[12] = 14.0
    cut = window_slopes(hours, stray, oxygen, whole(hours), Window("oxygen", 1.0))
    plain = window_slopes(hours, po2, oxygen, whole(hours), Window("oxygen", 1.0))
    np.testing.assert_allclose(cut.time, plain.time)


def test_phases_are_never_joined_and_each_loss_is_counted():
    hours, po2, oxygen = straight()
    phases = [
        Phase(slice(0, 20), "settling"),
        Phase(slice(20, 24)),
        Phase(slice(24, 40)),
        Phase(slice(40, 61), "flush"),
    ]
    result = window_slopes(hours, po2, oxygen, phases, Window("time", 10))
    np.testing.assert_allclose(result.time * 60, [31.5])  # 16 min are no two windows of 10 min
    assert result.excluded == {"settling": 2, "phase shorter than half a window": 1, "flush": 2}
    assert np.flatnonzero(result.used).tolist() == list(range(24, 40))


def test_few_points_and_gaps():
    hours, po2, oxygen = straight()
    kept = np.r_[0:20, 21:30:4, 30:33, 39:61]  # 3 readings in the third window, a gap in the fourth
    result = window_slopes(hours[kept], po2[kept], oxygen[kept], whole(kept), Window("time", 10, 4))
    assert result.excluded == {"fewer than 4 points": 1, "crosses a gap": 1}
    np.testing.assert_allclose(result.slope, [-6 * CAPACITANCE] * 4)


def test_readings_at_one_time_count_once():
    hours = np.repeat([0.0, 1.0, 2.0], 10)
    result = window_slopes(hours, 20 - hours, 20 - hours, whole(hours), Window("time", 120, 4))
    assert result.excluded == {"fewer than 4 points": 1}


def test_rising_oxygen_makes_no_window_of_falling_oxygen():
    hours, po2, oxygen = straight(fall=-6)
    result = window_slopes(hours, po2, oxygen, whole(hours), Window("oxygen", 1.0))
    assert result.excluded == {"phase shorter than half a window": 1}
    assert result.slope.shape == (0,)


@pytest.mark.parametrize(
    ("values", "message"),
    [
        (("volume", 1.0), "windows of equal 'volume'; expected 'time' or 'oxygen'"),
        (("time", 0.0), "window size 0; expected minutes"),
        (("time", float("nan")), "window size nan"),
        (("time", 5.0, 2), "windows of 2 points; expected 3 or more"),
    ],
)
def test_unusable_windows(values, message):
    with pytest.raises(InputError, match=message):
        Window(*values)
