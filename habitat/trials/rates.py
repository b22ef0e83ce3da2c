"""Tables of metabolic rates: one row an observation of the rate and of the oxygen partial pressure it was made at."""

import re
from pathlib import Path

import numpy as np

from habitat import seawater, units
from habitat.errors import InputError, UnitError
from habitat.trials.sheet import TICK, Sheet, check_settling, check_trial, read_sheet
from habitat.trials.trial import Trial

LARGEST_RATE = 1000.0
"""No animal respires this much; whole trials above it are in another unit [umol/g/h]."""

_EXAMPLES = {"trial": "trial", "rate": "rate [umol/g/h]", "temperature": "temperature [degC]"}


def read_rates(path: str | Path, *, settling_hours: float = 0.0) -> list[Trial]:
    """Read a table of rates.

    Rows without PO2, rate, temperature or (where there is such a column) time are left out and counted as ``missing
    value``. Slightly negative PO2 and rates are kept: they tell of an offset.

    Parameters
    ----------
    path : str or Path
        CSV with headings such as ``trial``, ``po2 [kPa]``, ``rate [umol/g/h]``, ``temperature [degC]``. Instead of
        `po2`, ``oxygen`` in any unit of dissolved oxygen, with ``salinity``; where both are there, `po2` counts. Rates
        of whole animals (``mg/h``) are divided by ``mass [g]``. Optional: ``individual``, ``mass [g]``, ``salinity``,
        ``time [h]`` or a ``time`` of time stamps; without time the rows are taken to be in the order of time.
    settling_hours : float
        Observations earlier than this after the first of their trial are left out and counted as ``settling`` [h].

    Returns
    -------
    list of Trial
        In the order of the file.

    Raises
    ------
    InputError, UnitError
        Columns or units are missing or of the wrong kind, a field is text, a trial is of two animals, two masses or two
        temperatures, its rates cannot be in the unit stated, or nothing of it is left.
    """
    check_settling(settling_hours)
    sheet = read_sheet(path)
    oxygen = {} if sheet.has("oxygen") else {"po2": "po2 [kPa]"}
    needed = {"time": "time [h]"} if settling_hours else {}
    sheet.require(_EXAMPLES | oxygen | needed)
    trials = sheet.trials()
    mass = _masses(sheet, trials)
    temperature = sheet.temperature()
    salinity = sheet.salinity() if sheet.has("salinity") else None
    values = {"po2": _po2(sheet, temperature, salinity), "rate": _rate(sheet, mass), "temperature": temperature}
    if sheet.has("time"):
        values["time"] = sheet.hours()
    return [_trial(sheet, name, rows, values, mass, salinity, settling_hours) for name, rows in trials.items()]


def _trial(
    sheet: Sheet,
    name: str,
    rows: np.ndarray,
    values: dict[str, np.ndarray],
    mass: np.ndarray | None,
    salinity: np.ndarray | None,
    settling_hours: float,
) -> Trial:
    """Put one trial in the order of time, without what is missing or was measured while the animal settled."""
    where = f"{sheet.source}, trial '{name}'"
    whole = np.all([np.isfinite(column[rows]) for column in values.values()], axis=0)
    counts = {"missing value": int((~whole).sum())}
    kept, time = rows[whole], None
    if "time" in values and kept.size:
        start = np.nanmin(values["time"][rows])
        kept = kept[np.argsort(values["time"][kept], kind="stable")]
        settled = values["time"][kept] - start >= settling_hours - TICK
        counts["settling"] = int((~settled).sum())
        kept = kept[settled]
        time = values["time"][kept] - start
    excluded = {reason: count for reason, count in counts.items() if count}
    if not kept.size:
        said = ", ".join(f"{reason} {count}" for reason, count in excluded.items())
        raise InputError(
            f"nothing is left of the {rows.size} rows ({said})",
            where=where,
            remedy="complete the rows, or shorten the settling period",
        )
    po2, rate, temperature = (values[part][kept] for part in ("po2", "rate", "temperature"))
    check_trial(where, po2, temperature)
    _check_size(sheet, where, rate)
    salt = salinity[kept][np.isfinite(salinity[kept])] if salinity is not None else np.array([])
    return Trial(
        name=name,
        individual=_individual(sheet, name, rows),
        temperature=float(temperature.mean()),
        po2=po2,
        rate=rate,
        mass=float(mass[rows[0]]) if mass is not None and np.isfinite(mass[rows[0]]) else None,
        salinity=float(salt.mean()) if salt.size else None,
        time=time,
        excluded=excluded,
    )


