"""Scenarios: published numbers, each rule, fields from files on any grid, and what is counted."""

import gsw
import netCDF4
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from independent import po2 as slow_po2

from habitat.errors import InputError, UnitError
from habitat.scenario import (
    KEEP_RULES,
    Change,
    FieldFile,
    Percent,
    Scenario,
    apply,
    describe_oxygen,
    describe_warming,
    rule_effects,
)
from habitat.viability import oxygen_pressure

NAN = np.nan


def casts(depth, oxygen, temperature=10.0, *, longitude=-122.0, latitude=30.0, pressure=None):
    """Columns of casts; rows are casts."""
    depth, oxygen = np.broadcast_arrays(np.atleast_2d(np.array(depth, float)), np.atleast_2d(np.array(oxygen, float)))
    full = ("cast", "level")
    number = len(depth)
    return xr.Dataset(
        {
            "temperature": (full, np.broadcast_to(np.array(temperature, float), depth.shape).copy()),
            "salinity": (full, np.full(depth.shape, 35.0)),
            "oxygen": (full, oxygen.copy()),
            "depth": (full, depth.copy()),
            "pressure": (full, depth * 1.01 if pressure is None else np.full(depth.shape, pressure)),
        },
        coords={
            "cast": [f"c{i}" for i in range(number)],
            "longitude": ("cast", np.broadcast_to(np.array(longitude, float), number)),
            "latitude": ("cast", np.broadcast_to(np.array(latitude, float), number)),
        },
        attrs={"form": "casts"},
    )


def grid(*, times=None, latitudes=(10.0, 20.0, 30.0), longitudes=(-130.0, -120.0), depths=(0.0, 100.0, 200.0, 400.0)):
    """Columns of a grid, every sample with its own oxygen, at 10 degC."""
    shape = (*((times,) if times else ()), len(latitudes), len(longitudes), len(depths))
    dims = ("time", "latitude", "longitude", "level")[-len(shape) :]
    values = np.linspace(80, 240, int(np.prod(shape))).reshape(shape)
    coords = {"latitude": list(latitudes), "longitude": list(longitudes)}
    if times:
        coords["time"] = np.datetime64("2001-01-15", "ns") + np.arange(times) * np.timedelta64(30, "D")
    return xr.Dataset(
        {
            "temperature": (dims, np.full(shape, 10.0)),
            "salinity": (dims, np.full(shape, 35.0)),
            "oxygen": (dims, values),
            "depth": ("level", np.array(depths)),
            "pressure": ("level", np.array(depths) * 1.01),
        },
        coords=coords,
        attrs={"form": "grid"},
    )


UNITS = {"depth": "m", "lat": "degrees_north", "lon": "degrees_east", "time": "days since 2001-01-01"}


def write_field(path, values, units, axes, name="change", fill=None):
    """Write a field with netCDF4; `axes` maps dimension to its coordinate, in the order of the dimensions."""
    with netCDF4.Dataset(path, "w") as file:
        for axis, coordinate in axes.items():
            file.createDimension(axis, len(coordinate))
            variable = file.createVariable(axis, "f8", (axis,))
            variable[:] = np.array(coordinate, float)
            if axis in UNITS:
                variable.units = UNITS[axis]
        field = file.createVariable(name, "f8", tuple(axes), fill_value=fill)
        field[:] = values
        if units is not None:
            field.units = units
    return FieldFile(path, name)


def warming_of(columns, field):
    """Warming [degC] that a field gives each sample."""
    changed = apply(columns, Scenario("s", field, "keep concentration"))
    return changed["temperature"] - columns["temperature"]


