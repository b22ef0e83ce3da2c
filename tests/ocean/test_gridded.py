"""Gridded netCDF: axes, units, kinds, times, and what is refused."""

import netCDF4
import numpy as np
import pytest
import xarray as xr

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.ocean import open_ocean, opening

STANDARD_DIMS = ("latitude", "longitude", "level")


def test_plain_grid_keeps_its_values_and_takes_the_contract_s_form(write_grid, water):
    columns = open_ocean([write_grid(water())])
    assert columns.attrs["form"] == "grid"
    for name, variable in (("temperature", "temp"), ("salinity", "salt"), ("oxygen", "oxy")):
        assert columns[name].dims == STANDARD_DIMS
        assert columns[name].dtype == np.float64
        expected = np.moveaxis(water()[variable][0], 0, -1)
        np.testing.assert_allclose(columns[name], expected, rtol=1e-6)  # the file holds single precision
    assert columns["depth"].dims == ("level",)
    assert columns["depth"].values.tolist() == [0, 50, 200]
    assert columns["pressure"].dims == ("latitude", "level")
    np.testing.assert_allclose(columns["pressure"].sel(latitude=-10.0)[2], seawater.pressure_from_depth(200.0, -10.0))
    assert columns["longitude"].values.tolist() == [200, 210, 220]
    assert "time" not in columns.dims
    for name in columns.variables:
        assert {"units", "long_name"} <= set(columns[name].attrs), name


def test_dimension_order_in_the_file_does_not_matter(write_grid, water):
    plain = open_ocean([write_grid(water())])
    turned = {
        name: (np.moveaxis(values, 0, -1), attributes | {"dims": ("lat", "lon", "depth")})
        for name, (values, attributes) in water().items()
    }
    xr.testing.assert_allclose(open_ocean([write_grid(turned, "turned.nc")]), plain)


def test_fill_is_missing(write_grid, water):
    variables = water()
    masked = np.ma.masked_less(variables["oxy"][0], 30)
    columns = open_ocean([write_grid(variables | {"oxy": (masked, variables["oxy"][1])})])
    assert columns["oxygen"].isnull().sum() == masked.mask.sum() == 6


@pytest.mark.parametrize(("value", "unit"), [(-999.0, "-999"), (1e20, "1e+20")])
def test_undeclared_fill_is_missing_and_told(write_grid, water, value, unit):
    variables = water()
    values = variables["oxy"][0].copy()
    values[2, 0, 0] = value
    columns = open_ocean([write_grid(variables | {"oxy": (values, variables["oxy"][1])})])
    assert columns["oxygen"].isnull().sum() == 1
    assert any(f"oxygen: fill value {unit}" in sentence for sentence in columns.attrs["conversions"])


def test_kelvin(write_grid, water):
    variables = water()
    kelvin = {"temp": (variables["temp"][0] + 273.15, variables["temp"][1] | {"units": "K"})}
    columns = open_ocean([write_grid(variables | kelvin)])
    np.testing.assert_allclose(columns["temperature"], np.moveaxis(variables["temp"][0], 0, -1), atol=3e-5)
    assert "temperature: K to degC" in columns.attrs["conversions"]


@pytest.mark.parametrize(
    ("name", "standard", "convert"),
    [
        ("thetao", "sea_water_potential_temperature", seawater.temperature_from_potential),
        ("thetao", "", seawater.temperature_from_potential),
        ("bigthetao", "sea_water_conservative_temperature", seawater.temperature_from_conservative),
    ],
)
def test_temperature_kinds(write_grid, water, name, standard, convert):
    variables = water()
    values, _ = variables.pop("temp")
    variables[name] = (values, {"units": "degC"} | ({"standard_name": standard} if standard else {}))
    columns = open_ocean([write_grid(variables)])
    given = np.moveaxis(values.astype("f4").astype(float), 0, -1)
    expected = convert(
        xr.DataArray(given, dims=STANDARD_DIMS),
        *(columns[other] for other in ("salinity", "pressure", "longitude", "latitude")),
    )
    np.testing.assert_allclose(columns["temperature"], expected.transpose(*STANDARD_DIMS), atol=1e-9)
    assert (columns["temperature"] - given)[..., 2].min() > 0.003  # water warms when it is brought down
    assert any("to in-situ temperature" in sentence for sentence in columns.attrs["conversions"])


