"""Casts in a CSV table with headings such as ``depth [m]`` and ``oxygen [ml/l]``."""

import csv
import re
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from habitat import units
from habitat.errors import InputError
from habitat.ocean import roles
from habitat.ocean.casts import MISSING_WORDS, Table, arrange, numbers

FILL_LIMIT = -99.0  # no temperature, salinity or oxygen is this low; -99.9, -999 and the like stand for "missing"
UNIT_REMEDY = "write the unit into the heading, for example '{role} [{unit}]'"
PART_HINT = "a column headed '{role}', with its unit: 'oxygen [umol/kg]', 'temperature [degC]', 'salinity', 'depth [m]'"


def read_csv_casts(path: str | Path, choose: Mapping[str, str]) -> xr.Dataset:
    """Read a CSV table of one or more casts.

    Parameters
    ----------
    path : str or Path
        UTF-8 text; comma, semicolon or tab between the fields; lines starting with ``#`` before the headings.
    choose : mapping
        Part to heading (or the name in it), where several columns could play a part.

    Returns
    -------
    xr.Dataset
        (cast, level), in the table's own units; parts that the table does not have are absent.

    Raises
    ------
    InputError
        The text is not UTF-8, a row has the wrong number of fields, a number is not one, or casts cannot be told apart.
    """
    notes, headings, rows = _split(Path(path))
    columns = _pick_columns(headings, choose, str(path))
    table = Table(str(path), "CSV table", UNIT_REMEDY, PART_HINT, headings)
    lines = [number for number, _ in rows]
    for role in (*roles.WATER, *roles.VERTICAL, "latitude", "longitude", "seabed_depth"):
        if role in columns:
            heading = headings[columns[role]]
            name, unit = units.split_heading(heading)
            values = numbers([row[columns[role]] for _, row in rows], lines, heading, str(path))
            if role in (*roles.WATER, *roles.VERTICAL):
                values = _without_fill(table, role, values)
            table.add(role, values, units=unit or "", name=heading, **roles.kind_attributes(role, name))
        elif role in notes:
            line, text = notes[role]
            values = numbers([text], [line], f"# {role}", str(path))
            table.add(role, np.full(len(rows), values[0]), units="", name=f"# {role}")
    if table.attributes.get("seabed_depth", {}).get("units") == "":
        table.attributes["seabed_depth"]["units"] = "m"
    _add_time(table, columns, notes, headings, rows)
    stem = Path(path).stem
    if labels := _label_columns(headings, choose):
        table.casts = [(stem, "-".join(row[index].strip() for index in labels)) for _, row in rows]
    else:
        table.casts = [(stem, notes["cast"][1] if "cast" in notes else stem)] * len(rows)
        _one_position(table)
    return arrange(table)


def _split(path: Path) -> tuple[dict[str, tuple[int, str]], list[str], list[tuple[int, list[str]]]]:
    """Comment values, headings, and rows with their line numbers."""
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise InputError(
            f"byte {error.start} is not UTF-8 text", where=str(path), remedy="save the table as CSV (UTF-8)"
        ) from None
    lines = text.splitlines()
    top = next((n for n, line in enumerate(lines) if line.strip() and not line.startswith("#")), len(lines))
    if top == len(lines):
        raise InputError("there is no line of headings", where=str(path), expected="headings such as 'depth [m]'")
    separator = max(",;\t", key=lines[top].count)
    headings = [heading.strip() for heading in next(csv.reader([lines[top]], delimiter=separator))]
    while len(headings) > 1 and not headings[-1]:
        headings.pop()
    kept = [
        (number, line)
        for number, line in enumerate(lines[top + 1 :], start=top + 2)
        if line.strip(separator + " ") and not line.startswith("#")
    ]
    rows = []
    reader = csv.reader((line for _, line in kept), delimiter=separator)
    for row in reader:
        number = kept[reader.line_num - 1][0]
        if len(row) < len(headings) or any(field.strip() for field in row[len(headings) :]):
            raise InputError(
                f"line {number} has {len(row)} fields",
                where=str(path),
                expected=f"{len(headings)}, one for each heading",
                remedy="correct that line; decimals need a point, not a comma",
            )
        rows.append((number, row))
    if not rows:
        raise InputError("headings but no rows", where=str(path), expected="at least one row of measurements")
    return _comments(lines[:top]), headings, rows


