"""Raw traces: known rates recovered, background, flushes, settling, units, and what is refused."""

import numpy as np
import pytest

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.trials.traces import oxygen_per_litre, read_traces
from habitat.trials.windows import Window

HEAD = "trial,time [min],oxygen [mg/l],temperature [degC],salinity\n"
CHAMBERS = "trial,volume [ml],mass [g]\na,1000,50\n"
TEN_MINUTES = Window("time", 10)
PLACE = (10.0, 35.0)  # degC, practical salinity

# A fall of 0.5 mg/l/h in 1 l around 50 g is 9.5 mg/kg/h, which is 0.296886 umol/g/h: -slope (V - M/rho)/M.
SLOPE, RATE = -0.5, 0.29688613323


def lines(minutes, oxygen, name="a"):
    return "".join(f"{name},{t},{c},10,35\n" for t, c in zip(minutes, oxygen, strict=True))


def straight(slope=SLOPE, minutes=60, start=8.0):
    time = np.arange(minutes + 1)
    return time, start + slope * time / 60


@pytest.fixture
def read(write):
    """Read a trace and a chamber table, given as text."""

    def reader(trace, chambers=CHAMBERS, **options):
        return read_traces(
            write(trace, "trace.csv"), write(chambers, "chambers.csv"), **{"window": TEN_MINUTES} | options
        )

    return reader


def test_published_rate(read):
    (trial,) = read(HEAD + lines(*straight()))
    np.testing.assert_allclose(trial.rate, RATE, rtol=1e-9)
    np.testing.assert_allclose(trial.time * 60, [4.5, 14.5, 24.5, 34.5, 44.5, 55])
    expected = (8 + SLOPE * trial.time) / 31.9988 * 1000 / seawater.capacitance(*PLACE)  # 31.9988 g/mol
    np.testing.assert_allclose(trial.po2, expected)
    assert (trial.name, trial.individual, trial.mass) == ("a", "a", 50)
    assert (trial.temperature, trial.salinity) == PLACE
    assert trial.excluded == {}


# --- laws --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("unit", ["umol/l", "ml/l", "umol/kg", "% saturation", "kPa", "mbar"])
def test_units_of_oxygen_change_nothing(read, unit):
    minutes, oxygen = straight()
    one = float(oxygen_per_litre(1.0, *PLACE, unit=unit))
    values = oxygen_per_litre(oxygen, *PLACE, unit="mg/l") / one
    (trial,) = read(HEAD.replace("mg/l", unit) + lines(minutes, values))
    (reference,) = read(HEAD + lines(minutes, oxygen))
    np.testing.assert_allclose(trial.rate, reference.rate, rtol=1e-9)
    np.testing.assert_allclose(trial.po2, reference.po2, rtol=1e-9)


def test_concentrations_agree_with_those_of_seawater():
    for unit in ("umol/kg", "% saturation", "kPa", "ml/l"):
        per_kilogram = seawater.concentration_from(50.0, *PLACE, 0.0, unit=unit)
        expected = per_kilogram * seawater.potential_density(*PLACE, 0.0) / 1000
        # per-litre and per-kilogram solubility are separate fits of one data set, 0.02 % apart here
        assert oxygen_per_litre(50.0, *PLACE, unit=unit) == pytest.approx(float(expected), rel=5e-4)


def test_times_in_any_unit_and_order_give_the_same(read):
    rng = np.random.default_rng(4)
    minutes, oxygen = straight()
    oxygen = oxygen + rng.normal(0, 0.01, oxygen.size)
    (reference,) = read(HEAD + lines(minutes, oxygen), settling_hours=0.5)
    assert reference.excluded == {"settling": 3}
    mixed = rng.permutation(minutes.size)
    stamps = [f"2024-05-27T08:{m:02d}:00" if m < 60 else "2024-05-27T09:00:00" for m in minutes]
    for head, times in (
        ("time [min]", minutes),
        ("time [s]", minutes * 60),
        ("time [h]", minutes / 60),
        ("time", stamps),
    ):
        text = HEAD.replace("time [min]", head) + lines(np.array(times)[mixed], oxygen[mixed])
        (trial,) = read(text, settling_hours=0.5)
        np.testing.assert_allclose(trial.rate, reference.rate, rtol=1e-6)  # stamps are counted from 1970
        np.testing.assert_allclose(trial.time, reference.time, atol=1e-8)
        assert trial.excluded == reference.excluded


