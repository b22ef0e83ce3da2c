"""Oxygen in seawater: laws, and every kind of container."""

import inspect

import dask.array
import gsw
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from habitat import seawater
from habitat.errors import UnitError
from habitat.seawater import (
    absolute_salinity,
    air_saturated_po2,
    capacitance,
    concentration_at_saturation,
    concentration_from,
    concentration_from_po2,
    concentration_to,
    depth_from_pressure,
    hydrostatic_factor,
    its90_from_ipts68,
    po2_from,
    po2_from_concentration,
    po2_to,
    potential_density,
    potential_temperature,
    practical_salinity_from_absolute,
    pressure_from_depth,
    solubility,
    temperature_from_conservative,
    temperature_from_potential,
)

# --- laws --------------------------------------------------------------------------------------------------------

OXYGEN_UNITS = (
    "umol/kg",
    "umol/l",
    "mmol/m3",
    "mol/m3",
    "ml/l",
    "mg/l",
    "% saturation",
    "kPa",
    "mbar",
    "hPa",
    "atm",
    "mmHg",
)

temperatures, salinities, pressures = st.floats(-2.0, 40.0), st.floats(0.0, 42.0), st.floats(0.0, 6000.0)
waters = st.tuples(temperatures, salinities, pressures)
amounts = st.floats(1e-3, 600.0)


@pytest.mark.parametrize("unit", OXYGEN_UNITS)
@given(oxygen=amounts, water=waters)
def test_oxygen_units_round_trip(unit, oxygen, water):
    there = concentration_to(oxygen, *water, unit=unit)
    assert concentration_from(there, *water, unit=unit) == pytest.approx(oxygen, rel=1e-12)


@pytest.mark.parametrize("unit", OXYGEN_UNITS)
@pytest.mark.parametrize("hydrostatic", [True, False])
@given(po2=st.floats(1e-3, 40.0), water=waters)
def test_po2_to_and_from_any_unit_round_trip(unit, hydrostatic, po2, water):
    there = po2_to(po2, *water, unit=unit, hydrostatic=hydrostatic)
    assert po2_from(there, *water, unit=unit, hydrostatic=hydrostatic) == pytest.approx(po2, rel=1e-12)


# Definitions: 1 atm = 101.325 kPa = 760 mmHg; M(O2) = 31.9988 g/mol; 1 ml = 44.6596 umol (1000 / 22.3916 l/mol)
@pytest.mark.parametrize(
    ("unit", "other", "ratio"),
    [
        ("umol/l", "mmol/m3", 1.0),
        ("umol/l", "mol/m3", 1e-3),
        ("umol/l", "ml/l", 1.0 / 44.6596),
        ("umol/l", "mg/l", 31.9988e-3),
        ("kPa", "mbar", 10.0),
        ("kPa", "hPa", 10.0),
        ("kPa", "atm", 1.0 / 101.325),
        ("atm", "mmHg", 760.0),
    ],
)
def test_oxygen_units_stand_in_their_defined_ratio(unit, other, ratio):
    water = 7.0, 34.5, 420.0
    values = [concentration_to(120.0, *water, unit=name) for name in (unit, other)]
    assert values[1] / values[0] == pytest.approx(ratio, rel=1e-6)  # mmHg is defined by the density of mercury


@given(water=waters, longitude=st.floats(-180.0, 360.0), latitude=st.floats(-90.0, 90.0))
def test_per_volume_units_use_the_density_at_the_surface(water, longitude, latitude):
    density = potential_density(*water, longitude, latitude)
    per_litre = concentration_to(100.0, *water, longitude, latitude, unit="umol/l")
    assert per_litre == pytest.approx(100.0 * density / 1000.0, rel=1e-12)


@given(temperature=temperatures, salinity=salinities)
def test_air_saturated_water_at_the_surface_has_the_po2_of_moist_air(temperature, salinity):
    expected = air_saturated_po2(temperature, salinity)
    assert po2_from(100.0, temperature, salinity, 0.0, unit="% saturation") == pytest.approx(expected, rel=1e-9)
    full = solubility(temperature, salinity)
    assert po2_from_concentration(full, temperature, salinity, 0.0) == pytest.approx(expected, rel=1e-12)


