"""Tables that come from a laboratory: CSV text whose headings carry the units, such as ``po2 [kPa]``."""

import csv
import io
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from habitat import seawater, units
from habitat.errors import InputError, UnitError
from habitat.files import missing_file, nearest

MISSING_WORDS = {"", "nan", "na", "n/a", "null", "none", "-", "--"}

TEMPERATURE_LIMITS = (-3.0, 50.0)
"""No aquatic animal is run outside [degC]."""

TEMPERATURE_SPREAD = 5.0
"""A trial is run at one temperature; readings further apart than this are of two trials, or of two units [degC]."""

TICK = 1e-9
"""Rounding of unit conversion moves no reading over the end of a period [h]."""

LARGEST_PO2 = 110.0
"""Pure oxygen at the surface is 101 kPa; whole trials above it are in another unit [kPa]."""


@dataclass(frozen=True)
class Column:
    """One column as it stands in the file.

    Attributes
    ----------
    name : str
        In lower case, without the unit.
    unit : str or None
        As written in the heading.
    heading : str
        Name and unit as written.
    texts : list of str
        Fields, without blanks around them.
    """

    name: str
    unit: str | None
    heading: str
    texts: list[str]


@dataclass(frozen=True)
class Sheet:
    """A table with one row a measurement, or a chamber.

    Attributes
    ----------
    source : str
        Path of the file, for messages.
    lines : numpy.ndarray
        Line of the file in which each row stands.
    columns : list of Column
    """

    source: str
    lines: np.ndarray
    columns: list[Column]

    def has(self, name: str) -> bool:
        """Whether there is a column of that name."""
        return any(column.name == name for column in self.columns)

    def column(self, name: str) -> Column:
        """Give the only column of that name, which must exist.

        Raises
        ------
        InputError
            Two columns have that name.
        """
        found = [column for column in self.columns if column.name == name]
        if len(found) > 1:
            headings = " and ".join(f"'{column.heading}'" for column in found)
            raise InputError(f"the columns {headings} mean the same", where=self.source, remedy="keep one of them")
        return found[0]

    def require(self, examples: Mapping[str, str]) -> None:
        """Check that columns are there.

        Parameters
        ----------
        examples : mapping
            Name to an example of its heading.

        Raises
        ------
        InputError
            Columns are missing; all are named.
        """
        absent = [name for name in examples if not self.has(name)]
        if absent:
            plural = "s" if len(absent) > 1 else ""
            raise InputError(
                f"no column{plural} {', '.join(repr(name) for name in absent)}",
                where=self.source,
                expected=f"the heading{plural} {', '.join(repr(examples[name]) for name in absent)}",
                remedy=nearest(absent[0], [column.name for column in self.columns if column.name]),
            )

    def numbers(self, name: str) -> np.ndarray:
        """Read a column as numbers, NaN where a field is empty or a word for "missing".

        Raises
        ------
        InputError
            A field is text; the message carries its line and column.
        """
        column = self.column(name)
        words = ["nan" if text.lower() in MISSING_WORDS else text for text in column.texts]
        try:
            return np.array(words, dtype=str).astype(float)
        except ValueError:
            first = next(index for index, word in enumerate(words) if not _is_number(word))
        raise InputError(
            f"'{words[first]}' in line {self.lines[first]}, column '{column.heading}', is not a number",
            where=self.source,
            expected="a number with a decimal point; an empty field where a value is missing",
        )

    def unit(self, name: str, example: str) -> str:
        """Give the unit that a heading states.

        Raises
        ------
        UnitError
            It states none.
        """
        column = self.column(name)
        if column.unit is None:
            raise UnitError(
                f"the heading '{column.heading}' states no unit",
                where=self.source,
                remedy=f"write it into the heading, for example '{name} [{example}]'",
            )
        return column.unit

    def quantity(self, name: str, to: str, *, remedy: str = "") -> np.ndarray:
        """Read a column in unit `to`.

        Raises
        ------
        InputError, UnitError
            The heading has no unit or one of another kind, or a field is text.
        """
        unit = self.unit(name, to)
        try:
            factor = units.factor(unit, to)
        except UnitError as error:
            raise self.unit_error(name, error, remedy) from None
        return self.numbers(name) * factor

    def unit_error(self, name: str, error: UnitError, remedy: str = "") -> UnitError:
        """Say of an error about a unit in which column it stands."""
        where = f"{self.source}, column '{self.column(name).heading}'"
        return UnitError(error.found, where=where, expected=error.expected, remedy=error.remedy or remedy)

    def temperature(self) -> np.ndarray:
        """Read the column `temperature` [degC].

        Raises
        ------
        InputError, UnitError
            As for `quantity`.
        """
        unit = self.unit("temperature", "degC")
        try:
            factor, offset = units.celsius(unit)
        except UnitError as error:
            raise self.unit_error("temperature", error) from None
        return self.numbers("temperature") * factor + offset

    def salinity(self) -> np.ndarray:
        """Read the column `salinity` as practical salinity [1]; g/kg is taken as Absolute Salinity.

        Raises
        ------
        InputError, UnitError
            The unit is none of salinity, or a field is text.
        """
        unit = self.column("salinity").unit
        try:
            factor = 1.0 if unit is None else units.factor(unit, "dimensionless")
        except UnitError as error:
            raise self.unit_error("salinity", error) from None
        values = self.numbers("salinity")
        if factor == 1.0:
            return values
        if unit is not None and units.parse_unit(unit) == units.parse_unit("g/kg"):
            return seawater.practical_salinity_from_absolute(values, 0.0)
        found = UnitError(f"unit '{unit}' is not one of salinity", expected="practical salinity (no unit), psu or g/kg")
        raise self.unit_error("salinity", found)

    def stamped(self) -> bool:
        """Whether the column `time` holds time stamps: its heading states no unit."""
        return self.column("time").unit is None

    def hours(self) -> np.ndarray:
        """Read the column `time` [h]: as in the file, or since 1970-01-01T00:00Z where it holds time stamps.

        Raises
        ------
        InputError, UnitError
            The unit is none of time, or a field is neither a number nor a time stamp.
        """
        if not self.stamped():
            return self.quantity("time", "h")
        column = self.column("time")
        texts = pd.Series(column.texts, dtype=object)
        texts = texts.mask(texts.str.lower().isin(MISSING_WORDS))
        if texts.notna().any() and texts.dropna().map(_is_number).all():
            self.unit("time", "min")  # plain numbers need a unit
        times = pd.to_datetime(texts, format="ISO8601", utc=True, errors="coerce")
        wrong = (times.isna() & texts.notna()).to_numpy()
        if wrong.any():
            first = int(np.argmax(wrong))
            raise InputError(
                f"'{column.texts[first]}' in line {self.lines[first]}, column '{column.heading}', is not a time",
                where=self.source,
                expected="a time stamp such as 2024-05-27T08:41:30, or numbers under a heading such as 'time [min]'",
            )
        return ((times - pd.Timestamp("1970-01-01", tz="UTC")) / pd.Timedelta(hours=1)).to_numpy(dtype=float)

    def trials(self) -> dict[str, np.ndarray]:
        """Give the rows of each trial, in the order of the file.

        Raises
        ------
        InputError
            A row does not say of which trial it is.
        """
        labels = self.column("trial").texts
        rows: dict[str, list[int]] = {}
        for row, label in enumerate(labels):
            if not label:
                raise InputError(
                    f"line {self.lines[row]} names no trial",
                    where=self.source,
                    expected="the name of a trial in each row",
                    remedy="fill in the column 'trial'",
                )
            rows.setdefault(label, []).append(row)
        return {label: np.array(members) for label, members in rows.items()}


