"""Tables of rates: units, masses, order, what is left out and counted, and what is refused."""

import numpy as np
import pytest

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.trials.rates import read_rates

HEAD = "trial,po2 [kPa],rate [umol/g/h],temperature [degC]\n"
ROWS = "a,20,1.5,10\na,5,1.4,10.2\na,-0.05,-0.01,10.1\n"


def table(**columns):
    """CSV text from heading to fields."""
    rows = zip(*columns.values(), strict=True)
    return "\n".join(",".join(str(field) for field in row) for row in [columns.keys(), *rows]) + "\n"


def same(left, right):
    """Whether two readings of the same trials agree."""
    for one, other in zip(left, right, strict=True):
        assert (one.name, one.individual, one.excluded) == (other.name, other.individual, other.excluded)
        np.testing.assert_allclose(one.po2, other.po2, rtol=1e-9)
        np.testing.assert_allclose(one.rate, other.rate, rtol=1e-9)
        assert one.temperature == pytest.approx(other.temperature, rel=1e-9)
    return True


def test_plain_table(write):
    (trial,) = read_rates(write(HEAD + ROWS))
    assert (trial.name, trial.individual, trial.mass, trial.salinity, trial.time) == ("a", "a", None, None, None)
    assert trial.po2.tolist() == [20, 5, -0.05]  # negative readings tell of an offset, and stay
    assert trial.rate.tolist() == [1.5, 1.4, -0.01]
    assert trial.temperature == pytest.approx(10.1)
    assert trial.excluded == {}


def test_optional_columns(write):
    text = table(
        trial=["a", "b", "a"],
        individual=["cod 1", "cod 2", ""],
        **{"po2 [kPa]": [1, 2, 3], "rate [umol/g/h]": [4, 5, 6], "temperature [degC]": [7, 8, 7]},
        **{"mass [kg]": [0.05, "", 0.05], "salinity": [34, "", 35], "time [min]": [120, 0, 60]},
    )
    first, second = read_rates(write(text))
    assert (first.individual, first.mass, first.salinity) == ("cod 1", pytest.approx(50), 34.5)
    assert first.po2.tolist() == [3, 1]  # in the order of time
    np.testing.assert_allclose(first.time, [0, 1])
    assert (second.individual, second.mass, second.salinity) == ("cod 2", None, None)


# --- laws --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("unit", "factor"),
    [
        ("mg/kg/h", 31.9988),  # molar mass of O2 [g/mol]
        ("ml/g/h", 22.3916e-3),  # real gas at 0 degC, 1 atm [l/mol] (SCOR WG 142)
        ("nmol/g/min", 1000 / 60),
        ("umol g-1 h-1", 1.0),
    ],
)
def test_rate_units_change_nothing(write, unit, factor):
    values = np.array([1.5, 1.4, 0.2])
    plain = {"trial": ["a"] * 3, "po2 [kPa]": [20, 5, 0.5], "temperature [degC]": [10] * 3}
    reference = read_rates(write(table(**plain, **{"rate [umol/g/h]": values})))
    other = read_rates(write(table(**plain, **{f"rate [{unit}]": values * factor}), "other.csv"))
    np.testing.assert_allclose(other[0].rate, reference[0].rate, rtol=1e-6)  # 44.6596 umol/ml has six digits


def test_rates_of_whole_animals_are_divided_by_mass(write):
    text = "trial,po2 [mmHg],rate [mg/h],temperature [K],mass [g]\na,150,0.475,283.15,50\na,75,0.475,283.15,\n"
    (trial,) = read_rates(write(text))
    np.testing.assert_allclose(trial.rate, 0.296886, atol=1e-6)  # 31.9988 g/mol: 9.5 mg/kg/h are 0.296886 umol/g/h
    np.testing.assert_allclose(trial.po2, [19.99836, 9.99918], atol=1e-5)  # 1 mmHg is 0.133322 kPa
    assert trial.temperature == pytest.approx(10)


@pytest.mark.parametrize("unit", ["umol/l", "ml/l", "mg/l", "umol/kg", "% saturation", "mbar"])
def test_oxygen_in_any_unit_is_the_po2_it_stands_for(write, unit):
    po2 = np.array([20.0, 5.0, 0.5])
    plain = {"trial": ["a"] * 3, "rate [umol/g/h]": [2, 2, 1], "temperature [degC]": [12] * 3, "salinity": [35] * 3}
    oxygen = seawater.po2_to(po2, 12.0, 35.0, 0.0, unit=unit)
    reference = read_rates(write(table(**plain, **{"po2 [kPa]": po2})))
    assert same(read_rates(write(table(**plain, **{f"oxygen [{unit}]": oxygen}), "other.csv")), reference)


def test_order_of_rows_is_irrelevant_where_time_is_given(write):
    rng = np.random.default_rng(3)
    lines = [f"{name},{20 - hour},{rng.normal(2, 0.1)},10,{hour}" for name in "ab" for hour in range(10)]
    head = HEAD.strip() + ",time [h]\n"
    reference = read_rates(write(head + "\n".join(lines)), settling_hours=2)
    mixed = [lines[0], *rng.permutation(lines[1:])]  # the first row says which trial comes first
    assert same(read_rates(write(head + "\n".join(mixed), "mixed.csv"), settling_hours=2), reference)
    assert reference[1].po2.tolist() == [20 - hour for hour in range(2, 10)]