@given(oxygen=amounts, times=st.floats(0.0, 100.0), water=waters)
def test_po2_is_proportional_to_oxygen(oxygen, times, water):
    expected = times * po2_from_concentration(oxygen, *water)
    assert po2_from_concentration(times * oxygen, *water) == pytest.approx(expected, rel=1e-12)


@given(po2=st.floats(0.0, 40.0), water=waters)
def test_concentration_from_po2_is_the_inverse(po2, water):
    assert po2_from_concentration(concentration_from_po2(po2, *water), *water) == pytest.approx(po2, rel=1e-12)


@given(temperature=temperatures, pressure=pressures, more=st.floats(1.0, 1000.0))
def test_hydrostatic_factor_is_one_at_the_surface_and_rises(temperature, pressure, more):
    assert hydrostatic_factor(temperature, 0.0) == 1.0
    assert 1.0 <= hydrostatic_factor(temperature, pressure) < hydrostatic_factor(temperature, pressure + more)


@given(oxygen=amounts, water=waters)
def test_hydrostatic_term_can_be_left_out(oxygen, water):
    without = po2_from_concentration(oxygen, *water, hydrostatic=False)
    assert without == po2_from_concentration(oxygen, *water[:2], 0.0)
    assert po2_from_concentration(oxygen, *water) == pytest.approx(without * hydrostatic_factor(water[0], water[2]))


@given(water=waters, place=st.tuples(st.floats(-180.0, 360.0), st.floats(-90.0, 90.0)))
def test_temperature_and_salinity_kinds_round_trip(water, place):
    temperature, salinity, pressure = water
    potential = potential_temperature(temperature, salinity, pressure, *place)
    assert temperature_from_potential(potential, salinity, pressure, *place) == pytest.approx(temperature, abs=1e-8)
    absolute = absolute_salinity(salinity, pressure, *place)
    conservative = gsw.CT_from_t(absolute, temperature, pressure)
    back = temperature_from_conservative(conservative, salinity, pressure, *place)
    assert back == pytest.approx(temperature, abs=1e-8)
    assert practical_salinity_from_absolute(absolute, pressure, *place) == pytest.approx(salinity, abs=1e-9)


@given(pressure=pressures, latitude=st.floats(-90.0, 90.0))
def test_depth_and_pressure_round_trip(pressure, latitude):
    depth = depth_from_pressure(pressure, latitude)
    assert pressure_from_depth(depth, latitude) == pytest.approx(pressure, abs=1e-6)
    assert (
        0.96 * pressure <= depth + 1e-9 <= pressure + 2e-9
    )  # 1 dbar is a little less than a metre, the less the deeper


def test_ipts68_is_the_warmer_scale():
    assert its90_from_ipts68(10.0) == pytest.approx(9.9976, abs=1e-6)  # Saunders 1990: t68 = 1.00024 t90


# Relative change of PO2 per kelvin at a fixed amount per litre, from the published solubility and vapour pressure, S 35
@pytest.mark.parametrize(
    ("temperature", "percent"), [(2.0, 2.46), (5.0, 2.31), (10.0, 2.09), (15.0, 1.88), (20.0, 1.69), (25.0, 1.51)]
)
def test_warming_at_fixed_concentration_raises_po2(temperature, percent):
    low, high = (150.0 / capacitance(temperature + step, 35.0) for step in (-0.01, 0.01))
    assert 100.0 * np.log(high / low) / 0.02 == pytest.approx(percent, abs=0.006)


def test_what_warming_does_depends_on_what_is_held():
    """150 umol/kg warmed from 10 to 13 degC at S 35, published formulas, PO2 through umol/l (hence 2e-4)."""
    cold, warm = (10.0, 35.0, 0.0), (13.0, 35.0, 0.0)
    deficit = concentration_at_saturation(*cold) - 150.0
    saturation = concentration_to(150.0, *cold, unit="% saturation")
    assert po2_from_concentration(150.0, *cold) == pytest.approx(11.4551, rel=2e-4)
    assert po2_from_concentration(150.0, *warm) == pytest.approx(12.1651, rel=2e-4)
    assert concentration_from(saturation, *warm, unit="% saturation") == pytest.approx(140.874, abs=1e-3)
    assert po2_from(saturation, *warm, unit="% saturation") == pytest.approx(11.4250, rel=2e-4)
    remaining = concentration_at_saturation(*warm) - deficit
    assert po2_from_concentration(remaining, *warm) == pytest.approx(10.8103, rel=2e-4)


