"""Grids in several files: a variable a file, a time a file, both, and what cannot be merged."""

import numpy as np
import pytest
import xarray as xr

from habitat.errors import InputError
from habitat.ocean import open_ocean, opening

MONTHS = {"units": "months since 1955-01-01 00:00:00"}


@pytest.fixture
def write_climatology(write_grid, water):
    """Three files a month, laid out like a climatology: `x_t07_01.nc` with `t_an` and its statistics."""

    def writer(code, scale=1.0, depths=None):
        paths = []
        for letter, name in (("t", "temp"), ("s", "salt"), ("o", "oxy")):
            values, attributes = water()[name]
            factor = scale if letter == "o" else 1.0
            variables = {
                f"{letter}_an": (values[None] * factor, dict(attributes)),
                f"{letter}_sd": (values[None] * 0.1, dict(attributes)),
            }
            axes = {"depth": (depths, {"units": "meters", "positive": "down"})} if depths and letter == "o" else None
            time = ([4614.0 + (letter == "o")], MONTHS)
            paths.append(write_grid(variables, f"x_{letter}{code:02d}_01.nc", time=time, axes=axes))
        return paths

    return writer


def test_three_files_equal_one(write_climatology, write_grid, water):
    columns = open_ocean(write_climatology(0))
    plain = open_ocean([write_grid(water())])
    xr.testing.assert_allclose(columns.drop_attrs(), plain.drop_attrs())
    assert len(columns.attrs["sources"]) == 3
    assert all(len(digest) == 64 for digest in columns.attrs["sources"].values())
    assert "time" not in columns.coords


def test_months_in_files_of_their_own(write_climatology):
    paths = [path for code in (7, 1) for path in write_climatology(code, scale=1 + code / 100)]
    columns = open_ocean(paths)
    assert columns["time"].values.tolist() == [1, 7]
    assert columns["time"].attrs["long_name"].startswith("part of the year")
    np.testing.assert_allclose(columns["oxygen"].sel(time=7) / columns["oxygen"].sel(time=1), 1.07 / 1.01, rtol=1e-6)


def test_order_of_the_files_does_not_matter(write_climatology):
    paths = write_climatology(3)
    xr.testing.assert_identical(open_ocean(paths).drop_attrs(), open_ocean(paths[::-1]).drop_attrs())


def test_depths_in_common_are_kept(write_climatology):
    columns = open_ocean(write_climatology(0, depths=[0.0, 60.0, 200.0]))
    assert columns["depth"].values.tolist() == [0, 200]
    assert "depth: the files have 3 depths; the 2 in common were kept" in columns.attrs["conversions"]
    assert float(columns["oxygen"][0, 0, 1]) == pytest.approx(22.12, rel=1e-6)  # the third level of the fixture


def test_merged_grid_stays_lazy(write_climatology, monkeypatch):
    paths = [path for code in (1, 2) for path in write_climatology(code)]
    loaded = open_ocean(paths)
    monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
    lazy = open_ocean(paths)
    assert lazy["oxygen"].chunks is not None
    assert len(lazy["oxygen"].chunksizes["level"]) == 1
    xr.testing.assert_allclose(lazy.compute(), loaded)


def _dated(write_grid, water, name, days, keep=("temp", "salt", "oxy"), **options):
    variables = {key: (np.stack([v] * len(days)), a) for key, (v, a) in water().items() if key in keep}
    return write_grid(variables, name, time=(days, {"units": "days since 2001-01-01"}), **options)


def test_dates_in_files_of_their_own_are_put_in_order(write_grid, water):
    paths = [_dated(write_grid, water, "b.nc", [31.0, 59.0]), _dated(write_grid, water, "a.nc", [0.0])]
    columns = open_ocean(paths)
    dates = columns["time"].values.astype("datetime64[D]").astype(str).tolist()
    assert dates == ["2001-01-01", "2001-02-01", "2001-03-01"]
    assert columns["oxygen"].dims == ("time", "latitude", "longitude", "level")