def test_a_known_rate_is_recovered_from_noise(read):
    rng = np.random.default_rng(5)
    minutes, oxygen = straight(minutes=600)
    (trial,) = read(HEAD + lines(minutes, oxygen + rng.normal(0, 0.005, oxygen.size)))
    assert trial.rate.size == 60
    # standard error of one slope: 0.005 mg/l / sqrt(sum of squares of -4.5..4.5 min) = 0.033 mg/l/h, 6.6 % of 0.5
    assert trial.rate.mean() == pytest.approx(RATE, rel=4 * 0.066 / np.sqrt(60))
    assert trial.rate.std() / RATE == pytest.approx(0.066, rel=0.3)


@pytest.mark.parametrize("after", [-0.3, 0.05])
def test_background_is_subtracted_as_a_slope_interpolated_in_time(read, after):
    before, hours = -0.1, 10.0
    minutes = np.arange(601)
    elapsed = minutes / 60
    # the integral of the animal's slope and of a background that changes in a straight line
    oxygen = 12 + SLOPE * elapsed + before * elapsed + (after - before) * elapsed**2 / (2 * hours)
    chambers = "trial,volume [ml],mass [g],background_before [mg/l/h],background_after [ug/l/min]\n"
    (trial,) = read(HEAD + lines(minutes, oxygen), chambers + f"a,1000,50,{before},{after * 1000 / 60}\n")
    np.testing.assert_allclose(trial.rate, RATE, rtol=1e-6)


@pytest.mark.parametrize("column", ["background_before", "background_after"])
def test_one_background_holds_throughout(read, column):
    chambers = CHAMBERS.replace("[g]", f"[g],{column} [kPa/h]").replace("50", "50,-0.2")
    (trial,) = read(HEAD + lines(*straight()), chambers)
    fall = 0.2 * float(seawater.capacitance(*PLACE))  # umol/l/h
    np.testing.assert_allclose(trial.rate, RATE - fall * 0.95 / 50)  # 0.95 l of water around 50 g


def test_window_kinds_agree_on_a_straight_trace(read):
    minutes, oxygen = straight(slope=-4.0)
    (by_time,) = read(HEAD + lines(minutes, oxygen))
    fall = float(by_time.po2[0] - by_time.po2[1])
    (by_oxygen,) = read(HEAD + lines(minutes, oxygen), window=Window("oxygen", fall))
    np.testing.assert_allclose(by_oxygen.rate, by_time.rate)
    np.testing.assert_allclose(by_oxygen.po2, by_time.po2)


# --- what is left out --------------------------------------------------------------------------------------------


def sawtooth(first=0):
    """Readings of half an hour closed, 10 min of flush, half an hour closed."""
    minutes = np.arange(71)
    closed = np.where(minutes <= 30, minutes, np.where(minutes < 40, 3 * (40 - minutes), minutes - 40))
    return minutes + first, 8 + SLOPE * closed / 60


@pytest.mark.parametrize(("first", "head"), [(0, "time [min]"), (100, "time [min]"), (0, "time")])
def test_flushes_are_left_out(read, first, head):
    minutes, oxygen = sawtooth(first)
    stamps = [f"2024-05-27T{8 + m // 60:02d}:{m % 60:02d}" for m in minutes]
    text = HEAD.replace("time [min]", head) + lines(minutes if "[" in head else stamps, oxygen)
    chambers = f"trial,volume [ml],mass [g],kind,flush [min]\na,1000,50,intermittent,{first + 30}-{first + 40}\n"
    (trial,) = read(text, chambers, window=Window("time", 15))
    np.testing.assert_allclose(trial.rate, RATE, rtol=1e-6)
    assert trial.rate.size == 4
    assert trial.excluded == {"flush": 1}


def test_a_flush_between_two_readings_parts_the_phases(read):
    minutes, oxygen = sawtooth()
    open_chamber = (minutes >= 30) & (minutes <= 40)
    chambers = "trial,volume [ml],mass [g],flush [min]\na,1000,50,30-40\n"
    (trial,) = read(HEAD + lines(minutes[~open_chamber], oxygen[~open_chamber]), chambers, window=Window("time", 20))
    np.testing.assert_allclose(trial.rate, RATE)
    assert (trial.rate.size, trial.excluded) == (2, {})