@pytest.mark.parametrize("attributes", [{"standard_name": "sea_water_absolute_salinity"}, {}])
def test_absolute_salinity(write_grid, water, attributes):
    variables = water()
    variables["salt"] = (variables["salt"][0], {"units": "g kg-1"} | attributes)
    columns = open_ocean([write_grid(variables)])
    # SP is about SA * 35 / 35.16504 (IOC, SCOR and IAPSO 2010, TEOS-10 manual, eq. 2.4.1), less the anomaly
    expected = np.moveaxis(variables["salt"][0], 0, -1) * 35 / 35.16504
    np.testing.assert_allclose(columns["salinity"], expected, atol=0.01)
    assert any("Absolute Salinity" in sentence for sentence in columns.attrs["conversions"])


@pytest.mark.parametrize("unit", ["0.001", "1e-3", "1", "psu", "PSS-78", ""])
def test_practical_salinity_units(write_grid, water, unit):
    variables = water()
    variables["salt"][1]["units"] = unit
    columns = open_ocean([write_grid(variables)])
    np.testing.assert_allclose(columns["salinity"], np.moveaxis(variables["salt"][0], 0, -1), rtol=1e-6)


def test_unit_goes_before_a_standard_name_that_contradicts_it(write_grid, water):
    # the layout of a 2018 climatology: moles per volume in the name, per mass in the unit (facts: WOA18)
    variables = water()
    variables["oxy"][1].update(
        units="micromoles_per_kilogram", standard_name="mole_concentration_of_dissolved_molecular_oxygen_in_sea_water"
    )
    columns = open_ocean([write_grid(variables)])
    np.testing.assert_allclose(columns["oxygen"], np.moveaxis(variables["oxy"][0], 0, -1), rtol=1e-6)
    assert any("the unit was followed" in sentence for sentence in columns.attrs["conversions"])


def test_oxygen_per_volume_uses_the_water_s_own_density(write_grid, water):
    variables = water()
    plain = open_ocean([write_grid(variables)])
    where = [plain[name] for name in ("temperature", "salinity", "pressure", "longitude", "latitude")]
    molar = seawater.concentration_to(plain["oxygen"], *where, unit="mol m-3").transpose("level", *STANDARD_DIMS[:2])
    standard = "mole_concentration_of_dissolved_molecular_oxygen_in_sea_water"
    variables["oxy"] = (molar.values, {"units": "mol m-3", "standard_name": standard})
    columns = open_ocean([write_grid(variables, "molar.nc")])
    np.testing.assert_allclose(columns["oxygen"], plain["oxygen"], rtol=1e-6)
    assert "oxygen: mol m-3 to umol/kg with potential density at 0 dbar" in columns.attrs["conversions"]


@pytest.mark.parametrize(
    ("depth", "attributes"),
    [
        ([0.0, -50.0, -200.0], {"units": "m", "positive": "up"}),
        ([0.0, -50.0, -200.0], {"units": "m"}),
        ([0.0, 5000.0, 20000.0], {"units": "cm"}),
        ([0.0, 0.05, 0.2], {"units": "km"}),
    ],
)
def test_depths_in_other_units_and_signs(write_grid, water, depth, attributes):
    columns = open_ocean([write_grid(water(), axes={"depth": (depth, attributes | {"standard_name": "depth"})})])
    np.testing.assert_allclose(columns["depth"], [0, 50, 200])
    assert any(sentence.startswith("depth: ") for sentence in columns.attrs["conversions"])