def read_sheet(path: str | Path) -> Sheet:
    """Read a CSV table.

    Parameters
    ----------
    path : str or Path
        UTF-8 text, with or without a byte-order mark; comma, semicolon or tab between the fields; lines starting with
        ``#`` and empty lines are passed over.

    Raises
    ------
    InputError
        The file is missing, not UTF-8 text, has no headings or no rows, or a row has the wrong number of fields.
    """
    path = Path(path)
    records = _records(path, _text(path))
    headings = records[0][1] if records else []
    while len(headings) > 1 and not headings[-1]:
        headings.pop()
    if len(records) < 2:
        found = "headings but no rows" if records else "there is no line of headings"
        raise InputError(found, where=str(path), expected="a line of headings, such as 'trial', and rows below it")
    for line, row in records[1:]:
        if len(row) < len(headings) or any(row[len(headings) :]):
            raise InputError(
                f"line {line} has {len(row)} fields",
                where=str(path),
                expected=f"{len(headings)}, one for each heading",
                remedy="correct that line; decimals need a point, not a comma",
            )
    columns = [
        Column(*units.split_heading(heading), heading, [row[index] for _, row in records[1:]])
        for index, heading in enumerate(headings)
    ]
    return Sheet(str(path), np.array([line for line, _ in records[1:]]), columns)


