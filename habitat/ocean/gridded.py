"""Gridded netCDF files with one-dimensional latitude and longitude: climatologies and regridded model output."""

import re
from collections.abc import Hashable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from habitat.errors import InputError
from habitat.ocean import roles
from habitat.ocean.recognise import open_netcdf, reading_errors
from habitat.ocean.vertical import downward

CHUNK_SIZE = "16MiB"  # of the file's own numbers; the conversions hold about ten such blocks per thread at a time
UNIT_REMEDY = "give the variable an attribute units, for example '{unit}'"
PART_HINT = "a variable for the {role} with a CF standard name (see the CF standard name table) and a unit"
_DEGREES = {
    "latitude": ("degrees_north", "degree_north", "degrees_n", "degree_n", "degreen", "degreesn"),
    "longitude": ("degrees_east", "degree_east", "degrees_e", "degree_e", "degreee", "degreese"),
}
_AXIS_LETTER = {"depth": "Z", "time": "T", "latitude": "Y", "longitude": "X"}
_CLIMATOLOGY_CODE = re.compile(r"_[A-Za-z](\d\d)_")  # 00 the year, 01-12 months, 13-16 seasons


def read_grid(path: str | Path, choose: Mapping[str, str]) -> xr.Dataset:
    """Read one gridded netCDF file, without loading its variables.

    Parameters
    ----------
    path : str or Path
    choose : mapping
        Part to variable name; names that this file does not have are passed over, as another file may have them.

    Returns
    -------
    xr.Dataset
        Those of temperature, salinity, oxygen (time?, latitude, longitude, level; dask) and seabed_depth that the file
        has, in its own units; depth (level) in m, increasing. The time coordinate has an attribute `kind`: "date",
        "code" (of a climatology, from the file name) or "index".

    Raises
    ------
    InputError
        The grid is curvilinear, its vertical coordinate is not depth, a coordinate has gaps, or a part is ambiguous.
    """
    where = str(path)
    with open_netcdf(path) as metadata:
        axes = _axes(metadata, choose, where)
        dims = {str(metadata[name].dims[0]): role for role, name in axes.items() if metadata[name].ndim == 1}
        parts = _parts(metadata, dims, choose, where)
        names = [str(name) for name in metadata.variables]
    dataset = _open_lazily(path, {*axes.values(), *parts.values()}, dims)
    raw = xr.Dataset()
    for role, name in parts.items():
        raw[role] = _labelled(dataset[name], role, dims, where)
    raw.attrs = {
        "form": "grid",
        "source": where,
        "reader": "netCDF grid",
        "unit_remedy": UNIT_REMEDY,
        "part_hint": PART_HINT,
        "names": names,
        "conversions": [],
        "suspicious": [],
        "discarded": {},
    }
    for role in ("latitude", "longitude"):
        raw.coords[role] = (role, _complete_axis(dataset[axes[role]], role, where), {"name": axes[role]})
    if "time" in axes:
        raw = _add_time(raw, dataset[axes["time"]], path)
    return _add_depth(raw, dataset[axes["depth"]], where)


# --- finding axes and variables ----------------------------------------------------------------------------------


def _axes(metadata: xr.Dataset, choose: Mapping[str, str], where: str) -> dict[str, str]:
    """Part to name of the coordinate variable: latitude, longitude, depth and, if there is one, time."""
    axes = {}
    for role in ("latitude", "longitude"):
        found = _axis_candidates(metadata, role, choose)
        if not found:
            raise InputError(
                f"no {role} among the variables {', '.join(map(str, metadata.variables)) or '(none)'}",
                where=where,
                expected=f"a variable with standard_name = '{role}'",
            )
        name = roles.single(role, found, where)
        if metadata[name].ndim > 1:
            raise InputError(
                f"'{name}' has the dimensions {metadata[name].dims}: the grid is curvilinear",
                where=where,
                expected="latitude and longitude of one dimension each",
                remedy="interpolate it to a regular grid first; curvilinear grids are not read yet",
            )
        axes[role] = name
    axes["depth"] = _depth_axis(metadata, choose, where)
    time = _axis_candidates(metadata, "time", choose)
    if time and metadata[time[0]].ndim <= 1:
        axes["time"] = time[0]
    return axes