# --- what is left out --------------------------------------------------------------------------------------------


def test_missing_values_are_counted(write):
    (trial,) = read_rates(write(HEAD + "a,,1,10\na,1,NA,10\na,2,1,\na,inf,1,10\na,3,1,10\n"))
    assert trial.po2.tolist() == [3]
    assert trial.excluded == {"missing value": 4}


def test_settling_is_counted_from_the_first_row_of_the_trial(write):
    text = HEAD.replace("\n", ",time\n") + "".join(
        f"a,{po2},1,10,2024-05-27T{hour:02d}:00\n" for po2, hour in [("", 8), (19, 9), (18, 10), (17, 11)]
    )
    (trial,) = read_rates(write(text), settling_hours=2)
    assert trial.po2.tolist() == [18, 17]
    np.testing.assert_allclose(trial.time, [2, 3], atol=1e-8)
    assert trial.excluded == {"missing value": 1, "settling": 1}


# --- what is refused ---------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("trial,rate [mg/h]\na,1\n", r"no columns 'temperature', 'po2'; .*'temperature \[degC\]', 'po2 \[kPa\]'"),
        (HEAD.replace(" [kPa]", "") + ROWS, r"heading 'po2' states no unit; .*'po2 \[kPa\]'"),
        (HEAD.replace("kPa", "mg/l") + ROWS, r"'po2 \[mg/l\]': unit 'mg/l' cannot.*'oxygen \[mg/l\]'"),
        (
            HEAD.replace("umol/g/h", "umol/l") + ROWS,
            r"'rate \[umol/l\]': unit 'umol/l' .*expected oxygen per body mass",
        ),
        (HEAD.replace("umol/g/h", "umol/h") + ROWS, r"whole animals \('rate \[umol/h\]'\), but no column 'mass'"),
        (HEAD.replace("po2 [kPa]", "oxygen [mg/l]") + ROWS, "no column 'salinity'"),
        (HEAD.replace("po2 [kPa]", "oxygen [m]") + ROWS, r"'oxygen \[m\]': unit 'm' is not one of dissolved oxygen"),
        (HEAD + ROWS.replace("1.4", "low"), r"'low' in line 3, column 'rate \[umol/g/h\]', is not a number"),
        (HEAD + ROWS.replace("10.2", "16"), "trial 'a': temperatures from 10 to 16 degC in one trial"),
        (HEAD + "a,,1,10\na,1,,10\n", r"trial 'a': nothing is left of the 2 rows \(missing value 2\)"),
        (
            HEAD + "a,20,5000,10\na,5,4000,10\n",
            r"no rate below 4000 umol/g/h; .*'umol/g/h', which is probably 'umol/kg/h'",
        ),
        (HEAD.replace("kPa", "kPa") + "a,155,1,10\na,20,1,10\n", "PO2 up to 155 kPa"),
    ],
)
def test_unusable_tables(write, text, message):
    with pytest.raises(InputError, match=message):
        read_rates(write(text))


def test_a_trial_is_of_one_animal(write):
    head = HEAD.replace("\n", ",individual,mass [g]\n")
    with pytest.raises(InputError, match="trial 'a': individuals 'x' and 'y' in one trial; expected one animal"):
        read_rates(write(head + "a,20,1,10,x,5\na,10,1,10,y,5\n"))
    with pytest.raises(InputError, match="trial 'a': masses 5 g and 6 g in one trial"):
        read_rates(write(head + "a,20,1,10,x,5\na,10,1,10,x,6\n"))
    with pytest.raises(InputError, match="trial 'a': mass -5 g; expected a mass above 0"):
        read_rates(write(head + "a,20,1,10,x,-5\n"))


def test_whole_animals_need_their_mass(write):
    head = HEAD.replace("umol/g/h", "mg/h").replace("\n", ",mass [g]\n")
    with pytest.raises(InputError, match="trial 'b': no mass for the rate of a whole animal in line 3"):
        read_rates(write(head + "a,20,1,10,5\nb,20,1,10,\n"))
    with pytest.raises(InputError, match="'mg/h', and that of the mass"):
        read_rates(write(head + "a,20,1,10,0.00001\n"))


def test_settling_needs_time_and_leaves_something(write):
    with pytest.raises(InputError, match=r"no column 'time'; expected the heading 'time \[h\]'"):
        read_rates(write(HEAD + ROWS), settling_hours=1)
    with pytest.raises(InputError, match=r"nothing is left of the 1 rows \(settling 1\)"):
        read_rates(write(HEAD.replace("\n", ",time [h]\n") + "a,20,1,10,0\n"), settling_hours=1)
    with pytest.raises(UnitError, match=r"'time \[kPa\]': unit 'kPa' cannot be converted"):
        read_rates(write(HEAD.replace("\n", ",time [kPa]\n") + "a,20,1,10,0\n"), settling_hours=1)