# --- the rules ---------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("rule", "oxygen", "po2"),
    # O2 150 umol/kg warmed from 10 to 13 degC, S 35, at the surface: worked from Garcia & Gordon 1992 and the
    # recommendation of SCOR WG 142. Concentrations to the digits printed; the partial pressures come from the ml/l set
    # of coefficients, which agrees with the umol/kg set within 0.014 %.
    [
        ("keep concentration", 150.000, 12.1651),
        ("keep saturation", 140.874, 11.4250),
        ("keep AOU", 133.294, 10.8103),
    ],
)
def test_three_degrees_of_warming_by_each_keep_rule(rule, oxygen, po2):
    columns = casts([0], [150.0], pressure=0.0)
    assert float(oxygen_pressure(columns).squeeze()) == pytest.approx(11.4551, rel=1.4e-4)
    changed = apply(columns, Scenario("s", 3.0, rule))
    assert float(changed["temperature"].squeeze()) == 13.0
    assert float(changed["oxygen"].squeeze()) == pytest.approx(oxygen, abs=5e-4)
    assert float(oxygen_pressure(changed).squeeze()) == pytest.approx(po2, rel=1.4e-4)
    exact = slow_po2(float(changed["oxygen"].squeeze()), 13.0, 35.0, 0.0)
    assert float(oxygen_pressure(changed).squeeze()) == pytest.approx(exact, rel=1e-9)


@pytest.mark.parametrize(
    ("rule", "expected"),
    [
        (Percent(-8.0), 92.0),
        (Change(-10.0, "umol/kg"), 90.0),
        (Change(-0.2, "ml/l"), 100 - 0.2 * 44.6596 / 1.026952),  # potential density at 10 degC, S 35: 1026.952 kg/m3
        (Change(-0.3199880, "mg/l"), 100 - 10.0 / 1.026952),  # 10 umol of 31.9988 g/mol
    ],
)
def test_a_stated_change_of_oxygen(rule, expected):
    changed = apply(casts([0], [100.0], pressure=0.0), Scenario("s", 1.0, rule))
    assert float(changed["oxygen"].squeeze()) == pytest.approx(expected, abs=1e-4)


def test_a_change_of_partial_pressure_is_that_change_before_warming():
    columns = casts([500], [100.0])
    changed = apply(columns, Scenario("s", 0.0, Change(-1.0, "kPa")))
    assert float((oxygen_pressure(changed) - oxygen_pressure(columns)).squeeze()) == pytest.approx(-1.0)


@pytest.mark.parametrize("rule", ["keep saturation", "keep AOU"])
def test_saturation_is_that_of_the_potential_temperature(rule):
    columns = casts([4000], [150.0], 1.5, pressure=4000.0)
    changed = apply(columns, Scenario("s", 2.0, rule))
    absolute = gsw.SA_from_SP(35.0, 4000.0, -122.0, 30.0)
    before, after = (gsw.O2sol_SP_pt(35.0, gsw.pt0_from_t(absolute, t, 4000.0)) for t in (1.5, 3.5))
    expected = 150 * after / before if rule == "keep saturation" else 150 + after - before
    assert float(changed["oxygen"].squeeze()) == pytest.approx(expected, rel=1e-12)


def test_other_variables_are_left_alone():
    columns = casts([0, 100], [200.0, 100.0])
    changed = apply(columns, Scenario("s", 2.0, "keep AOU"))
    for name in ("salinity", "depth", "pressure"):
        xr.testing.assert_identical(changed[name], columns[name])
    assert changed["oxygen"].dims == columns["oxygen"].dims
    assert (int(changed["clipped_samples"]), int(changed["lost_samples"]), changed.attrs["notes"]) == (0, 0, [])


def test_oxygen_below_zero_is_set_to_zero_and_counted():
    columns = casts([0, 50, 100, 150], [200.0, 5.0, 10.0, NAN])
    changed = apply(columns, Scenario("s", 0.0, Change(-10.0, "umol/kg")))
    np.testing.assert_allclose(changed["oxygen"].squeeze(), [190.0, 0.0, 0.0, NAN])
    assert (int(changed["clipped_samples"]), int(changed["lost_samples"])) == (1, 0)


def test_oxygen_that_was_negative_before_is_counted_as_clipped():
    changed = apply(casts([0, 50], [200.0, -0.5]), Scenario("s", 1.0, "keep concentration"))
    assert (changed["oxygen"].squeeze().values.tolist(), int(changed["clipped_samples"])) == ([200.0, 0.0], 1)


def test_keep_aou_can_run_out_of_oxygen():
    changed = apply(casts([300], [3.0]), Scenario("s", 3.0, "keep AOU"))
    assert (float(changed["oxygen"].squeeze()), int(changed["clipped_samples"])) == (0.0, 1)


