"""From rows of a table to casts side by side, and from the casts of several files to one set."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr

from habitat.errors import InputError

POSITION_SPREAD = 0.1  # degrees; a ship drifts less during one cast


@dataclass
class Table:
    """Rows of a casts file, in the file's own units, before they are arranged by cast.

    Attributes
    ----------
    source : str
        Path of the file.
    reader : str
        What the file was recognised as.
    unit_remedy : str
        How a missing unit is added in this kind of file.
    part_hint : str
        What a missing part should look like in this kind of file.
    names : list of str
        Every column of the file.
    casts : sequence of (str, str)
        Origin (cruise or file) and label of the cast that each row belongs to.
    columns : dict
        Part played to values, one a row.
    attributes : dict
        Part played to attributes: `units`, `kind`, `name` (the column it came from).
    conversions, suspicious : list of str
        Sentences for the user.
    discarded : dict
        Reason to count of values left out.
    """

    source: str
    reader: str
    unit_remedy: str
    part_hint: str
    names: list[str]
    casts: Sequence[tuple[str, str]] = ()
    columns: dict[str, np.ndarray] = field(default_factory=dict)
    attributes: dict[str, dict[str, str]] = field(default_factory=dict)
    conversions: list[str] = field(default_factory=list)
    suspicious: list[str] = field(default_factory=list)
    discarded: dict[str, int] = field(default_factory=dict)

    def add(self, role: str, values: np.ndarray, **attributes: str) -> None:
        """Add the column that plays a part."""
        self.columns[role] = values
        self.attributes[role] = attributes

    def discard(self, reason: str, count: int) -> None:
        """Count values that are left out."""
        if count:
            self.discarded[reason] = self.discarded.get(reason, 0) + int(count)


MISSING_WORDS = {"", "nan", "na", "n/a", "null", "none", "-", "--"}
PER_CAST = ("latitude", "longitude", "time", "seabed_depth")


def numbers(texts: Sequence[str], lines: Sequence[int], column: str, where: str) -> np.ndarray:
    """Read the fields of a column as numbers; NaN for an empty field or a word for "missing".

    Parameters
    ----------
    texts, lines : sequence
        Fields, and the line of the file that each stands in.
    column, where : str
        Heading and file, for messages.

    Raises
    ------
    InputError
        A field is no finite number.
    """
    words = ["nan" if text.strip().lower() in MISSING_WORDS else text.strip() for text in texts]
    try:
        values = np.array(words, dtype=str).astype(float)
    except ValueError:
        values = np.array([np.inf])
    if not np.isinf(values).any():
        return values
    first = next(index for index, word in enumerate(words) if not _is_number(word))
    raise InputError(
        f"'{words[first]}' in line {lines[first]}, column '{column}', is not a number",
        where=where,
        expected="a number with a decimal point; an empty field where a value is missing",
    )


def _is_number(word: str) -> bool:
    try:
        return not np.isinf(float(word))
    except ValueError:
        return False


def arrange(table: Table) -> xr.Dataset:
    """Arrange the rows of a table as casts side by side, (cast, level), padded with NaN at the end.

    Position, time and sea floor become one value a cast: the first that is not missing.
    """
    group, keys = pd.factorize(pd.MultiIndex.from_tuples(list(table.casts)))
    size = len(keys)
    counts = np.bincount(group, minlength=size)
    order = np.argsort(group, kind="stable")
    level = np.empty(len(group), dtype=int)
    level[order] = np.arange(len(group)) - np.repeat(np.cumsum(counts) - counts, counts)
    raw = xr.Dataset(coords={"cast": [key[1] for key in keys], "origin": ("cast", [key[0] for key in keys])})
    for role, values in table.columns.items():
        attributes = table.attributes[role]
        if role in PER_CAST:
            first = pd.Series(values).groupby(group).first().to_numpy()
            raw[role] = ("cast", first, attributes)
            if role in ("latitude", "longitude"):
                _note_drift(table, role, pd.Series(values).groupby(group), keys)
        else:
            padded = np.full((size, counts.max()), np.nan)
            padded[group, level] = values
            raw[role] = (("cast", "level"), padded, attributes)
    raw = raw.set_coords([role for role in ("latitude", "longitude", "time") if role in raw])
    raw.attrs = {
        "form": "casts",
        "source": table.source,
        "reader": table.reader,
        "unit_remedy": table.unit_remedy,
        "part_hint": table.part_hint,
        "names": table.names,
        "conversions": table.conversions,
        "suspicious": table.suspicious,
        "discarded": table.discarded,
    }
    return raw


def _note_drift(table: Table, role: str, grouped: Any, keys: pd.Index) -> None:
    spread = (grouped.max() - grouped.min()).to_numpy()
    for key, width in zip(keys, spread, strict=True):
        if width > POSITION_SPREAD:
            table.suspicious.append(
                f"cast {key[1]}: {role} varies by {width:.2f} degrees within the cast; the first value was taken"
            )


def join(casts: Mapping[str, xr.Dataset]) -> xr.Dataset:
    """Set the finished casts of several files side by side.

    Parameters
    ----------
    casts : mapping
        Path to casts Dataset with coordinate `origin` (cast), all in the contract's units.

    Raises
    ------
    InputError
        Two casts have the same label and the same origin.
    """
    parts = list(casts.values())
    levels = max(part.sizes["level"] for part in parts)
    padded = [part.pad(level=(0, levels - part.sizes["level"])) for part in parts]
    optional = {
        name: next(part[name].attrs for part in parts if name in part)
        for name in ("seabed_depth", "time")
        if any(name in part for part in parts)
    }
    joined = xr.concat(
        [_with_optional(part, optional) for part in padded],
        dim="cast",
        data_vars="all",
        coords="minimal",
        compat="override",
        join="override",
        combine_attrs="override",
    )
    files = np.concatenate([[path] * part.sizes["cast"] for path, part in casts.items()])
    joined["cast"] = ("cast", _unique_labels(joined, files), parts[0]["cast"].attrs)
    return joined.drop_vars("origin")


def _with_optional(part: xr.Dataset, attributes: Mapping[str, Mapping[str, str]]) -> xr.Dataset:
    """Add the optional values that other files have and this one has not, as missing."""
    size = part.sizes["cast"]
    missing = {"seabed_depth": np.full(size, np.nan), "time": np.full(size, np.datetime64("NaT", "ns"))}
    part = part.assign(
        {name: ("cast", missing[name], described) for name, described in attributes.items() if name not in part}
    )
    return part.set_coords([name for name in attributes if name == "time"])


def _unique_labels(joined: xr.Dataset, files: np.ndarray) -> list[str]:
    labels = pd.Series(joined["cast"].to_numpy().astype(str))
    repeated = labels.duplicated(keep=False)
    labels = labels.where(~repeated, pd.Series(joined["origin"].to_numpy().astype(str)) + ":" + labels)
    again = labels.duplicated(keep=False).to_numpy()
    if again.any():
        first = labels[again].iloc[0]
        where = " and ".join(dict.fromkeys(files[(labels == first).to_numpy()]))
        raise InputError(
            f"the cast '{first}' is there more than once",
            where=where,
            expected="every cast under a label of its own",
            remedy="leave out the copy, or rename the cast",
        )
    return labels.tolist()
