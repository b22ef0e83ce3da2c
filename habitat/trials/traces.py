"""Raw oxygen traces: readings of an oxygen probe in a chamber, made into metabolic rates window by window."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from habitat import seawater, units
from habitat.errors import InputError, UnitError
from habitat.files import nearest
from habitat.trials.chambers import Chamber, read_chambers
from habitat.trials.sheet import TICK, Sheet, check_settling, check_trial, read_sheet
from habitat.trials.trial import Trial
from habitat.trials.windows import Phase, Window, window_slopes

_EXAMPLES = {
    "trial": "trial",
    "time": "time [min]",
    "oxygen": "oxygen [umol/l]",
    "temperature": "temperature [degC]",
    "salinity": "salinity",
}

LITRES = 1000.0
"""In a cubic metre."""


@dataclass(frozen=True)
class Readings:
    """Readings of an oxygen probe, and of the water that it stood in.

    Attributes
    ----------
    hours : numpy.ndarray
        [h]
    oxygen : numpy.ndarray
        As in the file, in `unit`.
    temperature : numpy.ndarray
        [degC]
    salinity : numpy.ndarray
        [1]
    unit : str
        Any unit of dissolved oxygen.
    """

    hours: np.ndarray
    oxygen: np.ndarray
    temperature: np.ndarray
    salinity: np.ndarray
    unit: str

    def rows(self, rows: np.ndarray) -> "Readings":
        """Give some of the readings: indices, or one truth value each."""
        columns = (column[rows] for column in (self.hours, self.oxygen, self.temperature, self.salinity))
        return Readings(*columns, self.unit)

    def complete(self) -> "Readings":
        """Those that lack nothing, in the order of time."""
        columns = np.array([self.hours, self.oxygen, self.temperature, self.salinity])
        kept = np.flatnonzero(np.isfinite(columns).all(axis=0))
        return self.rows(kept[np.argsort(self.hours[kept], kind="stable")])

    @property
    def per_litre(self) -> np.ndarray:
        """Concentration [umol/l]."""
        return oxygen_per_litre(self.oxygen, self.temperature, self.salinity, unit=self.unit)

    @property
    def po2(self) -> np.ndarray:
        """Partial pressure at the surface [kPa]."""
        return self.per_litre / seawater.capacitance(self.temperature, self.salinity)


def read_traces(
    path: str | Path, chambers_path: str | Path, *, window: Window, settling_hours: float = 0.0
) -> list[Trial]:
    """Read raw oxygen traces and the chamber table, and regress the traces into rates.

    ``rate = -(slope - background) (V - M / density) / M``, with the least-squares slope of each window and the
    background slope interpolated in time between the first and last reading of the trial and subtracted as a slope
    (Rodgers, Tenzing & Clark 2016, J. Fish Biol. 88:65).

    Parameters
    ----------
    path : str or Path
        CSV: ``trial``, ``time [s]`` (or another unit, or time stamps), ``oxygen`` in any unit of dissolved oxygen,
        ``temperature [degC]``, ``salinity``; one row a reading, in any order.
    chambers_path : str or Path
        See `habitat.trials.chambers.read_chambers`. Flush periods are on the clock of the column `time`; where that
        holds time stamps, they count from the trial's first reading.
    window : Window
        How closed phases are cut.
    settling_hours : float
        Windows of this first part of each trial are left out [h].

    Returns
    -------
    list of Trial
        One observation a window. `excluded` counts readings (``missing reading``) and windows (``settling``, ``flush``,
        ``phase shorter than half a window``, ``fewer than ... points``, ``crosses a gap``) that were left out.

    Raises
    ------
    InputError, UnitError
        A table cannot be read, a trial has no chamber, or no window of a trial can be used.
    """
    check_settling(settling_hours)
    chambers = read_chambers(chambers_path)
    sheet = read_sheet(path)
    sheet.require(_EXAMPLES)
    trials = sheet.trials()
    for name in trials:
        if name not in chambers:
            raise InputError(
                f"trial '{name}' has no chamber",
                where=str(chambers_path),
                expected=f"a row for each trial of {path}",
                remedy=nearest(name, chambers),
            )
    whole = _all_readings(sheet)
    return [_trial(sheet, name, rows, whole, chambers[name], window, settling_hours) for name, rows in trials.items()]


def oxygen_per_litre(oxygen: np.ndarray, temperature: np.ndarray, salinity: np.ndarray, *, unit: str) -> np.ndarray:
    """Concentration in the water of a chamber at the surface [umol/l], from oxygen in any common unit.

    Parameters
    ----------
    oxygen : array-like
        In `unit`.
    temperature : array-like
        [degC]
    salinity : array-like
        Practical salinity [1].
    unit : str
        See `habitat.units.oxygen_unit`.

    Raises
    ------
    UnitError
        The unit is unknown or not one of dissolved oxygen.
    """
    meaning = units.oxygen_unit(unit)
    amount = oxygen * meaning.factor
    if meaning.kind == "per volume":
        return amount
    if meaning.kind == "per mass":
        return amount * seawater.potential_density(temperature, salinity, 0.0) / LITRES
    if meaning.kind == "saturation":
        return amount * seawater.solubility_per_volume(temperature, salinity)
    return amount * seawater.capacitance(temperature, salinity)


def _all_readings(sheet: Sheet) -> Readings:
    """All rows of the file in its order, missing values as NaN."""
    unit = sheet.unit("oxygen", "umol/l")
    try:
        units.oxygen_unit(unit)
    except UnitError as error:
        raise sheet.unit_error("oxygen", error) from None
    return Readings(sheet.hours(), sheet.numbers("oxygen"), sheet.temperature(), sheet.salinity(), unit)


def _trial(
    sheet: Sheet,
    name: str,
    rows: np.ndarray,
    readings: Readings,
    chamber: Chamber,
    window: Window,
    settling_hours: float,
) -> Trial:
    where = f"{sheet.source}, trial '{name}'"
    whole = readings.rows(rows).complete()
    missing = rows.size - whole.hours.size
    excluded = {"missing reading": missing} if missing else {}
    if whole.hours.size:
        check_trial(where, whole.po2, whole.temperature)
        clock = readings.hours[rows][np.isfinite(readings.hours[rows])]
        start, end = clock.min(), clock.max()
        flushes = np.array(chamber.flushes).reshape(-1, 2) + (start if sheet.stamped() else 0.0)
        _check_flushes(flushes, start, end, where)
        phases = _phases(whole.hours, start + settling_hours, flushes)
        slopes = window_slopes(whole.hours, whole.po2, whole.per_litre, phases, window)
        excluded |= slopes.excluded
    if not whole.hours.size or not slopes.time.size:
        said = ", ".join(f"{reason} {count}" for reason, count in excluded.items())
        raise InputError(
            f"no window of its {rows.size} readings can be used ({said})",
            where=where,
            expected="at least one",
            remedy="choose other windows, or a shorter settling period",
        )
    used = whole.rows(slopes.used)
    temperature, salinity = float(used.temperature.mean()), float(used.salinity.mean())
    background = _background(chamber, (slopes.time - start) / (end - start), temperature, salinity)
    return Trial(
        name=name,
        individual=chamber.individual,
        temperature=temperature,
        po2=slopes.po2,
        rate=-(slopes.slope - background) * chamber.water / chamber.mass,
        mass=chamber.mass,
        salinity=salinity,
        time=slopes.time - start,
        rate_error=slopes.error * chamber.water / chamber.mass,
        excluded=excluded,
    )


def _phases(hours: np.ndarray, settled: float, flushes: np.ndarray) -> list[Phase]:
    """Find the runs of readings between which the chamber was opened or closed, or the animal had settled.

    A flush parts two closed phases even if no reading falls into it.
    """
    settling = hours < settled - TICK
    begun = np.searchsorted(flushes[:, 0] - TICK, hours, side="right")
    ended = np.searchsorted(flushes[:, 1] + TICK, hours, side="left")
    state = np.column_stack([settling, begun, ended])
    ends = [*(np.flatnonzero((np.diff(state, axis=0) != 0).any(axis=1)) + 1), hours.size]
    return [
        Phase(
            slice(int(start), int(end)),
            "settling" if settling[start] else "flush" if begun[start] > ended[start] else "",
        )
        for start, end in zip([0, *ends], ends, strict=False)
    ]


def _check_flushes(flushes: np.ndarray, start: float, end: float, where: str) -> None:
    """Refuse flush periods of which none touches the trace: they are in another unit, or on another clock."""
    if flushes.size and not ((flushes[:, 0] <= end) & (flushes[:, 1] >= start)).any():
        raise InputError(
            f"no flush period falls into the trace of {end - start:.4g} h",
            where=where,
            expected="periods on the clock of the column 'time', or since the first reading if that holds stamps",
            remedy="check the unit in the heading 'flush [min]'",
        )


def _background(chamber: Chamber, share: np.ndarray, temperature: float, salinity: float) -> np.ndarray:
    """Background slope at shares of the way from start to end of the trial [umol/l/h]; 0 where none was measured."""
    measured = [background for background in (chamber.before, chamber.after) if background is not None]
    slopes = [oxygen_per_litre(one.slope, temperature, salinity, unit=one.unit) for one in measured] or [0.0]
    return slopes[0] + share * (slopes[-1] - slopes[0])
