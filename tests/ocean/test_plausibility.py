"""Values that cannot be what their file says they are."""

import numpy as np
import pytest

from habitat import seawater
from habitat.errors import InputError
from habitat.ocean import open_ocean

DEPTH = np.array([5.0, 50.0, 300.0, 800.0])
TEMPERATURE = np.array([20.0, 15.0, 9.0, 5.0])
SALINITY = np.array([35.0, 34.8, 34.6, 34.5])
OXYGEN = np.array([220.0, 180.0, 20.0, 15.0])  # umol/kg


@pytest.fixture
def cast(write):
    """Open a cast of four samples with some of its values or headings changed."""

    def opener(depth=DEPTH, temperature=TEMPERATURE, salinity=SALINITY, oxygen=OXYGEN, unit="umol/kg", degrees="degC"):
        lines = [f"depth [m],temperature [{degrees}],salinity,oxygen [{unit}],latitude,longitude"]
        columns = zip(depth, temperature, salinity, oxygen, strict=True)
        lines += [",".join(repr(float(v)) for v in row) + ",10,-120" for row in columns]
        return open_ocean([write("\n".join(lines))])

    return opener


def _in(unit):
    pressure = seawater.pressure_from_depth(DEPTH, 10.0)
    return seawater.concentration_to(OXYGEN, TEMPERATURE, SALINITY, pressure, -120.0, 10.0, unit=unit)


@pytest.mark.parametrize(
    ("true", "claimed"),
    [
        ("ml/l", "umol/kg"),
        ("mg/l", "umol/kg"),
        ("mol/m3", "umol/kg"),
        ("umol/kg", "ml/l"),
        ("umol/l", "ml/l"),
        ("ml/l", "% saturation"),
        ("umol/kg", "kPa"),
        ("% saturation", "ml/l"),
        ("mol/m3", "ml/l"),
        ("umol/kg", "mol/m3"),
    ],
)
def test_wrong_oxygen_unit_is_refused_and_the_right_one_named(cast, true, claimed):
    values = _in(true)
    with pytest.raises(InputError, match="of saturation near the surface") as caught:
        cast(oxygen=values, unit=claimed)
    message = str(caught.value)
    assert f"oxygen from {values.min():.4g} to {values.max():.4g} in '{claimed}'" in message
    named = message.split("the unit may be ")[1].split(": correct")[0].split(" or ")
    assert true in named
    assert claimed not in named


@pytest.mark.parametrize("unit", ["umol/kg", "umol/l", "ml/l", "mg/l", "mol/m3", "% saturation", "kPa"])
def test_right_units_pass_without_a_remark(cast, unit):
    columns = cast(oxygen=_in(unit), unit=unit)
    assert columns.attrs["suspicious"] == []
    np.testing.assert_allclose(columns["oxygen"][0], OXYGEN, rtol=1e-9)


@pytest.mark.parametrize(("true", "claimed"), [("kPa", "umol/kg"), ("umol/kg", "% saturation")])
def test_unit_that_gives_strange_but_possible_values_is_pointed_out(cast, true, claimed):
    (sentence,) = cast(oxygen=_in(true), unit=claimed).attrs["suspicious"]
    assert "if the unit is wrong, it may be" in sentence
    assert true in sentence.split("it may be ")[1]


def test_a_surface_without_oxygen_that_no_unit_explains_is_kept(cast):
    columns = cast(oxygen=[1e-4, 0.0, 0.0, 0.0])
    assert any("almost no oxygen near the surface" in sentence for sentence in columns.attrs["suspicious"])
    assert float(columns["oxygen"][0, 0]) == 1e-4


def test_a_deep_cast_without_oxygen_passes(cast):
    columns = cast(depth=DEPTH + 200, oxygen=[2.0, 1.0, 0.0, 0.5])
    assert columns.attrs["suspicious"] == []


def test_a_deep_cast_in_the_wrong_unit_is_refused(cast):
    with pytest.raises(InputError, match="oxygen from 15 to 220 in 'ml/l'"):
        cast(depth=DEPTH + 200, unit="ml/l")


def test_a_surface_far_above_saturation_is_refused(cast):
    # 620 umol/kg is 2.75 times the 225.6 umol/kg that the water holds: below 300 %, but no surface is like that
    with pytest.raises(InputError, match=r"would be 27. % of saturation near the surface; .*check the variable"):
        cast(oxygen=[620.0, 500.0, 400.0, 300.0])


