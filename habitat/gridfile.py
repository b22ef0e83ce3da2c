"""Column totals on grids as CF-1.11 netCDF."""

import errno
import os
import shutil
from importlib.metadata import version
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from habitat.files import atomic_path

CONVENTIONS = "CF-1.11"

LITTLE_SPACE = 2**20
"""A failed write with less than this left on the disk is taken as a full disk [bytes]."""

FILL = np.float32(9.96921e36)

_COORDINATES = {
    "latitude": {"units": "degrees_north", "standard_name": "latitude", "long_name": "latitude", "axis": "Y"},
    "longitude": {"units": "degrees_east", "standard_name": "longitude", "long_name": "longitude", "axis": "X"},
    "level": {"long_name": "level, counted from the surface", "units": "1"},
    "activity": {"units": "1", "long_name": "activity factor: multiple of the resting rate to be sustained"},
    "species": {"long_name": "name of the animal"},
    "scenario": {"long_name": "the ocean: baseline, or with stated changes"},
}


def cf_dataset(totals: xr.Dataset, *, title: str, source: str, comment: str) -> xr.Dataset:
    """Add what CF-1.11 asks of a file to totals of grid columns; any further leading dimensions are kept."""
    result = totals.assign_attrs(
        Conventions=CONVENTIONS,
        title=title,
        source=source,
        comment=comment,
        history=f"written by habitat {version('habitat')}",  # no date: the same input gives the same bytes
    )
    for name, attributes in _COORDINATES.items():
        if name in result.coords:
            result[name].attrs = attributes
    if "time" in result.coords:
        result["time"].attrs = {"standard_name": "time", "long_name": "time", "axis": "T"}
        if result["time"].dtype.kind not in "MO":  # a month or season of a climatology, not a date
            result["time"].attrs = {"long_name": "step or month of the climatology", "units": "1"}
    return result


def write_grid(dataset: xr.Dataset, path: str | Path) -> None:
    """Write a gridded Dataset, float32 and compressed; the file appears when it is complete.

    Raises
    ------
    OutputError
        The file cannot be written.
    """
    encoding: dict[str, dict[str, Any]] = {
        str(name): {"dtype": "float32", "zlib": True, "complevel": 4, "_FillValue": FILL} for name in dataset.data_vars
    }
    for name in dataset.coords:
        if dataset[name].dtype.kind in "fi":
            encoding[str(name)] = {"_FillValue": None}
    if "time" in dataset.coords and dataset["time"].dtype.kind in "MO":
        encoding["time"] = {"units": "days since 1950-01-01", "dtype": "float64", "_FillValue": None}
    with atomic_path(path) as temporary:
        try:
            dataset.to_netcdf(temporary, engine="netcdf4", format="NETCDF4", encoding=encoding)
        except RuntimeError as error:  # the netCDF library does not say why it failed
            if shutil.disk_usage(temporary.parent).free < LITTLE_SPACE:
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC)) from error
            raise