def test_depths_from_the_bottom_up_are_put_in_order(write_grid, water):
    plain = open_ocean([write_grid(water())])
    turned = {name: (values[::-1], attributes) for name, (values, attributes) in water().items()}
    columns = open_ocean([write_grid(turned, "turned.nc", axes={"depth": ([200.0, 50.0, 0.0], {"units": "m"})})])
    xr.testing.assert_allclose(columns, plain)
    assert "depth: levels put in order of increasing depth" in columns.attrs["conversions"]


def test_latitudes_from_north_to_south_stay_so(write_grid, water):
    columns = open_ocean([write_grid(water(), axes={"lat": ([10.0, -10.0], {"units": "degrees_north"})})])
    assert columns["latitude"].values.tolist() == [10, -10]
    np.testing.assert_allclose(columns["oxygen"][0], np.moveaxis(water()["oxy"][0], 0, -1)[0], rtol=1e-6)


def test_other_statistics_beside_an_analysed_mean_are_no_candidates(write_grid, water):
    plain = water()
    variables = {}
    for name, letter in (("temp", "t"), ("salt", "s"), ("oxy", "o")):
        values, attributes = plain[name]
        for ending, scale in (("_mn", 0.5), ("_an", 1.0), ("_sd", 0.1), ("_se", 0.1), ("_dd", 3.0), ("_gp", 2.0)):
            variables[letter + ending] = (values * scale, dict(attributes))
    columns = open_ocean([write_grid(variables)])
    np.testing.assert_allclose(columns["oxygen"], np.moveaxis(plain["oxy"][0], 0, -1), rtol=1e-6)


def test_a_standard_name_with_a_modifier_is_no_candidate(write_grid, water):
    variables = water()
    variables["o2"] = (
        variables["oxy"][0] * 0 + 2,
        {"units": "1", "standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water status_flag"},
    )
    assert open_ocean([write_grid(variables)])["oxygen"].max() > 200


def test_two_candidates_are_named_and_one_can_be_chosen(write_grid, water):
    variables = water()
    variables["oxy2"] = (variables["oxy"][0] * 0.9, dict(variables["oxy"][1]))
    path = write_grid(variables)
    with pytest.raises(InputError, match=r"'oxy' and 'oxy2' could each be the oxygen.*--oxygen 'oxy'"):
        open_ocean([path])
    columns = open_ocean([path], choose={"oxygen": "oxy2"})
    np.testing.assert_allclose(columns["oxygen"].max(), 0.9 * variables["oxy"][0].max(), rtol=1e-6)
    with pytest.raises(InputError, match="no variable 'o3' for the oxygen"):
        open_ocean([path], choose={"oxygen": "o3"})


def test_sea_floor(write_grid, water):
    floor = np.array([[300.0, 250.0, 4000.0], [0.0, 10.0, 20.0]])
    variables = water(
        deptho=(floor, {"units": "m", "standard_name": "sea_floor_depth_below_geoid", "dims": ("lat", "lon")})
    )
    columns = open_ocean([write_grid(variables)])
    assert columns["seabed_depth"].dims == ("latitude", "longitude")
    np.testing.assert_allclose(columns["seabed_depth"], np.where(floor > 0, floor, np.nan))
    assert any("land" in sentence for sentence in columns.attrs["conversions"])


# --- times -------------------------------------------------------------------------------------------------------


def _with_times(water, count):
    return {name: (np.stack([v] * count), a) for name, (v, a) in water.items()}


def test_dates(write_grid, water):
    time = ([15.0, 45.0], {"units": "days since 2001-01-01", "standard_name": "time"})
    columns = open_ocean([write_grid(_with_times(water(), 2), time=time)])
    assert columns["oxygen"].dims == ("time", *STANDARD_DIMS)
    assert columns["time"].values.astype("datetime64[D]").astype(str).tolist() == ["2001-01-16", "2001-02-15"]
    assert columns["time"].dtype == "datetime64[ns]"


def test_one_date_is_kept(write_grid, water):
    time = ([15.0], {"units": "days since 2001-01-01"})
    columns = open_ocean([write_grid(_with_times(water(), 1), time=time)])
    assert columns.sizes["time"] == 1