def test_a_misspelt_rule_is_refused():
    with pytest.raises(
        InputError, match=r"^scenario 's': oxygen rule 'keep aou'; expected 'keep saturation' or 'keep AOU'"
    ):
        Scenario("s", 1.0, "keep aou")


def test_a_warming_profile_is_linear_between_its_depths_and_constant_beyond():
    columns = casts([0, 50, 100, 150, 200, 300], [200.0] * 6)
    changed = apply(columns, Scenario("s", ((50.0, 3.0), (150.0, 1.0)), "keep concentration"))
    np.testing.assert_allclose((changed["temperature"] - 10).squeeze(), [3, 3, 2, 1, 1, 1])
    assert changed.attrs["notes"] == ["the warming profile ends at 150 m; +1 degC was used below, to 300 m"]


@given(warming=st.floats(0, 5), temperature=st.floats(0, 28), oxygen=st.floats(1, 300))
def test_warming_orders_the_rules(warming, temperature, oxygen):
    """A fixed concentration gains PO2; in undersaturated water a fixed AOU loses more than a fixed saturation."""
    columns = casts([200], [oxygen], temperature)
    po2 = [
        float(oxygen_pressure(apply(columns, Scenario("s", warming, rule))).squeeze())
        for rule in ("keep concentration", "keep saturation", "keep AOU")
    ]
    assert po2[0] >= po2[1] - 1e-12
    if oxygen < 180:  # below saturation at every temperature up to 33 degC
        assert po2[1] >= po2[2] - 1e-12


# --- what people write -------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("-10 umol/kg", -10.0, "umol/kg"),
        ("+0.5ml/l", 0.5, "ml/l"),
        (" .5e1 mmol m-3 ", 5.0, "mmol m-3"),
        ("-1. kPa", -1.0, "kPa"),
    ],
)
def test_a_change_is_read(text, value, unit):
    assert Change.parse(text) == Change(value, unit)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("umol/kg", r"oxygen change 'umol/kg'; expected a number and a unit, for example \"-10 umol/kg\""),
        ("-10", r"oxygen change '-10'; expected a number and a unit"),
        ("1.2.3 umol/kg", r"unit '\.3 umol/kg'"),
        ("-10 degC", r"unit 'degC' is not one of dissolved oxygen"),
        ("-10 furlong", r"unit 'furlong' is not one of dissolved oxygen"),
        ("-10 umolkg", r"unit 'umolkg' is not known"),
    ],
)
def test_a_change_that_cannot_be_read_is_refused(text, message):
    with pytest.raises(UnitError, match=message):
        Change.parse(text)


def test_rules_and_warmings_in_words(tmp_path):
    field = FieldFile(tmp_path / "f.nc", "dT")
    assert describe_oxygen("keep AOU") == "keep AOU"
    assert describe_oxygen(Percent(-8)) == "concentration changed by -8 %"
    assert describe_oxygen(Change(2.5, "ml/l")) == "oxygen changed by +2.5 ml/l"
    assert describe_oxygen(field) == "oxygen changed by the field 'dT' of f.nc"
    assert describe_warming(2.0) == "temperature changed by +2 degC"
    assert describe_warming(((0.0, 3.0), (500.0, 1.0))) == "temperature changed by +3 degC at 0 m, +1 degC at 500 m"
    assert describe_warming(field) == "temperature changed by the field 'dT' of f.nc"


# --- fields ------------------------------------------------------------------------------------------------------

GRID = grid()
AXES = {"depth": GRID["depth"].values, "lat": GRID["latitude"].values, "lon": GRID["longitude"].values}
VALUES = np.arange(24.0).reshape(4, 3, 2) / 10  # depth, latitude, longitude
EXPECTED = np.moveaxis(VALUES, 0, -1)  # latitude, longitude, level


def test_a_field_on_the_same_grid(tmp_path):
    found = warming_of(GRID, write_field(tmp_path / "f.nc", VALUES, "degC", AXES))
    np.testing.assert_allclose(found, EXPECTED, atol=1e-12)