# Potential instead of in-situ temperature in the solubility lowers PO2 by this much; S 35, gsw 3.6
@pytest.mark.parametrize(
    ("temperature", "pressure", "percent"),
    [(8.0, 500.0, 0.11), (4.5, 1000.0, 0.19), (2.3, 2000.0, 0.35), (1.5, 4000.0, 0.81)],
)
def test_po2_takes_in_situ_and_saturation_potential_temperature(temperature, pressure, percent):
    saturated = po2_from(100.0, temperature, 35.0, pressure, unit="% saturation", hydrostatic=False)
    excess = saturated / air_saturated_po2(temperature, 35.0) - 1.0
    assert 100.0 * excess == pytest.approx(percent, abs=0.01)


def test_reference_salinity_where_no_anomaly_is_known():
    reference = 35.16504  # Millero et al. 2008: S 35 corresponds to 35.16504 g/kg
    for place in [(), (100.0, 40.0), (0.0, -89.0), (np.nan, np.nan)]:  # nowhere, on land, under the ice sheet, unknown
        assert absolute_salinity(35.0, 0.0, *place) == pytest.approx(reference, abs=1e-9)
        assert practical_salinity_from_absolute(reference, 0.0, *place) == pytest.approx(35.0, abs=1e-9)
    assert absolute_salinity(35.0, 1000.0, 180.0, 40.0) > reference + 0.005  # silicate-rich North Pacific


@pytest.mark.parametrize("convert", [concentration_from, concentration_to, po2_from, po2_to])
def test_a_unit_of_something_else_is_refused(convert):
    with pytest.raises(UnitError, match=r"unit 'furlong' is not one of dissolved oxygen; expected umol/kg, umol/l"):
        convert(1.0, 10.0, 35.0, 0.0, unit="furlong")


# --- containers --------------------------------------------------------------------------------------------------

FUNCTIONS = [
    function
    for name, function in inspect.getmembers(seawater, inspect.isfunction)
    if function.__module__ == "habitat.seawater" and not name.startswith("_")
]
SAMPLE = {
    "temperature": [[27, 9, 2], [13, 8, 3]],
    "salinity": [[34, 35, 36], [33, 34, 35]],
    "pressure": [[5, 400, 3000], [10, 250, 1200]],
    "longitude": [[200, 201, 202], [330, 331, 332]],
    "latitude": [[-4, 0, 11], [-50, 40, 30]],
    "oxygen": [[190, 20, 150], [240, 90, 130]],
}
SAMPLE |= {"potential": SAMPLE["temperature"], "conservative": SAMPLE["temperature"], "absolute": SAMPLE["salinity"]}
SAMPLE |= {"po2": [[20, 2, 11], [21, 7, 9]], "depth": SAMPLE["pressure"]}
every_function = pytest.mark.parametrize("function", FUNCTIONS, ids=lambda function: function.__name__)


def arguments(function):
    """Names of the array parameters of a function, and its options."""
    parameters = inspect.signature(function).parameters.values()
    return [p.name for p in parameters if p.kind is not p.KEYWORD_ONLY], (
        {"unit": "ml/l"} if any(p.name == "unit" for p in parameters) else {}
    )


def applied(function, wrap=np.array):
    names, options = arguments(function)
    return function(*(wrap(SAMPLE[name]) for name in names), **options)


def one_by_one(function):
    names, options = arguments(function)
    return np.array(
        [[function(*(SAMPLE[name][i][j] for name in names), **options) for j in range(3)] for i in range(2)]
    )


def labelled(values):
    return xr.DataArray(np.array(values, dtype=float), dims=("cast", "level"), coords={"cast": ["a", "b"]})


def chunked(values):
    return dask.array.from_array(np.array(values, dtype=float), chunks=(1, 2))


@every_function
def test_numbers_give_a_float(function):
    names, options = arguments(function)
    result = function(*(SAMPLE[name][0][1] for name in names), **options)
    assert isinstance(result, float)
    assert np.isfinite(result)