def test_a_date_without_a_dimension_is_kept(write_grid, water):
    path = write_grid(water())
    with netCDF4.Dataset(path, "a") as file:
        file.createVariable("time", "f8", ()).setncatts({"units": "days since 2001-01-01", "standard_name": "time"})
        file["time"][...] = 31
    columns = open_ocean([path])
    assert columns["oxygen"].dims == ("time", *STANDARD_DIMS)
    assert str(columns["time"].values[0])[:10] == "2001-02-01"


def test_a_model_calendar_is_kept(write_grid, water):
    time = ([58.0, 59.0], {"units": "days since 2000-01-01", "calendar": "360_day"})
    columns = open_ocean([write_grid(_with_times(water(), 2), time=time)])
    assert [str(t)[:10] for t in columns["time"].values] == ["2000-02-29", "2000-02-30"]  # no such day in 2000
    assert "time: dates kept in the calendar '360_day'" in columns.attrs["conversions"]


def test_months_since_give_no_dates(write_grid, water):
    time = ([4614.0, 4615.0], {"units": "months since 1955-01-01 00:00:00"})
    columns = open_ocean([write_grid(_with_times(water(), 2), time=time)])
    assert columns["time"].values.tolist() == [0, 1]
    assert any("gives no dates; the steps were numbered" in sentence for sentence in columns.attrs["conversions"])


def test_months_of_thirty_days_are_dates(write_grid, water):
    time = ([1.0, 13.0], {"units": "months since 2000-01-01", "calendar": "360_day"})
    columns = open_ocean([write_grid(_with_times(water(), 2), time=time)])
    assert [str(t)[:10] for t in columns["time"].values] == ["2000-02-01", "2001-02-01"]


@pytest.mark.parametrize("unit", ["years since 1955-01-01", "Months since 0001-01-01", "months since 1955-01-01"])
def test_units_of_no_fixed_length_give_no_dates(write_grid, water, unit):
    columns = open_ocean([write_grid(_with_times(water(), 2), time=([0.5, 6.0], {"units": unit, "axis": "T"}))])
    assert columns["time"].values.tolist() == [0, 1]


def test_one_undated_step_goes(write_grid, water):
    time = ([4614.0], {"units": "months since 1955-01-01 00:00:00"})
    columns = open_ocean([write_grid(_with_times(water(), 1), "x_o07_01.nc", time=time)])
    assert "time" not in columns.coords
    assert any("number in the file name" in sentence for sentence in columns.attrs["conversions"])


# --- large grids stay lazy ---------------------------------------------------------------------------------------


def test_large_grid_stays_lazy_and_equals_the_loaded_one(write_grid, water, monkeypatch):
    time = ([0.0, 31.0], {"units": "days since 2001-01-01"})
    variables = _with_times(water(thetao=(water()["temp"][0], {"units": "degC"})), 2)
    del variables["temp"]
    variables["oxy"][1].update(units="ml/l")
    variables["oxy"] = (variables["oxy"][0] / 44.66, variables["oxy"][1])
    path = write_grid(variables, time=time, chunksizes=(1, 1, 2, 3))
    loaded = open_ocean([path])
    assert not loaded.chunks
    monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
    lazy = open_ocean([path])
    for name in ("temperature", "salinity", "oxygen"):
        assert lazy[name].chunks is not None, name
        assert len(lazy[name].chunksizes["level"]) == 1
    xr.testing.assert_allclose(lazy.compute(), loaded)


def test_only_the_first_time_step_is_loaded_to_judge_a_grid(write_grid, water, monkeypatch):
    import dask

    path = write_grid(_with_times(water(), 2), time=([0.0, 31.0], {"units": "days since 2001-01-01"}))
    loads = []

    def counting(graph, keys, **options):
        loads.append(keys)
        return dask.get(graph, keys, **options)

    def refusing(*_, **__):
        raise AssertionError("computed too early")

    monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
    with dask.config.set(scheduler=counting):
        columns = open_ocean([path])
    assert len(loads) == 1
    with dask.config.set(scheduler=refusing):
        assert (columns["oxygen"] * 2).sizes["time"] == 2
        with pytest.raises(AssertionError, match="computed too early"):
            columns["oxygen"].load()