def _comments(lines: list[str]) -> dict[str, tuple[int, str]]:
    """Values given once for the whole table, as in ``# latitude: 21.5``, with their line numbers."""
    notes = {}
    for number, line in enumerate(lines, start=1):
        match = re.fullmatch(r"#\s*([A-Za-z_ ]+?)\s*[:=]\s*(.*?)\s*", line)
        if match:
            name = units.split_heading(match[1])[0]
            for role in ("latitude", "longitude", "time", "seabed_depth", "cast"):
                if name in roles.NAMES[role]:
                    notes[role] = (number, match[2])
    return notes


def _pick_columns(headings: list[str], choose: Mapping[str, str], where: str) -> dict[str, int]:
    """Part to index of the column that plays it."""
    names = [units.split_heading(heading)[0] for heading in headings]
    picked = {}
    for role in roles.ROLES[:-1]:  # the labels of casts may stand in several columns
        if role in choose:
            wanted = choose[role]
            candidates = [heading for heading in headings if heading == wanted] or [
                heading
                for heading, name in zip(headings, names, strict=True)
                if name == units.split_heading(wanted)[0] and "[" not in wanted
            ]
            if not candidates:
                raise InputError(
                    f"no column '{wanted}' for the {role}", where=where, expected=f"one of {', '.join(headings)}"
                )
        else:
            candidates = [h for h, name in zip(headings, names, strict=True) if name in roles.NAMES[role]]
        heading = roles.single(role, candidates, where)
        if heading is not None:
            picked[role] = headings.index(heading)
    return picked


def _label_columns(headings: list[str], choose: Mapping[str, str]) -> list[int]:
    """Columns that together label a cast, such as station and cast, in that order."""
    names = [units.split_heading(heading)[0] for heading in headings]
    wanted = [units.split_heading(choose["cast"])[0]] if "cast" in choose else roles.NAMES["cast"]
    return [names.index(name) for name in wanted if name in names]


def _without_fill(table: Table, role: str, values: np.ndarray) -> np.ndarray:
    table.discard(f"{role}: missing in the file", np.isnan(values).sum())
    if role in roles.VERTICAL:  # a depth of -999 m may be real where depths are written as negative heights
        return values
    fill = values <= FILL_LIMIT
    for value in np.unique(values[fill]):
        table.discard(f"{role}: fill value {value:g}", (values == value).sum())
    return np.where(fill, np.nan, values)


def _add_time(
    table: Table,
    columns: Mapping[str, int],
    notes: Mapping[str, tuple[int, str]],
    headings: list[str],
    rows: list[tuple[int, list[str]]],
) -> None:
    if "time" in columns:
        name = headings[columns["time"]]
        texts, lines = [row[columns["time"]].strip() for _, row in rows], [number for number, _ in rows]
    elif "time" in notes:
        name, lines, texts = "# time", [notes["time"][0]] * len(rows), [notes["time"][1]] * len(rows)
    else:
        return
    series = pd.Series(texts, dtype=object)
    series = series.mask(series.str.lower().isin(MISSING_WORDS))
    times = pd.to_datetime(series, format="ISO8601", utc=True, errors="coerce")
    wrong = (times.isna() & series.notna()).to_numpy()
    if wrong.any():
        first = int(np.argmax(wrong))
        raise InputError(
            f"'{texts[first]}' in line {lines[first]}, column '{name}', is not a time",
            where=table.source,
            expected="a date such as 2024-05-27 or 2024-05-27T08:41",
        )
    table.add("time", times.dt.tz_convert(None).to_numpy().astype("datetime64[ns]"), name=name)


def _one_position(table: Table) -> None:
    """Refuse several positions in a table that does not tell its casts apart."""
    for role in ("latitude", "longitude"):
        different = np.unique(table.columns.get(role, np.array([np.nan])))
        different = different[np.isfinite(different)]
        if different.size > 1:
            raise InputError(
                f"{different.size} different values of {role} ({different[0]:g} to {different[-1]:g}), "
                "but no column that tells the casts apart",
                where=table.source,
                remedy="add a column 'cast' with a label for each cast",
            )