@pytest.mark.parametrize(("units", "factor"), [("K", 1.0), ("degC", 1.0), ("degF", 5 / 9)])
def test_a_temperature_difference_is_scaled_and_never_shifted(tmp_path, units, factor):
    found = warming_of(GRID, write_field(tmp_path / "f.nc", VALUES, units, AXES))
    np.testing.assert_allclose(found, EXPECTED * factor, atol=1e-12)


@pytest.mark.parametrize(
    ("change", "flip"),
    [
        ({"lat": AXES["lat"][::-1]}, (slice(None), slice(None, None, -1))),
        ({"depth": AXES["depth"][::-1]}, (slice(None, None, -1),)),
        ({"depth": -AXES["depth"]}, ()),
        ({"lon": AXES["lon"] + 360}, ()),
        ({"lat": AXES["lat"].astype("f4") + 1e-6}, ()),
    ],
    ids=["descending latitude", "upward depth", "negative depth", "0 to 360", "4-byte"],
)
@pytest.mark.parametrize("missing", [False, True])
def test_the_same_grid_written_otherwise_gives_the_same_values(tmp_path, change, flip, missing):
    """Also beside missing values, which interpolation would spread."""
    values = VALUES.copy()
    if missing:
        values[2, 1, 0] = NAN
    found = warming_of(GRID, write_field(tmp_path / "f.nc", values[flip], "K", AXES | change))
    np.testing.assert_allclose(found, np.moveaxis(values, 0, -1), atol=1e-12)


def test_missing_values_of_a_field_are_lost_samples(tmp_path):
    values = VALUES.copy()
    values[0, 0, 0] = values[3, 2, 1] = -999.0
    field = write_field(tmp_path / "f.nc", values, "K", AXES, fill=-999.0)
    columns = GRID.copy(deep=True)
    columns["oxygen"][2, 1, 3] = NAN  # was missing before, so is not lost
    changed = apply(columns, Scenario("s", field, "keep AOU"))
    assert int(changed["lost_samples"]) == 1
    assert np.isnan(changed["temperature"].values[0, 0, 0])
    assert np.isfinite(changed["oxygen"]).sum() == 22


@pytest.mark.parametrize("rule", [*KEEP_RULES, Percent(5)])
def test_a_sample_without_warming_is_not_used_by_any_rule(tmp_path, rule):
    values = VALUES.copy()
    values[0, 0, 0] = NAN
    changed = apply(GRID, Scenario("s", write_field(tmp_path / "f.nc", values, "K", AXES), rule))
    assert np.isnan(oxygen_pressure(changed)).sum() == 1
    assert int(changed["lost_samples"]) == 1


def linear(depth, latitude, longitude):
    """A field that linear interpolation reproduces exactly."""
    return 0.5 + 0.002 * depth + 0.03 * latitude - 0.01 * longitude


def linear_field(path, units="K", depth=(0.0, 150.0, 500.0), lat=(-5.0, 12.0, 40.0), lon=(-150.0, -125.0, -100.0)):
    values = linear(np.array(depth)[:, None, None], np.array(lat)[:, None], np.array(lon))
    return write_field(path, values, units, {"depth": depth, "lat": lat, "lon": lon})


def test_another_grid_is_interpolated(tmp_path):
    found = warming_of(GRID, linear_field(tmp_path / "f.nc"))
    expected = linear(GRID["depth"], GRID["latitude"], GRID["longitude"]).transpose(*found.dims)
    np.testing.assert_allclose(found, expected, atol=1e-12)


