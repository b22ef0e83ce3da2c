"""From the names of files to water columns: expand patterns, read each file, complete it, join the files."""

import glob
from collections.abc import Mapping, Sequence
from pathlib import Path

import xarray as xr

from habitat.errors import InputError
from habitat.files import sha256
from habitat.ocean.casts import join
from habitat.ocean.columns import complete
from habitat.ocean.csv_casts import read_csv_casts
from habitat.ocean.exchange import check_flags, read_exchange
from habitat.ocean.gridded import read_grid
from habitat.ocean.merging import merge_grids
from habitat.ocean.profiles import refuse_profiles
from habitat.ocean.recognise import Kind, reading_errors, recognise
from habitat.ocean.roles import WATER, check_choice

LAZY_LIMIT = 64 * 2**20  # bytes of temperature, salinity and oxygen as float64; larger grids stay lazy


def open_ocean(
    files: Sequence[str | Path],
    *,
    choose: Mapping[str, str] | None = None,
    keep_flags: Mapping[str, Sequence[int]] | None = None,
) -> xr.Dataset:
    """Open ocean files as water columns.

    Parameters
    ----------
    files : sequence of str or Path
        CSV tables and WHP-Exchange files (mixed at will), or gridded netCDF files; patterns such as ``casts/*.csv``
        are expanded, in order of name. A file named twice is read once.
    choose : mapping, optional
        Part (``oxygen``, ``temperature``, ...) to the variable or column that plays it, where a file has several.
    keep_flags : mapping, optional
        Quality flags of WHP-Exchange files whose values are used; default ``{"ctd": [2, 6, 7], "water": [2, 6],
        "bottle": [2]}``.

    Returns
    -------
    xr.Dataset
        temperature [degC, in situ, ITS-90], salinity [practical], oxygen [umol/kg], depth [m, positive down],
        pressure [dbar] and, where known, seabed_depth [m]. Either casts, with dimensions (cast, level), padded with
        NaN and sorted by depth, or a grid, (time?, latitude, longitude, level), lazy when larger than 64 MB.
        Attributes: form ("casts" or "grid"), sources (path to SHA-256), conversions, discarded (reason to count),
        suspicious.

    Raises
    ------
    InputError
        A file cannot be used; the message says why and what to do.
    UnitError
        A unit is missing or not of the right kind.
    """
    paths = expand(files)
    choose, flags = check_choice(choose), check_flags(keep_flags)
    kinds = {path: recognise(path) for path in paths}
    grids = [path for path, kind in kinds.items() if kind.startswith("netCDF")]
    casts = [path for path in paths if path not in grids]
    if casts and grids:
        raise InputError(
            "casts and a grid are given together",
            where=f"{casts[0]} and {grids[0]}",
            expected="only casts, or only grids",
            remedy="open them in two runs",
        )
    columns = _open_grids(kinds, choose) if grids else _open_casts(kinds, choose, flags)
    columns.attrs["sources"] = {path: sha256(path) for path in paths}
    return columns


def expand(files: Sequence[str | Path]) -> list[str]:
    """Expand patterns; the order is that of `files`, within a pattern that of the names; copies are dropped.

    Raises
    ------
    InputError
        No file is named, or a pattern matches nothing.
    """
    if not files:
        raise InputError("no ocean file given", expected="at least one CSV, WHP-Exchange or netCDF file")
    paths: list[str] = []
    for name in map(str, files):
        if glob.has_magic(name) and not Path(name).exists():
            matched = sorted(glob.glob(name, recursive=True))
            if not matched:
                raise InputError("no file matches this pattern", where=name, remedy="check folder and ending")
            paths += matched
        else:
            paths.append(name)
    unique: dict[Path, str] = {}
    for path in paths:
        unique.setdefault(Path(path).resolve(), path)
    return list(unique.values())


def read(path: str, kind: Kind, choose: Mapping[str, str], flags: Mapping[str, Sequence[int]]) -> xr.Dataset:
    """Read one file of a recognised kind, in its own units; see the readers for what may be raised."""
    if kind == "netCDF profiles":
        raise refuse_profiles(path)
    if kind == "netCDF grid":
        return read_grid(path, choose)
    if kind == "CSV table":
        return read_csv_casts(path, choose)
    return read_exchange(path, choose, flags, kind)


def load_small(raw: xr.Dataset) -> xr.Dataset:
    """Load a raw grid whose water variables stay under `LAZY_LIMIT`; leave a larger one lazy."""
    size = sum(raw[role].size * 8 for role in WATER if role in raw)
    if size > LAZY_LIMIT:
        return raw
    with reading_errors(raw.attrs["source"]):
        return raw.load()


def _open_grids(kinds: Mapping[str, Kind], choose: Mapping[str, str]) -> xr.Dataset:
    raws = [read(path, kind, choose, {}) for path, kind in kinds.items()]
    names = {name for raw in raws for name in raw.attrs["names"]}
    for role, wanted in choose.items():
        if wanted not in names:
            raise InputError(
                f"no variable '{wanted}' for the {role}",
                where=" and ".join(list(kinds)[:3]),
                expected=f"one of {', '.join(sorted(names))}",
            )
    raw = merge_grids(raws) if len(raws) > 1 else raws[0]
    columns = complete(load_small(raw))
    columns.attrs = {name: columns.attrs[name] for name in ("form", "conversions", "discarded", "suspicious")}
    return columns


def _open_casts(kinds: Mapping[str, Kind], choose: Mapping[str, str], flags: Mapping[str, Sequence[int]]) -> xr.Dataset:
    parts = {path: complete(read(path, kind, choose, flags)) for path, kind in kinds.items()}
    joined = join(parts)
    discarded: dict[str, int] = {}
    for part in parts.values():
        for reason, count in part.attrs["discarded"].items():
            discarded[reason] = discarded.get(reason, 0) + count
    several = len(parts) > 1
    joined.attrs = {
        "form": "casts",
        "conversions": list(dict.fromkeys(s for part in parts.values() for s in part.attrs["conversions"])),
        "discarded": discarded,
        "suspicious": [
            f"{path}: {sentence}" if several else sentence
            for path, part in parts.items()
            for sentence in part.attrs["suspicious"]
        ],
    }
    return joined