def _po2(sheet: Sheet, temperature: np.ndarray, salinity: np.ndarray | None) -> np.ndarray:
    """PO2 of every row [kPa], from `po2` or else from `oxygen` at the surface."""
    if sheet.has("po2"):
        return sheet.quantity(
            "po2", "kPa", remedy="head other units of dissolved oxygen 'oxygen', for example 'oxygen [mg/l]'"
        )
    unit = sheet.unit("oxygen", "umol/kg")
    try:
        meaning = units.oxygen_unit(unit)
    except UnitError as error:
        raise sheet.unit_error("oxygen", error) from None
    if meaning.kind == "partial pressure":
        return sheet.numbers("oxygen") * meaning.factor
    if salinity is None:
        sheet.require({"salinity": "salinity"})
    return seawater.po2_from(sheet.numbers("oxygen"), temperature, salinity, 0.0, unit=unit)


def _rate(sheet: Sheet, mass: np.ndarray | None) -> np.ndarray:
    """Rate of every row [umol/g/h]."""
    unit = sheet.unit("rate", "umol/g/h")
    try:
        return sheet.numbers("rate") * units.factor(unit, "umol/g/h")
    except UnitError:
        pass  # a rate of the whole animal, perhaps
    expected = "oxygen per body mass and time, such as umol/g/h or mg/kg/h, or per time, such as mg/h"
    try:
        factor = units.factor(unit, "umol/h")
    except UnitError as error:
        raise sheet.unit_error("rate", UnitError(error.found, expected=expected, remedy=error.remedy)) from None
    if mass is None:
        raise InputError(
            f"rates of whole animals ('{sheet.column('rate').heading}'), but no column 'mass'",
            where=sheet.source,
            expected="the heading 'mass [g]'",
            remedy="add the mass of each animal, or give rates per mass, such as 'rate [umol/g/h]'",
        )
    rate = sheet.numbers("rate")
    unknown = np.isnan(mass) & np.isfinite(rate)
    if unknown.any():
        first = int(np.argmax(unknown))
        raise InputError(
            f"no mass for the rate of a whole animal in line {sheet.lines[first]}",
            where=f"{sheet.source}, trial '{sheet.column('trial').texts[first]}'",
            expected="the animal's mass in at least one row of the trial",
            remedy="fill in the column 'mass'",
        )
    return rate * factor / mass


def _masses(sheet: Sheet, trials: dict[str, np.ndarray]) -> np.ndarray | None:
    """Mass of the animal of every row [g]; a trial has one mass, which need not stand in each of its rows."""
    if not sheet.has("mass"):
        return None
    mass = sheet.quantity("mass", "g")
    for name, rows in trials.items():
        given = mass[rows][np.isfinite(mass[rows])]
        where = f"{sheet.source}, trial '{name}'"
        if given.size and given.min() <= 0:
            raise InputError(f"mass {given.min():g} g", where=where, expected="a mass above 0", remedy="correct it")
        if given.size and np.ptp(given) > 1e-9 * given.max():  # rounding of unit conversion is no change
            raise InputError(
                f"masses {given.min():g} g and {given.max():g} g in one trial",
                where=where,
                expected="one animal with one mass",
                remedy="give each animal a trial of its own, or correct the mass",
            )
        mass[rows] = given[0] if given.size else np.nan
    return mass


def _individual(sheet: Sheet, name: str, rows: np.ndarray) -> str:
    """Animal of a trial; the trial's own name where the file does not say."""
    if not sheet.has("individual"):
        return name
    texts = sheet.column("individual").texts
    animals = list(dict.fromkeys(texts[row] for row in rows if texts[row]))
    if len(animals) > 1:
        raise InputError(
            f"individuals '{animals[0]}' and '{animals[1]}' in one trial",
            where=f"{sheet.source}, trial '{name}'",
            expected="one animal in one trial",
            remedy="give each animal a trial of its own, or correct the name",
        )
    return animals[0] if animals else name


def _check_size(sheet: Sheet, where: str, rate: np.ndarray) -> None:
    smallest = np.abs(rate).min()
    if smallest <= LARGEST_RATE:
        return
    unit = sheet.unit("rate", "umol/g/h")
    likely = re.sub(r"(?<![a-zA-Z])g(?![a-zA-Z])", "kg", unit)
    raise InputError(
        f"no rate below {smallest:.4g} umol/g/h",
        where=where,
        expected=f"rates below {LARGEST_RATE:g} umol/g/h",
        remedy=f"check the unit '{unit}'"
        + (f", which is probably '{likely}'" if likely != unit else ", and that of the mass"),
    )
