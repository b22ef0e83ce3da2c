"""Several gridded files made one: variables in files of their own, times in files of their own, or both."""

from collections.abc import Sequence

import numpy as np
import xarray as xr

from habitat.errors import InputError
from habitat.ocean.roles import WATER

SAME_PLACE = 1e-4  # degrees; coordinates stored in single precision differ by less
SAME_DEPTH = 0.01  # m


def merge_grids(grids: Sequence[xr.Dataset]) -> xr.Dataset:
    """Merge the raw grids of several files.

    Files that hold the same variables are joined along time; files that hold different ones are laid over each other.
    Where the depths differ, those common to all are kept.

    Raises
    ------
    InputError
        The positions or times differ, a variable is in two files at the same time, or a file has none of them.
    """
    _check_positions(grids)
    conversions: list[str] = []
    grids = _common_depths(grids, conversions)
    groups: dict[frozenset[str], list[xr.Dataset]] = {}
    for grid in grids:
        held = frozenset(role for role in WATER if role in grid)
        groups.setdefault(held or frozenset(map(str, grid.data_vars)), []).append(grid)
    _check_held_once(groups)
    joined = [_along_time(group) for group in groups.values()]
    merged = xr.merge(
        _matching_times(joined, conversions), compat="override", join="override", combine_attrs="override"
    )
    for name in ("latitude", "longitude"):
        merged[name].attrs = grids[0][name].attrs
    sources = [grid.attrs["source"] for grid in grids]
    merged.attrs = grids[0].attrs | {
        "source": " and ".join(sources) if len(sources) < 4 else f"{sources[0]} and {len(sources) - 1} more files",
        "names": list(dict.fromkeys(name for grid in grids for name in grid.attrs["names"])),
        "conversions": list(dict.fromkeys([*(s for grid in grids for s in grid.attrs["conversions"]), *conversions])),
        "suspicious": list(dict.fromkeys(s for grid in grids for s in grid.attrs["suspicious"])),
    }
    return merged


def _check_positions(grids: Sequence[xr.Dataset]) -> None:
    first = grids[0]
    for other in grids[1:]:
        for role in ("latitude", "longitude"):
            a, b = first[role].to_numpy(), other[role].to_numpy()
            if a.shape != b.shape or not np.allclose(a, b, rtol=0, atol=SAME_PLACE):
                raise InputError(
                    f"the {role}s differ: {a.size} from {a[0]:g} to {a[-1]:g}, and {b.size} from {b[0]:g} to {b[-1]:g}",
                    where=f"{first.attrs['source']} and {other.attrs['source']}",
                    expected="the same grid in all files",
                    remedy="bring them to one grid first, or open them one by one",
                )


def _common_depths(grids: Sequence[xr.Dataset], conversions: list[str]) -> list[xr.Dataset]:
    steps = [np.round(grid["depth"].to_numpy() / SAME_DEPTH).astype(int) for grid in grids]
    common = set(steps[0]).intersection(*steps[1:])
    if not common:
        raise InputError(
            "the files have no depth in common",
            where=" and ".join(grid.attrs["source"] for grid in grids[:2]),
            expected="the same depths in all files",
        )
    counts = {len(step) for step in steps}
    if counts != {len(common)}:
        conversions.append(
            f"depth: the files have {' and '.join(map(str, sorted(counts)))} depths; "
            f"the {len(common)} in common were kept"
        )
    return [grid.isel(level=np.isin(step, list(common))) for grid, step in zip(grids, steps, strict=True)]


def _check_held_once(groups: dict[frozenset[str], list[xr.Dataset]]) -> None:
    owner: dict[str, str] = {}
    for held, group in groups.items():
        source = group[0].attrs["source"]
        if not held:
            raise InputError(
                f"no temperature, salinity or oxygen among the variables {', '.join(group[0].attrs['names'])}",
                where=source,
                remedy="leave the file out",
            )
        for role in held & set(WATER):
            if role in owner:
                raise InputError(
                    f"{role} is in both files, beside different other variables",
                    where=f"{owner[role]} and {source}",
                    expected="one source for each variable",
                    remedy="leave one of the files out",
                )
            owner[role] = source


def _along_time(group: list[xr.Dataset]) -> xr.Dataset:
    if len(group) == 1:
        return group[0]
    sources = [grid.attrs["source"] for grid in group]
    if not all("time" in grid.coords for grid in group):
        raise InputError(
            "both files hold the same variables, and not both have times",
            where=" and ".join(sources[:2]),
            expected="a time in each, or different variables",
            remedy="leave one of the files out",
        )
    kinds = {grid["time"].attrs["kind"] for grid in group}
    if len(kinds) > 1:
        raise InputError("some files have dates and others have not", where=" and ".join(sources[:2]))
    joined = xr.concat(group, dim="time", data_vars="minimal", coords="minimal", compat="override", join="override")
    if kinds == {"index"}:
        joined["time"] = ("time", np.arange(joined.sizes["time"]))
    times = joined["time"].to_numpy()
    order = np.argsort(times, kind="stable")
    same = times[order][1:] == times[order][:-1]
    if same.any():
        raise InputError(
            f"the time {times[order][1:][same][0]} is there more than once",
            where=" and ".join(sources[:3]),
            expected="each time in one file only",
            remedy="leave out the copy",
        )
    joined["time"].attrs = group[0]["time"].attrs
    return joined.isel(time=order)


def _matching_times(groups: list[xr.Dataset], conversions: list[str]) -> list[xr.Dataset]:
    """Check that the groups are of the same times; a group of one time beside longer ones holds for every time."""
    longest = max((group.sizes.get("time", 0) for group in groups), default=0)
    reference = next((group for group in groups if group.sizes.get("time", 0) == longest), None)
    matched = []
    for group in groups:
        size = group.sizes.get("time", 0)
        if size == 1 and longest > 1:
            held = ", ".join(role for role in WATER if role in group)
            conversions.append(f"time: {held} of one time, used for all {longest} times")
            group = group.isel(time=0, drop=True)
        elif size and reference is not None and not _same_times(group["time"], reference["time"]):
            a, b = group["time"].to_numpy(), reference["time"].to_numpy()
            raise InputError(
                f"the times differ: {a.size} from {a[0]} to {a[-1]}, and {b.size} from {b[0]} to {b[-1]}",
                where=f"{group.attrs['source']} and {reference.attrs['source']}",
                expected="temperature, salinity and oxygen of the same times",
            )
        matched.append(group)
    return matched


def _same_times(a: xr.DataArray, b: xr.DataArray) -> bool:
    if a.size != b.size:
        return False
    kinds = {a.attrs["kind"], b.attrs["kind"]}
    if "index" in kinds:
        return True
    return len(kinds) == 1 and bool(np.all(a.to_numpy() == b.to_numpy()))