def check_trial(where: str, po2: np.ndarray, temperature: np.ndarray) -> None:
    """Refuse a trial whose readings cannot be of one trial in the units stated.

    Parameters
    ----------
    where : str
        File and trial, for messages.
    po2 : numpy.ndarray
        [kPa]
    temperature : numpy.ndarray
        [degC]

    Raises
    ------
    InputError
        Temperatures are beyond `TEMPERATURE_LIMITS` or more than `TEMPERATURE_SPREAD` apart, or PO2 exceeds
        `LARGEST_PO2`.
    """
    lowest, highest = TEMPERATURE_LIMITS
    if temperature.min() < lowest or temperature.max() > highest:
        raise InputError(
            f"temperatures from {temperature.min():.4g} to {temperature.max():.4g} degC",
            where=where,
            expected=f"{lowest:g} to {highest:g} degC",
            remedy="check the unit in the heading: are these kelvin, or degrees Celsius labelled K?",
        )
    if np.ptp(temperature) > TEMPERATURE_SPREAD:
        raise InputError(
            f"temperatures from {temperature.min():.4g} to {temperature.max():.4g} degC in one trial",
            where=where,
            expected=f"one temperature, held within {TEMPERATURE_SPREAD:g} degC",
            remedy="give each temperature a trial of its own, or correct the values",
        )
    if po2.max() > LARGEST_PO2:
        raise InputError(
            f"PO2 up to {po2.max():.4g} kPa",
            where=where,
            expected="at most 101 kPa, that of pure oxygen",
            remedy="check the unit in the heading (air-saturated water has about 21 kPa, 210 mbar or 157 mmHg)",
        )


def check_settling(settling_hours: float) -> None:
    """Refuse a settling period that is no time.

    Raises
    ------
    InputError
        It is negative or not finite.
    """
    if not 0 <= settling_hours < np.inf:
        raise InputError(f"settling period of {settling_hours:g} h", expected="hours, 0 or more")


def _text(path: Path) -> str:
    try:
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        raise missing_file(path) from None
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", where=str(path), expected="a CSV table") from None
    except UnicodeDecodeError as error:
        raise InputError(
            f"byte {error.start} is not UTF-8 text", where=str(path), remedy="save the table as CSV (UTF-8)"
        ) from None


def _records(path: Path, text: str) -> list[tuple[int, list[str]]]:
    """Headings and rows, each with the number of its (last) line."""
    first = next((line for line in text.splitlines() if line.strip() and not line.startswith("#")), "")
    separator = max(",;\t", key=first.count)
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=separator)
    records = []
    try:
        for row in reader:
            fields = [field.strip() for field in row]
            if any(fields) and not fields[0].startswith("#"):
                records.append((reader.line_num, fields))
    except csv.Error as error:
        found = f"line {reader.line_num} cannot be read ({error})"
        raise InputError(found, where=str(path), remedy="look there for a quotation mark without its partner") from None
    return records


def _is_number(word: str) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True