@pytest.mark.parametrize(("lat", "turn"), [((40.0, 12.0, -5.0), 0.0), ((-5.0, 12.0, 40.0), 360.0)])
def test_another_grid_in_another_order_or_convention_is_interpolated(tmp_path, lat, turn):
    values = linear(np.array([0.0, 500.0])[:, None, None], np.array(lat)[:, None], np.array([-150.0, -100.0]))
    axes = {"depth": [0.0, 500.0], "lat": lat, "lon": [-150.0 + turn, -100.0 + turn]}
    found = warming_of(GRID, write_field(tmp_path / "f.nc", values, "K", axes))
    expected = linear(GRID["depth"], GRID["latitude"], GRID["longitude"]).transpose(*found.dims)
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_a_shared_axis_keeps_its_values_while_another_is_interpolated(tmp_path):
    values = VALUES[[0, 3]].copy()
    values[:, 0, :] = NAN  # a whole latitude; its neighbours must not suffer
    field = write_field(tmp_path / "f.nc", values, "K", AXES | {"depth": [0.0, 400.0]})
    found = warming_of(GRID, field)
    assert np.isnan(found[0]).all()
    expected = VALUES[0] + (VALUES[3] - VALUES[0]) * (np.array([0, 100, 200, 400]) / 400)[:, None, None]
    np.testing.assert_allclose(found[1:], np.moveaxis(expected, 0, -1)[1:], atol=1e-12)


def test_a_field_is_interpolated_to_casts(tmp_path):
    columns = casts([[0, 100, NAN], [50, 400, 450]], 200.0, longitude=[-120.0, 245.0], latitude=[10.0, 33.0])
    found = warming_of(columns, linear_field(tmp_path / "f.nc"))
    expected = linear(columns["depth"], columns["latitude"], xr.DataArray([-120.0, -115.0], dims="cast"))
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_casts_at_points_of_the_field(tmp_path):
    columns = casts([[0, 150, 500], [150, 60, NAN]], 200.0, longitude=[-125.0, 260.0], latitude=[12.0, 40.0])
    found = warming_of(columns, linear_field(tmp_path / "f.nc"))
    expected = linear(columns["depth"], columns["latitude"], xr.DataArray([-125.0, -100.0], dims="cast"))
    np.testing.assert_allclose(found, expected, atol=1e-12)


@pytest.mark.parametrize("full_depth", [False, True])
def test_a_map_without_depth_holds_at_every_depth(tmp_path, full_depth):
    columns = GRID
    if full_depth:
        columns = GRID.assign(depth=GRID["depth"].broadcast_like(GRID["oxygen"]).transpose(*GRID["oxygen"].dims))
    field = write_field(tmp_path / "f.nc", VALUES[0], "K", {name: AXES[name] for name in ("lat", "lon")})
    np.testing.assert_allclose(warming_of(columns, field), np.broadcast_to(VALUES[0][..., None], (3, 2, 4)), atol=1e-12)


def test_levels_at_a_depth_of_their_own_in_each_column(tmp_path):
    depth = GRID["depth"] + xr.DataArray([0.0, 10.0, 20.0], dims="latitude") + 0 * GRID["oxygen"]
    columns = GRID.assign(depth=depth.transpose(*GRID["oxygen"].dims))
    found = warming_of(columns, linear_field(tmp_path / "f.nc"))
    expected = linear(columns["depth"], columns["latitude"], columns["longitude"]).transpose(*found.dims)
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_a_field_holds_half_a_cell_beyond_its_sides_and_below_its_depths(tmp_path):
    field = linear_field(tmp_path / "f.nc", depth=(50.0, 150.0), lat=(14.0, 22.0, 30.0))  # half a cell: 4 degrees
    changed = apply(GRID, Scenario("s", field, "keep concentration"))
    expected = linear(GRID["depth"].clip(50, 150), GRID["latitude"].clip(14), GRID["longitude"])
    np.testing.assert_allclose(changed["temperature"] - 10, expected.transpose(*GRID["oxygen"].dims), atol=1e-12)
    assert changed.attrs["notes"] == ["'change' ends at 150 m; its deepest value was used below, to 400 m"]


@pytest.mark.parametrize(
    ("axes", "message"),
    [
        (
            {"lat": (15.0, 22.0, 30.0)},
            r"f\.nc, variable 'change': the field covers latitude 15 to 30, the ocean 10 to 30;",
        ),
        (
            {"lon": (-125.0, -124.0)},
            r"the field covers longitude -125 to -124, the ocean -130 to -120; expected a field",
        ),
    ],
)
def test_a_field_that_does_not_cover_the_ocean_is_refused(tmp_path, axes, message):
    with pytest.raises(InputError, match=message):
        warming_of(GRID, linear_field(tmp_path / "f.nc", **axes))