def _axis_candidates(metadata: xr.Dataset, role: str, choose: Mapping[str, str]) -> list[str]:
    variables = {str(name): v.attrs for name, v in metadata.variables.items() if v.ndim <= 2 and v.dtype.kind in "fiu"}
    if role in choose:
        return [name for name in variables if name == choose[role]]
    found = roles.by_attributes(role, variables)
    if not found:
        found = [n for n, a in variables.items() if str(a.get("units", "")).lower() in _DEGREES.get(role, ())]
    if not found and role == "depth":
        found = [name for name, attributes in variables.items() if "positive" in attributes and name in metadata.dims]
    if not found and role in _AXIS_LETTER:
        found = [n for n, a in variables.items() if a.get("axis") == _AXIS_LETTER[role] and n in metadata.dims]
    return [name for name in found if name in metadata.dims] or found


def _depth_axis(metadata: xr.Dataset, choose: Mapping[str, str], where: str) -> str:
    found = [n for n in _axis_candidates(metadata, "depth", choose) if metadata[n].ndim == 1]
    if not found:
        pressure = [n for n in _axis_candidates(metadata, "pressure", choose) if metadata[n].ndim == 1]
        what = f"the vertical coordinate '{pressure[0]}' is pressure" if pressure else "no vertical coordinate of depth"
        raise InputError(
            f"{what} (dimensions: {', '.join(map(str, metadata.sizes))})",
            where=where,
            expected="a one-dimensional variable with standard_name = 'depth' and a unit such as m",
            remedy="interpolate the grid to depths first; pressure grids are not read yet" if pressure else "",
        )
    name = roles.single("depth", found, where)
    standard = str(metadata[name].attrs.get("standard_name", "depth"))
    if standard != "depth" or "formula_terms" in metadata[name].attrs:
        raise InputError(
            f"the vertical coordinate '{name}' is {standard}",
            where=where,
            expected="depth in metres",
            remedy="interpolate the grid to depths first; terrain-following and density grids are not read yet",
        )
    return name


def _parts(metadata: xr.Dataset, dims: Mapping[str, str], choose: Mapping[str, str], where: str) -> dict[str, str]:
    """Part to variable: the water variables that span the grid, and the depth of the sea floor."""
    of_role = {role: dim for dim, role in dims.items()}
    grid = {of_role["latitude"], of_role["longitude"]}
    cube = [name for name, v in metadata.data_vars.items() if grid | {of_role["depth"]} <= set(v.dims)]
    parts = {}
    for role, candidates in _candidates(metadata, cube, choose).items():
        name = roles.single(role, candidates, where)
        if name is not None:
            parts[role] = name
    flat = {str(name): v.attrs for name, v in metadata.variables.items() if set(v.dims) == grid}
    floors = [n for n in flat if n == choose.get("seabed_depth")] or roles.by_attributes("seabed_depth", flat)
    seabed = roles.single("seabed_depth", floors, where)
    return parts | ({"seabed_depth": seabed} if seabed else {})


def _candidates(metadata: xr.Dataset, names: list[Hashable], choose: Mapping[str, str]) -> dict[str, list[str]]:
    """Candidates for temperature, salinity and oxygen among the named variables of an open netCDF file."""
    attributes = {str(name): metadata[name].attrs for name in names if metadata[name].dtype.kind in "fiu"}
    return {
        role: [n for n in attributes if n == choose[role]] if role in choose else roles.by_attributes(role, attributes)
        for role in roles.WATER
    }


# --- labelling ---------------------------------------------------------------------------------------------------


def _open_lazily(path: str | Path, wanted: set[str], dims: Mapping[str, str]) -> xr.Dataset:
    """Open with the whole depth in one chunk and the other dimensions in multiples of the file's own chunks."""
    import dask

    chunks = {dim: -1 if role == "depth" else "auto" for dim, role in dims.items()}
    with open_netcdf(path) as metadata:
        others = [name for name in metadata.variables if name not in wanted]
        chunks |= {dim: -1 for dim in metadata.sizes if dim not in chunks}
    with dask.config.set({"array.chunk-size": CHUNK_SIZE}):
        return open_netcdf(path, chunks=chunks, drop_variables=others)