# --- refusals ----------------------------------------------------------------------------------------------------


def test_curvilinear_grid(write_grid, water):
    variables = {name: (v, a | {"dims": ("depth", "j", "i")}) for name, (v, a) in water().items()}
    for name, standard in (("nav_lat", "latitude"), ("nav_lon", "longitude")):
        attributes = {"standard_name": standard, "units": "degrees", "dims": ("j", "i")}
        variables[name] = (np.arange(6.0).reshape(2, 3), attributes)
    axes = {"j": ([0.0, 1.0], {}), "i": ([0.0, 1.0, 2.0], {})}
    axes |= {"lat": ([0.0], {"units": "1"}), "lon": ([0.0], {"units": "1"})}
    path = write_grid(variables, axes=axes)
    with pytest.raises(InputError, match=r"'nav_lat' has the dimensions .*curvilinear.*interpolate"):
        open_ocean([path])


@pytest.mark.parametrize(
    ("attributes", "message"),
    [
        ({"units": "dbar", "standard_name": "sea_water_pressure"}, "'depth' is pressure"),
        ({"units": "1", "standard_name": "ocean_sigma_coordinate", "axis": "Z"}, "'depth' is ocean_sigma_coordinate"),
        ({"units": "furlong_x", "standard_name": "depth"}, "unit 'furlong_x' is not known"),
        ({"units": "degC", "standard_name": "depth"}, "unit 'degC' cannot be converted"),
        ({"standard_name": "depth"}, "no unit given"),
    ],
)
def test_vertical_coordinates_that_are_no_depth(write_grid, water, attributes, message):
    with pytest.raises(InputError, match=message):
        open_ocean([write_grid(water(), axes={"depth": ([0.0, 50.0, 200.0], attributes)})])


@pytest.mark.parametrize(
    ("axis", "values", "message"),
    [
        ("lat", [0.0, np.nan], "1 of 2 values of the coordinate 'lat' are missing"),
        ("lat", [0.0, 95.0], "latitude 95; expected degrees between -90 and 90"),
        ("lon", [0.0, 10.0, 400.0], "longitude 400; expected degrees between -360 and 360"),
        ("lon", [0.0, 10.0, 10.0], "'lon' repeats 1 of its values"),
        ("depth", [0.0, -50.0, 200.0], "depth has both signs, from -50 to 200 m"),
        ("depth", [0.0, 50.0, 50.0], "'depth' repeats 1 of its values"),
    ],
)
def test_impossible_coordinates(write_grid, water, axis, values, message):
    units = {"lat": "degrees_north", "lon": "degrees_east", "depth": "m"}
    with pytest.raises(InputError, match=message):
        open_ocean([write_grid(water(), axes={axis: (values, {"units": units[axis]})})])


def test_missing_axis(write_grid, water):
    with pytest.raises(InputError, match="no latitude among the variables"):
        open_ocean(
            [
                write_grid(
                    {name: (v, a | {"dims": ("depth", "y", "lon")}) for name, (v, a) in water().items()},
                    axes={"y": ([0.0, 1.0], {})} | {"lat": ([0.0], {"units": "1", "standard_name": "rows"})},
                )
            ]
        )


@pytest.mark.parametrize(("name", "role"), [("oxy", "oxygen"), ("salt", "salinity"), ("temp", "temperature")])
def test_missing_variable(write_grid, water, name, role):
    variables = water()
    del variables[name]
    others = " and ".join(r for r in ("temperature", "salinity", "oxygen") if r != role)
    with pytest.raises(InputError, match=rf"no {role} \(only {others}\).*give the files that hold the others"):
        open_ocean([write_grid(variables)])