def test_one_time_serves_all_times(tmp_path):
    columns = grid(times=3)
    field = write_field(tmp_path / "f.nc", VALUES[None], "K", {"time": [15.0]} | AXES)
    np.testing.assert_allclose(warming_of(columns, field), np.broadcast_to(EXPECTED, (3, 3, 2, 4)), atol=1e-12)


def test_as_many_times_are_matched_in_order(tmp_path):
    columns = grid(times=3)
    values = VALUES + np.arange(3.0)[:, None, None, None]
    field = write_field(tmp_path / "f.nc", values, "K", {"time": [400.0, 500.0, 600.0]} | AXES)
    np.testing.assert_allclose(warming_of(columns, field), np.moveaxis(values, 1, -1), atol=1e-12)


@pytest.mark.parametrize(("times", "steps"), [(2, 2), (None, 1)])
def test_other_times_are_refused(tmp_path, times, steps):
    columns = grid(times=times)
    field = write_field(tmp_path / "f.nc", np.stack([VALUES] * 3), "K", {"time": [15.0, 45.0, 75.0]} | AXES)
    with pytest.raises(
        InputError, match=rf"the field has 3 times, the ocean {steps}; expected one time, or as many as"
    ):
        warming_of(columns, field)


def test_an_oxygen_field_in_umol_per_kg(tmp_path):
    changed = apply(GRID, Scenario("s", 0.0, write_field(tmp_path / "f.nc", -VALUES, "umol kg-1", AXES)))
    np.testing.assert_allclose(GRID["oxygen"] - changed["oxygen"], EXPECTED, atol=1e-12)


def test_an_oxygen_field_in_mol_per_m3(tmp_path):
    field = write_field(tmp_path / "f.nc", np.full(VALUES.shape, -0.01), "mol m-3", AXES)
    changed = apply(grid(depths=(0.0, 0.0, 0.0, 0.0)), Scenario("s", 0.0, field))
    fall = (GRID["oxygen"] - changed["oxygen"]).values
    # 10 mmol/m3 over the potential density at 10 degC and S 35, 1026.95 kg/m3, to 0.01 % for Absolute Salinity
    np.testing.assert_allclose(fall, 10 / 1.02695, rtol=1e-4)


def test_an_oxygen_field_is_converted_in_the_water_before_warming(tmp_path):
    field = write_field(tmp_path / "f.nc", np.full(VALUES.shape, -0.5), "kPa", AXES)
    by_field, by_number = (apply(GRID, Scenario("s", 5.0, rule)) for rule in (field, Change(-0.5, "kPa")))
    np.testing.assert_allclose(by_field["oxygen"], by_number["oxygen"], rtol=1e-12)
    np.testing.assert_allclose(
        oxygen_pressure(GRID) - oxygen_pressure(GRID.assign(oxygen=by_field["oxygen"])), 0.5, rtol=1e-9
    )


def test_an_oxygen_field_in_percent_is_relative(tmp_path):
    changed = apply(GRID, Scenario("s", 0.0, write_field(tmp_path / "f.nc", -VALUES, "%", AXES)))
    np.testing.assert_allclose(changed["oxygen"], GRID["oxygen"] * (1 - EXPECTED / 100), rtol=1e-12)
    assert changed.attrs["notes"] == ["'change' is a relative change of the oxygen concentration"]


def test_a_field_without_unit_is_refused(tmp_path):
    field = write_field(tmp_path / "f.nc", VALUES, None, AXES)
    with pytest.raises(UnitError, match=r"f\.nc, variable 'change': the field has no unit; give the variable a units"):
        warming_of(GRID, field)


@pytest.mark.parametrize(
    ("warming", "message"),
    [
        (
            True,
            r"f\.nc, variable 'change': unit 'umol/kg' is not one of temperature; expected a temperature",
        ),
        (False, r"f\.nc, variable 'change': unit 'K' is not one of dissolved oxygen; expected umol/kg"),
    ],
)
def test_a_field_in_a_unit_of_the_wrong_kind_is_refused(tmp_path, warming, message):
    field = write_field(tmp_path / "f.nc", VALUES, "umol/kg" if warming else "K", AXES)
    scenario = Scenario("s", field, "keep AOU") if warming else Scenario("s", 0.0, field)
    with pytest.raises(UnitError, match=message):
        apply(GRID, scenario)