@every_function
def test_arrays_lists_and_labels_give_what_single_numbers_give(function):
    expected = one_by_one(function)
    for wrap in (list, np.array, np.float32, labelled):
        result = applied(function, wrap)
        assert result.dtype == np.float64
        np.testing.assert_allclose(result, expected, rtol=1e-14)
    assert isinstance(applied(function), np.ndarray)


@every_function
def test_labels_are_kept(function):
    result = applied(function, labelled)
    assert result.dims == ("cast", "level")
    assert list(result["cast"].values) == ["a", "b"]


@every_function
def test_lazy_stays_lazy_and_gives_the_same(function, no_compute):
    expected = one_by_one(function)
    with no_compute():
        bare = applied(function, chunked)
        wrapped = applied(function, lambda values: labelled(values).chunk({"cast": 1}))
    assert isinstance(bare, dask.array.Array)
    assert bare.chunks == ((1, 1), (2, 1))
    assert isinstance(wrapped.data, dask.array.Array)
    for result in (bare, wrapped):
        assert result.dtype == np.float64
        np.testing.assert_allclose(result.compute(), expected, rtol=1e-14)


def test_the_guard_of_laziness_refuses_a_computation(no_compute):
    with no_compute(), pytest.raises(AssertionError, match="a lazy array was computed"):
        chunked(SAMPLE["oxygen"]).compute()


@every_function
def test_missing_and_masked_values_come_back_as_nan_in_their_place(function):
    names, options = arguments(function)
    expected = one_by_one(function)
    hole = np.array([[False, True, False], [False, False, False]])
    for missing in set(names) - {"longitude"}:  # without a position the Reference Salinity stands in
        if missing == "latitude" and "longitude" in names:
            continue
        for punch in (lambda values: np.where(hole, np.nan, values), lambda values: np.ma.array(values, mask=hole)):
            values = {name: np.array(SAMPLE[name], dtype=float) for name in names}
            values[missing] = punch(values[missing])
            result = function(*values.values(), **options)
            assert not np.ma.isMaskedArray(result)
            np.testing.assert_allclose(result, np.where(hole, np.nan, expected), rtol=1e-14, err_msg=missing)


@given(shapes=hnp.mutually_broadcastable_shapes(num_shapes=4, max_dims=3, max_side=3))
def test_any_shapes_broadcast(shapes):
    numbers = (150.0, 10.0, 35.0, 400.0)
    arrays = [np.full(shape, number) for shape, number in zip(shapes.input_shapes, numbers, strict=True)]
    lazy = [dask.array.from_array(array, chunks=1) for array in arrays]
    for unit in ("umol/kg", "ml/l"):  # the former needs neither temperature nor salinity nor pressure
        result = concentration_from(*arrays, unit=unit)
        assert result.shape == shapes.result_shape
        np.testing.assert_array_equal(result, concentration_from(*numbers, unit=unit))
        np.testing.assert_array_equal(concentration_from(*lazy, unit=unit).compute(), result)


def test_labelled_arrays_broadcast_by_name_not_by_position():
    temperature = xr.DataArray([[10.0, 5.0, 2.0]] * 2, dims=("cast", "level"))
    salinity = xr.DataArray([34.0, 36.0], dims="cast")
    pressure = xr.DataArray([0.0, 500.0, 1000.0], dims="level")
    result = po2_from(150.0, temperature, salinity, pressure, unit="umol/kg")
    assert result.dims == ("cast", "level")
    assert result[1, 2] == pytest.approx(po2_from_concentration(150.0, 2.0, 36.0, 1000.0), rel=1e-14)


def test_lazy_and_loaded_arguments_mix(no_compute):
    pressure = np.ma.array(SAMPLE["pressure"], mask=[[True, False, False], [False] * 3])
    with no_compute():
        lazy = po2_from_concentration(chunked(SAMPLE["oxygen"]), 8.0, np.array([34.0, 35.0, 36.0]), pressure)
    expected = po2_from_concentration(np.array(SAMPLE["oxygen"]), 8.0, np.array([34.0, 35.0, 36.0]), pressure)
    assert np.isnan(expected[0, 0])
    np.testing.assert_allclose(lazy.compute(), expected, rtol=1e-14)
