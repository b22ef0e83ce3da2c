"""What an ocean file holds and what becomes of it, as a text to read in ten seconds."""

import re
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import xarray as xr
from tabulate import tabulate

from habitat.errors import InputError
from habitat.ocean.columns import complete, sample
from habitat.ocean.exchange import check_flags
from habitat.ocean.opening import read
from habitat.ocean.recognise import recognise
from habitat.ocean.roles import VERTICAL, WATER, check_choice

_BECOMES = {
    "temperature": "degC, in situ, ITS-90",
    "salinity": "practical salinity",
    "oxygen": "umol/kg",
    "depth": "m, positive down",
    "pressure": "dbar",
    "seabed_depth": "m",
}
_WIDTH = 100  # of the list of other columns


def inspect(path: str | Path, *, choose: Mapping[str, str] | None = None) -> str:
    """Describe an ocean file: what it is, which variable plays which part, ranges, conversions, what is wrong with it.

    Parameters
    ----------
    path : str or Path
    choose : mapping, optional
        Part to variable or column, where a file has several.

    Returns
    -------
    str
        Several lines. A file that would be refused is described too, with the reason under "Cannot be used:".

    Raises
    ------
    InputError
        The file is missing, empty, damaged, or of no kind that is known.
    """
    kind, choose = recognise(path), check_choice(choose)
    try:
        raw = read(str(path), kind, choose, check_flags(None))
        part = sample(raw)
    except InputError as error:
        return f"{path}\n{kind}\n\n{_refusal(error, path)}"
    whole = all(part[role].size == raw[role].size for role in WATER if role in raw)
    blocks = [f"{path}\n{_headline(raw)}", _parts(part, whole=whole)]
    try:
        columns = complete(part)
    except InputError as error:
        blocks += [_notes(raw.attrs), _refusal(error, path)]
    else:
        blocks += [_extent(raw, columns), _notes(columns.attrs), _others(raw)]
    return "\n\n".join(block for block in blocks if block)


def _refusal(error: InputError, path: str | Path) -> str:
    """Lay the message out on lines, without the file, which stands in the first line already."""
    where = error.where.removeprefix(str(path)).lstrip(", ")
    lines = ["Cannot be used:", f"  {where}: {error.found}" if where else f"  {error.found}"]
    lines += [f"  Expected: {error.expected}"] if error.expected else []
    lines += [f"  What to do: {error.remedy}"] if error.remedy else []
    return "\n".join(lines)


def _headline(raw: xr.Dataset) -> str:
    sizes = raw.sizes
    if raw.attrs["form"] == "casts":
        vertical = next((raw[role] for role in VERTICAL if role in raw), None)
        samples = 0 if vertical is None else int(vertical.notnull().sum())
        return f"{raw.attrs['reader']}: {_count(sizes['cast'], 'cast')}, {_count(samples, 'sample')}"
    steps = f"{_count(sizes['time'], 'time')}, " if "time" in sizes else ""
    return (
        f"{raw.attrs['reader']}: {steps}{sizes['latitude']} latitudes x {sizes['longitude']} longitudes, "
        f"{_count(sizes['level'], 'depth')}"
    )


def _count(number: int, noun: str) -> str:
    return f"{number} {noun}{'' if number == 1 else 's'}"


def _parts(part: xr.Dataset, *, whole: bool) -> str:
    rows = []
    for role, becomes in _BECOMES.items():
        if role in part:
            values = part[role]
            kind = values.attrs.get("kind", "")
            unit = values.attrs.get("unit_found", values.attrs["units"]) or "(none)"
            rows.append([role, values.attrs["name"], f"{unit}, {kind}" if kind else unit, _range(values), becomes])
        elif role not in ("seabed_depth", "depth", "pressure"):
            rows.append([role, "(not found)", "", "", ""])
    heads = ["part", "in the file", "unit", "usable values" if whole else "values in a sample", "becomes"]
    return tabulate(rows, headers=heads, tablefmt="simple", disable_numparse=True)


def _range(values: xr.DataArray) -> str:
    finite = values.to_numpy()[np.isfinite(values.to_numpy())]
    if not finite.size:
        return "(all missing)"
    least, greatest = f"{finite.min():.6g}", f"{finite.max():.6g}"
    return least if least == greatest else f"{least} to {greatest}"


def _extent(raw: xr.Dataset, columns: xr.Dataset) -> str:
    rows = [
        ["position", f"latitude {_range(raw['latitude'])}, longitude {_range(raw['longitude'])}"],
        ["depth", f"{_range(columns['depth'])} m"],
        ["oxygen", f"{_range(columns['oxygen'])} umol/kg"],
    ]
    if "time" in raw.coords:
        times = raw["time"].dropna("time" if "time" in raw.dims else "cast").to_numpy()
        rows.insert(1, ["time", _span(times)])
    return tabulate(rows, tablefmt="plain", disable_numparse=True)


def _span(times: np.ndarray) -> str:
    if not times.size:
        return "unknown"
    first, last = (str(value)[:16].replace("T", " ") for value in (times.min(), times.max()))
    return first if first == last else f"{first} to {last}"


def _notes(attributes: Mapping[str, object]) -> str:
    blocks = []
    discarded = [f"{count} {reason}" for reason, count in attributes["discarded"].items()]
    for title, lines in (
        ("Conversions", attributes["conversions"]),
        ("Values left out", discarded),
        ("Suspicious", attributes["suspicious"]),
    ):
        if lines:
            blocks.append("\n".join([f"{title}:", *(f"  {line}" for line in lines)]))
    return "\n\n".join(blocks)


def _others(raw: xr.Dataset) -> str:
    """Columns and variables of the file that were not used."""
    used = {name for v in raw.variables.values() for name in re.split(" or |, ", v.attrs.get("name", ""))}
    text = ", ".join(name for name in raw.attrs["names"] if name not in used)
    return f"Not used: {text[:_WIDTH]}{' ...' if len(text) > _WIDTH else ''}" if text else ""