def test_impossible_values_below_a_possible_surface(cast):
    with pytest.raises(InputError, match="75 % of all samples are above 300 %"):
        cast(oxygen=[220.0, 5000.0, 5000.0, 5000.0])


def test_a_few_odd_values_are_kept_and_told(cast):
    many = 40
    oxygen = np.full(many, 200.0)
    oxygen[20], oxygen[30] = 1500.0, -0.5
    salinity = np.full(many, 35.0)
    salinity[10] = 55.0
    temperature = np.full(many, 12.0)
    temperature[11] = 46.0
    columns = cast(np.arange(many) * 10.0, temperature, salinity, oxygen)
    assert columns.attrs["suspicious"] == [
        "temperature: 1 values outside -3 to 45 degC were kept (from 12 to 46)",
        "salinity: 1 values outside 0 to 50 were kept (from 35 to 55)",
        "oxygen: 1 samples above 300 % of saturation were kept",
        "oxygen: 1 values below zero, down to -0.5 umol/kg, were kept",
    ]


@pytest.mark.parametrize(
    ("values", "degrees", "message"),
    [
        (TEMPERATURE + 273.15, "degC", r"median of 285.1 degC \(unit 'degC'\).*looks like kelvin labelled 'degC'"),
        (TEMPERATURE, "K", r"median of -261.1 degC \(unit 'K'\).*looks like degC labelled 'K'"),
        (TEMPERATURE * 1.8 + 32, "degC", "median of 53.6 degC.*looks like Fahrenheit"),
        (TEMPERATURE * 1000, "degC", "median of 1.2e.04 degC.*expected values between -3 and 45 degC.*check the unit"),
    ],
)
def test_impossible_temperatures(cast, values, degrees, message):
    with pytest.raises(InputError, match=message):
        cast(temperature=values, degrees=degrees)


def test_impossible_salinities(cast):
    with pytest.raises(InputError, match=r"salinities with a median of 3470.*expected values between 0 and 50"):
        cast(salinity=SALINITY * 100)


def test_salinity_per_kilogram_is_pointed_out(cast):
    columns = cast(salinity=SALINITY / 1000)
    assert columns.attrs["suspicious"][0].startswith("salinity: the greatest value is 0.035; if it is kg of salt")


@pytest.mark.parametrize("role", ["temperature", "salinity", "oxygen"])
def test_every_value_missing(cast, role):
    with pytest.raises(InputError, match=f"every {role} value is missing: 4 fill value -999; expected measured {role}"):
        cast(**{role: np.full(4, -999.0)})


def test_every_depth_missing(cast):
    with pytest.raises(InputError, match="every depth value is missing: 4 missing in the file"):
        cast(depth=[np.nan] * 4)


def test_never_all_three_together(cast):
    oxygen, salinity = OXYGEN.copy(), SALINITY.copy()
    oxygen[:2] = salinity[2:] = -999
    with pytest.raises(InputError, match="no sample has temperature, salinity and oxygen together"):
        cast(oxygen=oxygen, salinity=salinity)


@pytest.mark.parametrize(
    ("latitude", "longitude", "message"),
    [
        ("91", "-120", "latitude 91; expected degrees between -90 and 90"),
        ("-120", "10", "latitude -120; .*exchanged"),
        ("10", "361", "longitude 361; expected degrees between -360 and 360"),
        ("", "10", "1 of 1 casts have no latitude, the first is 'cast'"),
    ],
)
def test_impossible_positions(write, latitude, longitude, message):
    head = "depth [m],temperature [degC],salinity,oxygen [umol/kg],latitude,longitude\n"
    with pytest.raises(InputError, match=message):
        open_ocean([write(f"{head}5,20,35,220,{latitude},{longitude}\n")])


def test_mixed_signs_of_depth(cast):
    with pytest.raises(InputError, match=r"'depth \[m\]': depth has both signs, from -50 to 800 m; .*check the sign"):
        cast(depth=[5.0, -50.0, 300.0, 800.0])


def test_a_sensor_just_below_the_surface_may_read_negative(cast):
    columns = cast(depth=[-0.4, 50.0, 300.0, 800.0])
    assert float(columns["depth"][0, 0]) == -0.4
    assert columns.attrs["suspicious"] == ["depth: slightly negative values down to -0.4 m were kept"]