def test_missing_unit(write_grid, water):
    variables = water()
    del variables["oxy"][1]["units"]
    with pytest.raises(UnitError, match="'oxy': no unit given; expected the unit of oxygen; give the variable"):
        open_ocean([write_grid(variables)])


def test_a_dimension_of_its_own(write_grid, water):
    variables = water()
    values, attributes = variables["oxy"]
    variables["oxy"] = (np.stack([values, values]), attributes | {"dims": ("member", "depth", "lat", "lon")})
    with pytest.raises(InputError, match=r"'oxy' has a dimension 'member' of size 2.*select one"):
        open_ocean([write_grid(variables, axes={"member": ([1.0, 2.0], {})})])


# --- less usual layouts ------------------------------------------------------------------------------------------


def test_oxygen_per_kilogram_in_another_size(write_grid, water):
    variables = water()
    values, attributes = variables["oxy"]
    variables["oxy"] = (values * 1e-6, attributes | {"units": "mol kg-1"})
    columns = open_ocean([write_grid(variables)])
    np.testing.assert_allclose(columns["oxygen"], np.moveaxis(values, 0, -1), rtol=1e-6)
    assert "oxygen: mol kg-1 to umol/kg (times 1e+06)" in columns.attrs["conversions"]


def test_a_dimension_of_size_one_goes(write_grid, water):
    plain = open_ocean([write_grid(water())])
    variables = water()
    values, attributes = variables["oxy"]
    variables["oxy"] = (values[None], attributes | {"dims": ("member", "depth", "lat", "lon")})
    path = write_grid(variables, "member.nc", axes={"member": ([1.0], {})})
    xr.testing.assert_identical(open_ocean([path]).drop_attrs(), plain.drop_attrs())


@pytest.mark.parametrize("mark", [{"positive": "down"}, {"axis": "Z"}])
def test_a_vertical_axis_known_only_by_its_mark(write_grid, water, mark):
    variables = {name: (v, a | {"dims": ("z_t", "lat", "lon")}) for name, (v, a) in water().items()}
    axes = {"z_t": ([0.0, 5000.0, 20000.0], {"units": "centimeters"} | mark), "depth": ([0.0], {"units": "1"})}
    path = write_grid(variables, axes=axes)
    with netCDF4.Dataset(path, "a") as file:
        file.renameVariable("depth", "unrelated")
    np.testing.assert_allclose(open_ocean([path])["depth"], [0, 50, 200])


@pytest.mark.parametrize("unit", ["days since the flood", "year A.D."])
def test_times_that_cannot_be_decoded_are_numbered(write_grid, water, unit):
    columns = open_ocean([write_grid(_with_times(water(), 2), time=([1.0, 2.0], {"units": unit, "axis": "T"}))])
    assert columns["time"].values.tolist() == [0, 1]
    assert columns["time"].attrs["long_name"] == "number of the time step in the file"


def test_packed_numbers_are_unpacked(write_grid, water):
    path = write_grid(water())
    with netCDF4.Dataset(path, "a") as file:
        packed = file.createVariable("o2", "i2", ("depth", "lat", "lon"), fill_value=-32768)
        packed.setncatts({"units": "umol/kg", "scale_factor": 0.01, "add_offset": 200.0})
        packed[:] = water()["oxy"][0]
    columns = open_ocean([path], choose={"oxygen": "o2"})
    np.testing.assert_allclose(columns["oxygen"], np.moveaxis(water()["oxy"][0], 0, -1), atol=0.0051)


def test_coordinates_can_be_chosen(write_grid, water):
    path = write_grid(water())
    with netCDF4.Dataset(path, "a") as file:
        file.createVariable("lev", "f8", ("depth",)).setncatts({"units": "m", "standard_name": "depth"})
        file["lev"][:] = [1.0, 51.0, 201.0]
    assert open_ocean([path])["depth"].values.tolist() == [0, 50, 200]
    assert open_ocean([path], choose={"depth": "lev"})["depth"].values.tolist() == [1, 51, 201]
