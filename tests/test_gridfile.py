"""Grids as CF-1.11 netCDF: attributes, values, times, and the same bytes."""

import errno
import os
import time

import cftime
import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat.errors import OutputError
from habitat.gridfile import cf_dataset, write_grid

SPECIES, SCENARIOS = ["Veil prawn", "Крилль"], ["baseline", "warmer"]


def totals(times=None):
    rng = np.random.default_rng(1)
    dims = ["species", "scenario", "activity", "time", "latitude", "longitude"]
    shape = [2, 2, 2, 3, 2, 3]
    if times is None:
        dims.remove("time")
        shape.pop(3)
    thickness = rng.uniform(0, 1500, shape)
    thickness[..., 0, 0] = np.nan
    coords = {
        "species": SPECIES,
        "scenario": SCENARIOS,
        "activity": [1.0, 2.5],
        "latitude": [-10.0, 0.0],
        "longitude": [359.0, 0.0, 1.0],
    }
    if times is not None:
        coords["time"] = times
    variables = {
        "thickness": (dims, thickness, {"units": "m", "long_name": "total thickness of viable water"}),
        "band_count": (dims, np.nan_to_num(thickness) // 500, {"units": "1", "long_name": "number of viable bands"}),
    }
    return xr.Dataset(variables, coords=coords)


def finished(times=None):
    return cf_dataset(totals(times), title="Krill", source="a.nc", comment="a comment")


MONTHS = pd.to_datetime(["2001-01-16", "2001-02-15T12:00", "2001-03-16"], format="ISO8601")
NOLEAP = [cftime.DatetimeNoLeap(2001, month, 16, 12) for month in (1, 2, 3)]


@pytest.mark.parametrize("times", [None, MONTHS, NOLEAP, [1, 2, 3]], ids=["none", "dates", "noleap", "months"])
def test_the_file_says_what_it_holds(tmp_path, times):
    write_grid(finished(times), tmp_path / "g.nc")
    with netCDF4.Dataset(tmp_path / "g.nc") as file:
        assert file.Conventions == "CF-1.11"
        assert (file.title, file.source, file.comment) == ("Krill", "a.nc", "a comment")
        assert file.history.startswith("written by habitat ")
        for name, variable in file.variables.items():
            assert variable.long_name, name
            assert name in ("species", "scenario") or variable.units, name
        assert file["latitude"].standard_name == "latitude"
        assert file["latitude"].units == "degrees_north"
        assert file["longitude"].standard_name == "longitude"
        assert file["longitude"].units == "degrees_east"
        assert file["thickness"].dtype == np.float32
        assert "_FillValue" in file["thickness"].ncattrs()
        # CF-1.11, section 2.5.1: coordinate variables have no missing values
        assert not any("_FillValue" in file[name].ncattrs() for name in file.dimensions if name in file.variables)


@pytest.mark.parametrize("times", [None, MONTHS, NOLEAP, [1, 2, 3]], ids=["none", "dates", "noleap", "months"])
def test_values_and_coordinates_come_back(tmp_path, times):
    written = finished(times)
    write_grid(written, tmp_path / "g.nc")
    with xr.open_dataset(tmp_path / "g.nc") as read:
        xr.testing.assert_equal(read["thickness"].drop_vars("time", errors="ignore"),
                                written["thickness"].astype("float32").drop_vars("time", errors="ignore"))  # fmt: skip
        np.testing.assert_array_equal(read["band_count"], written["band_count"])
        assert read["species"].values.tolist() == SPECIES
        assert read["scenario"].values.tolist() == SCENARIOS
        if times is not None:
            assert list(read["time"].values) == list(written["time"].values)


def test_dates_are_days_in_their_own_calendar(tmp_path):
    write_grid(finished(NOLEAP), tmp_path / "g.nc")
    with netCDF4.Dataset(tmp_path / "g.nc") as file:
        assert (file["time"].units, file["time"].calendar) == ("days since 1950-01-01", "noleap")
        assert file["time"].standard_name == "time"
        # 51 years of 365 days, 15 days and a half
        assert file["time"][0] == 51 * 365 + 15.5


def test_months_are_not_dates(tmp_path):
    write_grid(finished([1, 2, 3]), tmp_path / "g.nc")
    with netCDF4.Dataset(tmp_path / "g.nc") as file:
        assert file["time"].units == "1"
        assert "standard_name" not in file["time"].ncattrs()


def test_the_totals_given_are_not_changed():
    given = totals(MONTHS)
    cf_dataset(given, title="Krill", source="a.nc", comment="")
    assert given.attrs == {}
    assert given["time"].attrs == {}


def test_lazy_values_are_written_without_being_held(tmp_path):
    lazy = finished().chunk({"latitude": 1})
    write_grid(lazy, tmp_path / "g.nc")
    with xr.open_dataset(tmp_path / "g.nc") as read:
        np.testing.assert_array_equal(read["thickness"], finished()["thickness"].astype("float32"))


def test_the_same_grid_gives_the_same_bytes_a_second_later(tmp_path):
    for name in ("a.nc", "b.nc"):
        write_grid(finished(MONTHS), tmp_path / name)
        time.sleep(1.1)
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()


def test_a_grid_that_cannot_be_written_leaves_nothing(tmp_path):
    with pytest.raises(OutputError, match=r"g\.nc: cannot be written .*; the folder does not exist"):
        write_grid(finished(), tmp_path / "absent" / "g.nc")

    def full(_values):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    (tmp_path / "g.nc").write_text("earlier")
    broken = xr.map_blocks(full, finished().chunk(), template=finished().chunk())
    with pytest.raises(OutputError, match=r"g\.nc: .*the disk is full"):
        write_grid(broken, tmp_path / "g.nc")
    assert (tmp_path / "g.nc").read_text() == "earlier"
    assert os.listdir(tmp_path) == ["g.nc"]