def test_one_time_beside_several_holds_for_all(write_grid, water):
    paths = [
        _dated(write_grid, water, "to.nc", [0.0, 31.0], keep=("temp", "oxy")),
        _dated(write_grid, water, "s.nc", [0.0], keep=("salt",)),
    ]
    columns = open_ocean(paths)
    assert columns["oxygen"].sizes["time"] == 2
    assert "time: salinity of one time, used for all 2 times" in columns.attrs["conversions"]


def test_sea_floor_in_a_file_of_its_own(write_grid, water):
    floor = {"deptho": (np.full((2, 3), 400.0), {"units": "m", "dims": ("lat", "lon")})}
    columns = open_ocean([write_grid(water()), write_grid(floor, "floor.nc")])
    assert columns["seabed_depth"].values.tolist() == [[400] * 3] * 2


@pytest.mark.parametrize(
    ("axes", "message"),
    [
        ({"lon": ([200.0, 210.0, 221.0], {"units": "degrees_east"})}, "the longitudes differ: 3 from 200 to 220, and"),
        ({"lat": ([0.0, -10.0], {"units": "degrees_north"})}, "the latitudes differ: 2 from -10 to 0, and 2 from 0"),
        ({"depth": ([1.0, 51.0, 201.0], {"units": "m"})}, "the files have no depth in common"),
    ],
)
def test_different_grids(write_grid, water, axes, message):
    paths = [
        _dated(write_grid, water, "to.nc", [0.0], keep=("temp", "oxy")),
        _dated(write_grid, water, "s.nc", [0.0], keep=("salt",), axes=axes),
    ]
    with pytest.raises(InputError, match=message):
        open_ocean(paths)


def test_different_times(write_grid, water):
    paths = [
        _dated(write_grid, water, "to.nc", [0.0], keep=("temp", "oxy")),
        _dated(write_grid, water, "s.nc", [31.0], keep=("salt",)),
    ]
    with pytest.raises(InputError, match="the times differ: 1 from 2001-0"):
        open_ocean(paths)


def test_different_months(write_climatology):
    july, january = write_climatology(7), write_climatology(1)
    with pytest.raises(InputError, match="the times differ: 1 from 7 to 7, and 1 from 1 to 1"):
        open_ocean([january[0], january[1], july[2]])


def test_the_same_time_twice(write_grid, water):
    paths = [_dated(write_grid, water, name, [0.0]) for name in ("a.nc", "b.nc")]
    with pytest.raises(InputError, match=r"the time 2001-01-01T00:00:00.* is there more than once"):
        open_ocean(paths)


def test_the_same_variables_without_times(write_grid, water):
    with pytest.raises(InputError, match="both files hold the same variables, and not both have times"):
        open_ocean([write_grid(water(), name) for name in ("a.nc", "b.nc")])


def test_dates_beside_none(write_grid, water):
    variables = {key: (v[None], a) for key, (v, a) in water().items()}
    paths = [_dated(write_grid, water, "a.nc", [0.0]), write_grid(variables, "b.nc", time=([3.0], MONTHS))]
    with pytest.raises(InputError, match="some files have dates and others have not"):
        open_ocean(paths)


def test_a_variable_in_two_files(write_grid, water):
    paths = [
        _dated(write_grid, water, "to.nc", [0.0], keep=("temp", "oxy")),
        _dated(write_grid, water, "so.nc", [0.0], keep=("salt", "oxy")),
    ]
    with pytest.raises(InputError, match=r"to\.nc and .*so\.nc: oxygen is in both files"):
        open_ocean(paths)


def test_a_file_without_any_part(write_grid, water):
    other = {"chl": (water()["oxy"][0], {"units": "mg m-3"})}
    with pytest.raises(InputError, match=r"other\.nc: no temperature, salinity or oxygen among the variables .*chl"):
        open_ocean([write_grid(water()), write_grid(other, "other.nc")])
