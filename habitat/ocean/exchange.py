"""Casts in WHP-Exchange form: CTD casts and bottle files of hydrographic cruises.

Layout and flags follow the WHP-Exchange specification of the CCHDO (https://exchange-format.readthedocs.io).
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from habitat.errors import InputError
from habitat.files import nearest
from habitat.ocean.casts import Table, arrange, numbers

KEEP_FLAGS: dict[str, tuple[int, ...]] = {"ctd": (2, 6, 7), "water": (2, 6), "bottle": (2,)}
FLAG_MEANING = {
    "ctd": {1: "not calibrated", 3: "questionable", 4: "bad", 5: "not reported", 9: "not sampled"},
    "water": {1: "drawn, not received", 3: "questionable", 4: "bad", 5: "not reported", 9: "not drawn"},
}
# Columns for each part, the preferred first: sensor salinity is on every row, titrated oxygen is the standard.
COLUMNS = {
    "pressure": ("CTDPRS",),
    "temperature": ("CTDTMP",),
    "salinity": ("CTDSAL", "SALNTY"),
    "oxygen": ("OXYGEN", "CTDOXY"),
}
IDENTIFICATION = ("EXPOCODE", "SECT", "SECT_ID", "STNNBR", "CASTNO", "SAMPNO", "BTLNBR", "DATE", "TIME")
WATER_SAMPLES = ("SALNTY", "OXYGEN")  # measured on water from the bottle
FILL = -999.0
UNIT_REMEDY = "write the unit into the line below the column names, for example {unit}"
PART_HINT = "columns CTDPRS, CTDTMP, CTDSAL or SALNTY, OXYGEN or CTDOXY, with LATITUDE and LONGITUDE"


@dataclass(frozen=True)
class _Sheet:
    """The parsed text: one list of fields a column, header values repeated on every row.

    `names` are those of measurements; `units` has every column; `cut_off` counts a broken last line.
    """

    path: str
    names: list[str]
    units: dict[str, str]
    fields: dict[str, list[str]]
    lines: list[int]
    complete: bool
    cut_off: int


def check_flags(keep_flags: Mapping[str, Sequence[int]] | None) -> dict[str, tuple[int, ...]]:
    """Complete the quality flags to keep with the defaults.

    Raises
    ------
    InputError
        A key is not one of ``ctd``, ``water`` and ``bottle``.
    """
    for kind in keep_flags or {}:
        if kind not in KEEP_FLAGS:
            raise InputError(f"'{kind}' is no kind of flag", where="keep_flags", remedy=nearest(kind, KEEP_FLAGS))
    return KEEP_FLAGS | {kind: tuple(flags) for kind, flags in (keep_flags or {}).items()}


def read_exchange(
    path: str | Path, choose: Mapping[str, str], keep_flags: Mapping[str, Sequence[int]], reader: str
) -> xr.Dataset:
    """Read a WHP-Exchange CTD cast or bottle file.

    Parameters
    ----------
    path : str or Path
    choose : mapping
        Part to column name, instead of the preferred column.
    keep_flags : mapping
        ``ctd``, ``water`` and ``bottle`` to the flags whose values are used; a value without a flag is used.
    reader : str
        "WHP-Exchange CTD cast" or "WHP-Exchange bottle file".

    Returns
    -------
    xr.Dataset
        (cast, level), in the file's own units; parts that the file does not have are absent.

    Raises
    ------
    InputError
        The header is incomplete, a row is damaged, or a number is not one.
    """
    for role in choose.keys() - COLUMNS.keys():
        raise InputError(
            f"'{choose[role]}' chosen for the {role}, which has a fixed column here",
            where=str(path),
            expected=f"a choice of {', '.join(COLUMNS)}",
            remedy="leave that choice out",
        )
    sheet = _parse(Path(path), reader)
    table = Table(str(path), reader, UNIT_REMEDY, PART_HINT, sheet.names)
    table.discard("last line: cut off", sheet.cut_off)
    if not sheet.complete:
        table.suspicious.append("the file ends without END_DATA: it may be cut off; the values before that were used")
    for role, columns in COLUMNS.items():
        _add_values(table, sheet, role, _available(sheet, role, columns, choose), keep_flags)
    for role, column in (("latitude", "LATITUDE"), ("longitude", "LONGITUDE")):
        if column in sheet.fields:
            table.add(role, _numbers(sheet, column), units="degrees", name=column)
    if "DEPTH" in sheet.fields:  # depth of the sea floor, not of the sample
        seabed = _numbers(sheet, "DEPTH")
        if np.isfinite(seabed).any():
            table.add("seabed_depth", seabed, units="m", name="DEPTH")
    _add_time(table, sheet)
    table.casts = _cast_labels(sheet)
    return arrange(table)


def _parse(path: Path, reader: str) -> _Sheet:
    # Data and headers are ASCII; the free comments may hold anything.
    text = path.read_bytes().decode("utf-8-sig", errors="replace")
    lines = [(n, line.strip()) for n, line in enumerate(text.splitlines(), start=1)]
    body = [(n, line) for n, line in lines[1:] if line and not line.startswith("#")]
    header: dict[str, str] = {}
    if reader == "WHP-Exchange CTD cast":
        header, body = _take_header(body, str(path))
    if len(body) < 2 or "CTDPRS" not in body[0][1]:
        found = f"line {body[0][0]} is '{body[0][1][:40]}'" if body else "the file ends"
        raise InputError(
            f"{found} where the column names should be",
            where=str(path),
            expected="names with CTDPRS among them",
            remedy="check NUMBER_HEADERS, which counts its own line" if header else "",
        )
    names = [name.strip() for name in body[0][1].rstrip(",").split(",")]
    units = [unit.strip() for unit in body[1][1].split(",")] + [""] * len(names)
    end = next((i for i, (_, line) in enumerate(body) if line.startswith("END_DATA")), None)
    rows, cut_off = _rows(body[2:end], names, str(path), whole=end is not None or text.endswith("\n"))
    fields = {name: [row[i].strip() for _, row in rows] for i, name in enumerate(names)}
    fields |= {key: [value] * len(rows) for key, value in header.items() if key not in fields}
    return _Sheet(
        path=str(path),
        names=[n for n in (*header, *names) if n not in IDENTIFICATION and not n.endswith("_FLAG_W")],
        units=dict(zip(names, units, strict=False)),
        fields=fields,
        lines=[n for n, _ in rows],
        complete=end is not None,
        cut_off=cut_off,
    )


def _take_header(body: list[tuple[int, str]], where: str) -> tuple[dict[str, str], list[tuple[int, str]]]:
    key, _, value = body[0][1].partition("=") if body else ("", "", "")
    if key.strip() != "NUMBER_HEADERS" or not value.strip().isdigit():
        raise InputError("there is no line NUMBER_HEADERS = n after the comments", where=where)
    count = int(value)
    header = {}
    for number, line in body[1:count]:
        key, equals, value = line.partition("=")
        if not equals:
            raise InputError(
                f"line {number} is '{line[:40]}', but NUMBER_HEADERS = {count} makes it a header line",
                where=where,
                expected="KEY = VALUE",
                remedy="correct NUMBER_HEADERS, which counts its own line",
            )
        header[key.strip()] = value.strip()
    return header, body[count:]


def _rows(
    body: list[tuple[int, str]], names: list[str], where: str, *, whole: bool
) -> tuple[list[tuple[int, list[str]]], int]:
    """Split the data lines; the last one is left out when the file breaks off inside it."""
    cut_off = 0
    rows = [(n, line.split(",")) for n, line in body]
    if rows and not whole:
        rows, cut_off = rows[:-1], 1
    for number, row in rows:
        if len(row) < len(names):
            raise InputError(
                f"line {number} has {len(row)} fields", where=where, expected=f"{len(names)}, one for each column name"
            )
    if not rows:
        raise InputError("column names but no data lines", where=where)
    return rows, cut_off


def _numbers(sheet: _Sheet, column: str) -> np.ndarray:
    values = numbers(sheet.fields[column], sheet.lines, column, sheet.path)
    return np.where(values == FILL, np.nan, values)


def _available(sheet: _Sheet, role: str, columns: Sequence[str], choose: Mapping[str, str]) -> list[str]:
    if role not in choose:
        return [column for column in columns if column in sheet.units]
    if choose[role] not in sheet.units:
        raise InputError(
            f"no column '{choose[role]}' for the {role}", where=sheet.path, expected=f"one of {', '.join(sheet.units)}"
        )
    return [choose[role]]


def _add_values(
    table: Table, sheet: _Sheet, role: str, columns: list[str], keep_flags: Mapping[str, Sequence[int]]
) -> None:
    """Take each value from the first column in which it is good; count the samples that end without one."""
    if not columns:
        return
    unit = sheet.units[columns[0]]
    for column in [c for c in columns[1:] if sheet.units[c].upper() != unit.upper()]:
        table.suspicious.append(f"{role}: {column} [{sheet.units[column]}] was not used beside {columns[0]} [{unit}]")
        columns = [c for c in columns if c != column]
    result = np.full(len(sheet.lines), np.nan)
    reasons = np.full(len(sheet.lines), "", dtype=object)
    used = {}
    for column in columns:
        values, why = _judge(sheet, column, keep_flags)
        take = np.isnan(result) & (why == "")
        result = np.where(take, values, result)
        used[column] = int(take.sum())
        prefix = f"{column} " if len(columns) > 1 else ""
        reasons = np.array([f"{a}, {prefix}{b}" if a else f"{prefix}{b}" for a, b in zip(reasons, why, strict=True)])
    if len(columns) > 1:
        counts = ", else ".join(f"{column} ({count} samples)" for column, count in used.items())
        table.conversions.append(f"{role}: where good, {counts}")
    for reason, count in zip(*np.unique(reasons[np.isnan(result)], return_counts=True), strict=True):
        table.discard(f"{role}: {reason}", count)
    kind = {"temperature": {"kind": "in situ"}, "salinity": {"kind": "practical"}}.get(role, {})
    table.add(role, result, units=unit, name=" or ".join(columns), **kind)


def _judge(sheet: _Sheet, column: str, keep_flags: Mapping[str, Sequence[int]]) -> tuple[np.ndarray, np.ndarray]:
    """Values of a column, and for each the reason not to use it ("" for a good one)."""
    values = _numbers(sheet, column)
    kind = "water" if column in WATER_SAMPLES else "ctd"
    reasons = np.full(len(values), "", dtype=object)
    if kind == "water" and "BTLNBR_FLAG_W" in sheet.fields:
        for flag in _unwanted(bottle := _numbers(sheet, "BTLNBR_FLAG_W"), keep_flags["bottle"]):
            reasons[bottle == flag] = f"bottle flag {flag:g}"
    flags = np.full(len(values), np.nan)
    if f"{column}_FLAG_W" in sheet.fields:
        flags = _numbers(sheet, f"{column}_FLAG_W")
    for flag in _unwanted(flags, keep_flags[kind]):
        reasons[flags == flag] = f"flag {flag:g}"
    missing = np.isnan(values)
    reasons[missing] = "missing in the file"
    for flag in np.unique(flags[missing & np.isfinite(flags)]):
        meaning = FLAG_MEANING[kind].get(int(flag))
        if meaning:
            reasons[missing & (flags == flag)] = f"missing in the file (flag {flag:g}: {meaning})"
    return values, reasons


def _unwanted(flags: np.ndarray, keep: Sequence[int]) -> np.ndarray:
    present = np.unique(flags[np.isfinite(flags)])
    return present[~np.isin(present, list(keep))]


def _add_time(table: Table, sheet: _Sheet) -> None:
    if "DATE" not in sheet.fields:
        return
    clock = sheet.fields.get("TIME", [""] * len(sheet.lines))
    known = [word.isdigit() for word in clock]
    texts = [
        f"{day}{word.zfill(4) if word.isdigit() else '0000'}"
        for day, word in zip(sheet.fields["DATE"], clock, strict=True)
    ]
    times = pd.to_datetime(pd.Series(texts), format="%Y%m%d%H%M", errors="coerce")
    if not all(known):
        table.conversions.append(f"time: no TIME on {known.count(False)} rows; 00:00 of the DATE was taken")
    if times.isna().any():
        example = texts[int(np.argmax(times.isna()))]
        table.suspicious.append(f"time: DATE and TIME '{example}' are no date; {int(times.isna().sum())} rows so")
    table.add("time", times.to_numpy().astype("datetime64[ns]"), name="DATE, TIME" if any(known) else "DATE")


def _cast_labels(sheet: _Sheet) -> list[tuple[str, str]]:
    """Cruise and ``station-cast`` of every row."""
    for key in ("STNNBR", "CASTNO"):
        if key not in sheet.fields:
            raise InputError(
                f"no {key}", where=sheet.path, expected="STNNBR and CASTNO", remedy="add it to the header or columns"
            )
    cruises = sheet.fields.get("EXPOCODE", [Path(sheet.path).stem] * len(sheet.lines))
    labels = (f"{s}-{c}" for s, c in zip(sheet.fields["STNNBR"], sheet.fields["CASTNO"], strict=True))
    return list(zip(cruises, labels, strict=True))