def test_missing_readings_are_counted_and_leave_a_gap(read):
    minutes, oxygen = straight()
    texts = ["" if 12 <= minute < 18 else value for minute, value in zip(minutes, oxygen, strict=True)]
    (trial,) = read(HEAD + lines(minutes, texts), window=Window("time", 10, 4))
    assert trial.excluded == {"missing reading": 6, "crosses a gap": 1}
    np.testing.assert_allclose(trial.rate, RATE)


def test_trials_stay_apart(read):
    minutes, oxygen = straight()
    text = HEAD + lines(minutes, oxygen, "b") + lines(minutes, 8 + 2 * (oxygen - 8), "a")
    chambers = "trial,volume [l],mass [kg],individual\na,1,0.05,cod 1\nb,1,0.05,cod 2\nunused,1,0.05,cod 3\n"
    second, first = read(text, chambers)
    assert (first.name, first.individual, second.name, second.individual) == ("a", "cod 1", "b", "cod 2")
    np.testing.assert_allclose(first.rate, 2 * RATE)
    np.testing.assert_allclose(second.rate, RATE)


# --- what is refused ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("oxygen [mg/l]", "po2 [kPa]"), r"no column 'oxygen'; expected the heading 'oxygen \[umol/l\]'"),
        (("oxygen [mg/l]", "oxygen"), "heading 'oxygen' states no unit"),
        (("oxygen [mg/l]", "oxygen [m]"), r"column 'oxygen \[m\]': unit 'm' is not one of dissolved oxygen"),
        (("time [min]", "time"), "heading 'time' states no unit"),
        (("a,5,", "a,soon,"), r"'soon' in line 7, column 'time \[min\]', is not a number"),
        (("a,5,", "b,5,"), r"chambers\.csv: trial 'b' has no chamber; expected a row for each trial"),
        ((",10,35\na,6,", ",20,35\na,6,"), "trial 'a': temperatures from 10 to 20 degC in one trial"),
        (("oxygen [mg/l]", "oxygen [atm]"), "trial 'a': PO2 up to .* kPa; expected at most 101 kPa"),
    ],
)
def test_unusable_traces(read, change, message):
    with pytest.raises((InputError, UnitError), match=message):
        read((HEAD + lines(*straight())).replace(*change))


def test_trials_of_which_nothing_is_left(read):
    text = HEAD + lines(*straight())
    with pytest.raises(InputError, match=r"trial 'a': no window of its 61 readings can be used \(settling 6\)"):
        read(text, settling_hours=2)
    with pytest.raises(InputError, match=r"\(fewer than 20 points 6\); expected at least one; choose other windows"):
        read(text, window=Window("time", 10, 20))
    with pytest.raises(InputError, match=r"no window of its 2 readings can be used \(missing reading 2\)"):
        read(HEAD + "a,0,,10,35\na,1,,10,35\n")
    with pytest.raises(
        InputError, match=r"no window of its 1 readings can be used \(phase shorter than half a window 1\)"
    ):
        read(HEAD + "a,0,8,10,35\n")


def test_flushes_on_another_clock(read):
    chambers = "trial,volume [ml],mass [g],flush [h]\na,1000,50,30-40\n"
    with pytest.raises(InputError, match=r"trial 'a': no flush period falls into the trace of 1 h; .*'flush \[min\]'"):
        read(HEAD + lines(*straight()), chambers)


def test_the_error_of_each_slope_is_kept(read):
    minutes, oxygen = straight()
    noisy = oxygen + np.random.default_rng(4).normal(0, 0.01, oxygen.size)
    (trial,) = read(HEAD + lines(minutes, noisy))
    # Least squares over 10 min, 0.01 mg/l of noise: sd / sqrt(sum of squared time) = 0.0011 mg/l/min.
    expected = 0.01 / np.sqrt(82.5) * 60 / 31.9988 * 1000 * 0.95 / 50
    assert np.median(trial.rate_error) == pytest.approx(expected, rel=0.4)
    assert np.abs(trial.rate - RATE).max() < 4 * trial.rate_error.max()