def test_a_missing_variable_is_refused(tmp_path):
    field = write_field(tmp_path / "f.nc", VALUES, "K", AXES)
    with pytest.raises(InputError, match=r"f\.nc: no variable 'dT'; expected one of change"):
        warming_of(GRID, FieldFile(field.path, "dT"))


def test_a_missing_file_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"f\.nc: file not found"):
        warming_of(GRID, FieldFile(tmp_path / "f.nc", "dT"))


def test_a_dimension_that_is_not_understood_is_refused(tmp_path):
    field = write_field(
        tmp_path / "f.nc", np.zeros((2, 3, 2)), "K", {"member": [1, 2], "lat": AXES["lat"], "lon": AXES["lon"]}
    )
    with pytest.raises(
        InputError, match=r"dimension 'member' is not understood; expected dimensions of depth, latitude"
    ):
        warming_of(GRID, field)


# --- lazy columns ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("warming", ["number", "profile", "field"])
@pytest.mark.parametrize("rule", [*KEEP_RULES, Percent(-5), Change(-0.1, "ml/l")])
def test_lazy_columns_stay_lazy(tmp_path, no_compute, warming, rule):
    columns = grid(times=2)
    lazy = columns.chunk({"time": 1, "latitude": 2})
    lazy["depth"], lazy["pressure"] = columns["depth"], columns["pressure"]
    given = {"number": 2.0, "profile": ((0.0, 3.0), (200.0, 1.0)), "field": linear_field(tmp_path / "f.nc")}
    scenario = Scenario("s", given[warming], rule)
    with no_compute():
        changed = apply(lazy, scenario)
    assert all(changed[name].chunks for name in ("temperature", "oxygen"))
    xr.testing.assert_identical(changed.compute(), apply(columns, scenario))


# --- what a rule does --------------------------------------------------------------------------------------------


def test_effects_of_the_rules():
    columns = grid()
    table = rule_effects(columns, Scenario("s", 2.0, Percent(-8)))
    assert table["rule"].tolist() == ["concentration changed by -8 %", *KEEP_RULES]
    assert table["chosen"].tolist() == [True, False, False, False]
    effect = table.set_index("rule")["change_percent"]
    # At 10 degC a fixed concentration gains 2.09 % PO2 a kelvin, a fixed saturation loses 0.05 to 0.2 %: d ln of
    # Garcia & Gordon 1992 and of Weiss & Price 1980 by temperature.
    assert effect["keep concentration"] == pytest.approx(2 * 2.09, abs=0.15)
    assert -0.4 <= effect["keep saturation"] <= -0.1
    assert effect["keep AOU"] < effect["keep saturation"]
    assert (table["change_kpa_p05"] <= table["change_kpa"]).all()
    assert (table["change_kpa"] <= table["change_kpa_p95"]).all()


def test_the_chosen_rule_is_listed_once():
    table = rule_effects(grid(), Scenario("s", 2.0, "keep AOU"))
    assert table["rule"].tolist() == ["keep AOU", "keep saturation", "keep concentration"]
    assert table["chosen"].tolist() == [True, False, False]


def test_effects_on_a_large_grid_are_those_of_evenly_spaced_columns(monkeypatch):
    monkeypatch.setattr("habitat.scenario.SAMPLE_SIZE", 100)
    wide = grid(latitudes=np.linspace(-60, 60, 41), longitudes=np.linspace(0, 350, 36))
    table = rule_effects(wide.chunk({"latitude": 10}), Scenario("s", 2.0, "keep concentration"))
    monkeypatch.undo()
    thinned = wide.isel(latitude=slice(None, None, 8), longitude=slice(None, None, 8))  # sqrt(41 x 36 x 4 / 100) = 7.7
    expected = rule_effects(thinned, Scenario("s", 2.0, "keep concentration"))
    np.testing.assert_allclose(table.iloc[:, 2:].to_numpy(float), expected.iloc[:, 2:].to_numpy(float), rtol=1e-12)