def _labelled(values: xr.DataArray, role: str, dims: Mapping[str, str], where: str) -> xr.DataArray:
    """Rename the dimensions to those of the contract and drop those of size one."""
    name, attributes = str(values.name), values.attrs
    for dim in set(map(str, values.dims)) - set(dims):
        if values.sizes[dim] > 1:
            raise InputError(
                f"'{name}' has a dimension '{dim}' of size {values.sizes[dim]}",
                where=where,
                expected="no dimensions but time, depth, latitude and longitude",
                remedy=f"select one '{dim}' and save that",
            )
        values = values.isel({dim: 0})
    renamed = {dim: "level" if part == "depth" else part for dim, part in dims.items() if dim in values.dims}
    values = values.reset_coords(drop=True).drop_vars(list(values.coords), errors="ignore").rename(renamed)
    order = [dim for dim in ("time", "latitude", "longitude", "level") if dim in values.dims]
    standard = str(attributes.get("standard_name", ""))
    values.attrs = {
        "units": str(attributes.get("units", "")),
        "name": name,
        "standard_name": standard,
        **roles.kind_attributes(role, name, standard),
    }
    return values.transpose(*order)


def _complete_axis(axis: xr.DataArray, role: str, where: str) -> np.ndarray:
    with reading_errors(where):
        values = np.asarray(axis.to_numpy(), dtype=float)
    if np.isnan(values).any():
        raise InputError(
            f"{np.isnan(values).sum()} of {values.size} values of the coordinate '{axis.name}' are missing",
            where=where,
            expected=f"a {role} for every step of the grid",
        )
    repeated = values.size - np.unique(values).size
    if repeated:
        raise InputError(f"the coordinate '{axis.name}' repeats {repeated} of its values", where=where)
    return values


def _add_depth(raw: xr.Dataset, axis: xr.DataArray, where: str) -> xr.Dataset:
    values = _complete_axis(axis, "depth", where)
    attributes = {key: str(axis.attrs.get(key, "")) for key in ("units", "positive")} | {"name": str(axis.name)}
    depth, conversions, suspicious = downward(
        xr.DataArray(values, dims="level", attrs=attributes), "depth", f"{where}, variable '{axis.name}'"
    )
    raw = raw.assign_coords(depth=depth)
    order = np.argsort(depth.to_numpy(), kind="stable")
    if (np.diff(order) < 0).any():
        conversions.append("depth: levels put in order of increasing depth")
        raw = raw.isel(level=order)
    raw.attrs["conversions"] += conversions
    raw.attrs["suspicious"] += suspicious
    return raw


def _add_time(raw: xr.Dataset, times: xr.DataArray, path: str | Path) -> xr.Dataset:
    """Decode the times; where that is impossible, keep the month from the file name, or number the steps."""
    if times.ndim == 0:
        raw = raw.assign({role: raw[role].expand_dims("time") for role in roles.WATER if role in raw})
    if "time" not in raw.dims:
        return raw
    unit = str(times.attrs.get("units", ""))
    values = _decoded(times)
    kind = "date"
    if values is None:
        code = _CLIMATOLOGY_CODE.search(Path(path).name)
        if code and times.size == 1:
            kind, values = "code", np.array([int(code[1])])
            meaning = "its number in the file name was taken (0 the year, 1-12 months, 13-16 seasons)"
        else:
            kind, values = "index", np.arange(times.size)
            meaning = "the steps were numbered from 0"
        raw.attrs["conversions"].append(f"time: '{unit}' gives no dates; {meaning}")
    elif values.dtype == object:
        calendar = times.attrs.get("calendar", "standard")
        raw.attrs["conversions"].append(f"time: dates kept in the calendar '{calendar}'")
    return raw.assign_coords(time=("time", values, {"kind": kind, "name": str(times.name)}))


def _decoded(times: xr.DataArray) -> Any:
    """Dates of a time coordinate, as cftime objects where the calendar asks for it; None where it has no dates.

    Months have no fixed length, except in a calendar of 360 days: elsewhere `months since` is not decoded.
    """
    bare = xr.Dataset({"time": ("time", np.atleast_1d(times.to_numpy()), times.attrs)})
    try:
        with reading_errors(str(times.name)):
            decoded = xr.decode_cf(bare)["time"].to_numpy()
    except (ValueError, OverflowError):
        return None
    if decoded.dtype.kind == "M":
        decoded = decoded.astype("datetime64[ns]")
    return decoded if decoded.dtype.kind in "MO" and not np.equal(decoded, None).any() else None
