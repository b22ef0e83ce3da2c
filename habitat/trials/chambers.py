"""The chamber table: what is known of each chamber run besides its trace."""

import itertools
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from habitat import units
from habitat.errors import InputError, UnitError
from habitat.trials.sheet import MISSING_WORDS, Sheet, read_sheet

KINDS = ("closed", "intermittent")

ANIMAL_DENSITY = 1000.0
"""Mass of a litre of animal [g/l]: about that of water, as is usual in respirometry."""

_EXAMPLES = {"trial": "trial", "volume": "volume [ml]", "mass": "mass [g]"}


@dataclass(frozen=True)
class Background:
    """Slope of oxygen in the chamber without the animal.

    Attributes
    ----------
    slope : float
        Negative where oxygen falls [`unit` per hour].
    unit : str
        Unit of oxygen.
    """

    slope: float
    unit: str


@dataclass(frozen=True)
class Chamber:
    """One chamber run.

    Attributes
    ----------
    individual : str
    mass : float
        Of the animal [g].
    water : float
        Volume of the chamber with its tubing, less that of the animal [l].
    flushes : tuple of (float, float)
        Start and end of each flush period [h].
    before, after : Background or None
        Measured before and after the run.
    """

    individual: str
    mass: float
    water: float
    flushes: tuple[tuple[float, float], ...] = ()
    before: Background | None = None
    after: Background | None = None


def read_chambers(path: str | Path) -> dict[str, Chamber]:
    """Read a chamber table.

    Parameters
    ----------
    path : str or Path
        CSV with one row a trial: ``trial``, ``volume [ml]``, ``mass [g]``; optional ``individual``, ``kind`` (closed or
        intermittent), ``flush [min]`` (such as ``10-15;25-30``), ``background_before [umol/l/h]`` and
        ``background_after [umol/l/h]``: slopes, negative where oxygen falls.

    Returns
    -------
    dict
        Name of the trial to its chamber.

    Raises
    ------
    InputError, UnitError
        Columns or units are missing or of the wrong kind, a trial has two rows, a volume or mass is missing or leaves
        no water, or the flush periods are not periods or do not fit the kind.
    """
    sheet = read_sheet(path)
    sheet.require(_EXAMPLES)
    volume, mass = sheet.quantity("volume", "l"), sheet.quantity("mass", "g")
    before, after = _backgrounds(sheet, "background_before"), _backgrounds(sheet, "background_after")
    chambers = {}
    for name, rows in sheet.trials().items():
        where = f"{sheet.source}, trial '{name}'"
        if rows.size > 1:
            raise InputError(
                f"{rows.size} rows, in lines {', '.join(str(line) for line in sheet.lines[rows])}",
                where=where,
                expected="one row for each trial",
                remedy="keep one, or give each trial a name of its own",
            )
        row = int(rows[0])
        individual = sheet.column("individual").texts[row] if sheet.has("individual") else ""
        water = _water(volume[row], mass[row], where)
        flushes = _flushes(sheet, row, where)
        chambers[name] = Chamber(individual or name, float(mass[row]), water, flushes, before[row], after[row])
    return chambers


def _water(volume: float, mass: float, where: str) -> float:
    if not (0 < volume < np.inf and 0 < mass < np.inf):
        raise InputError(
            f"volume {volume:g} l and mass {mass:g} g",
            where=where,
            expected="both to be there and above 0",
            remedy="fill in the chamber table",
        )
    water = volume - mass / ANIMAL_DENSITY
    if water <= 0:
        raise InputError(
            f"an animal of {mass:g} g leaves no water in a chamber of {volume:g} l",
            where=where,
            expected="a chamber larger than the animal (1 g takes 1 ml)",
            remedy="check the units in the headings 'volume [...]' and 'mass [...]'",
        )
    return float(water)


def _flushes(sheet: Sheet, row: int, where: str) -> tuple[tuple[float, float], ...]:
    """Flush periods of a chamber [h], checked against its kind."""
    kind = sheet.column("kind").texts[row].lower() if sheet.has("kind") else ""
    text = sheet.column("flush").texts[row] if sheet.has("flush") else ""
    flushing = text.lower() not in MISSING_WORDS
    if kind and kind not in KINDS:
        raise InputError(f"kind '{kind}'", where=where, expected=" or ".join(repr(known) for known in KINDS))
    if kind == "intermittent" and not flushing:
        raise InputError(
            "an intermittent chamber without flush periods",
            where=where,
            expected="text such as '10-15;25-30' in a column headed 'flush [min]'",
            remedy="state when the chamber was flushed, or write 'closed'",
        )
    if kind == "closed" and flushing:
        raise InputError(
            f"a closed chamber with flush periods '{text}'",
            where=where,
            remedy="write 'intermittent', or leave flush empty",
        )
    if not flushing:
        return ()
    unit = sheet.unit("flush", "min")
    try:
        factor = units.factor(unit, "h")
    except UnitError as error:
        raise sheet.unit_error("flush", error) from None
    periods = [_period(part.strip(), text, where) for part in text.split(";") if part.strip()]
    flushes = tuple(sorted((start * factor, end * factor) for start, end in periods))
    for (_, end), (start, _) in itertools.pairwise(flushes):
        if start < end:
            raise InputError(f"flush periods that overlap: '{text}'", where=where, remedy="correct the periods")
    return flushes


def _period(part: str, text: str, where: str) -> tuple[float, float]:
    match = re.fullmatch(r"(\d+(?:\.\d*)?)\s*[-–]\s*(\d+(?:\.\d*)?)", part)
    if match and float(match[1]) < float(match[2]):
        return float(match[1]), float(match[2])
    raise InputError(
        f"'{part}' in flush periods '{text}'",
        where=where,
        expected="start and end, the end later, as in '10-15;25-30'",
        remedy="correct the column 'flush'; in a table separated by semicolons put the text in quotation marks",
    )


def _backgrounds(sheet: Sheet, name: str) -> list[Background | None]:
    """Background slope of every chamber."""
    if not sheet.has(name):
        return [None] * sheet.lines.size
    unit = sheet.unit(name, "umol/l/h")
    try:
        oxygen, factor = slope_unit(unit)
    except UnitError as error:
        raise sheet.unit_error(name, error) from None
    values = sheet.numbers(name)
    return [Background(float(value * factor), oxygen) if np.isfinite(value) else None for value in values]


def slope_unit(text: str) -> tuple[str, float]:
    """Split a unit of oxygen per time into the unit of oxygen and the factor that makes it per hour.

    Raises
    ------
    UnitError
        It is no unit of dissolved oxygen per time.

    Examples
    --------
    >>> slope_unit("kPa/min")
    ('kPa', 60.0)
    """
    expected = "oxygen per time, such as umol/l/h, mg/l/h, % saturation/h or kPa/h"
    try:
        return "umol/l", units.factor(text, "umol/l/h")
    except UnitError:
        match = re.fullmatch(r"(.+?)\s*(?:/|\bper\b|\s(?=[a-z]+\^?-1$))\s*([a-z]+)(?:\^?-1)?", text.strip())
    if match is None:
        raise UnitError(f"unit '{text}' is not one of a background slope", expected=expected)
    try:
        units.oxygen_unit(match[1])
        return match[1], 1.0 / units.factor(match[2], "h")
    except UnitError:
        raise UnitError(f"unit '{text}' is not one of a background slope", expected=expected) from None
