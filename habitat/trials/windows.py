"""From a trace of oxygen to slopes: closed phases cut into windows, and a regression line through each."""

from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.ndimage import median_filter

from habitat.errors import InputError

GAP_STEPS = 5.0
"""Readings further apart than this many usual (median) intervals have a gap between them."""

MINUTES = 60.0
"""In an hour."""

SMOOTHED_READINGS = 5
"""Length of the running median by which the fall of oxygen is followed, so that one stray reading ends no window."""


@dataclass(frozen=True)
class Window:
    """How closed phases are cut.

    Each closed phase is cut into as many equal windows as have the size asked for or more, so that no piece is left
    over at its end. A phase of half the size or more, but less than the size, is one window.

    Windows of equal fall end where the readings have fallen, so that noise makes slopes slightly too steep: by 1 %
    for windows of 15 times the noise of a reading, by 0.1 to 0.3 % for windows of 50 times.

    Attributes
    ----------
    kind : {"time", "oxygen"}
        Windows of equal time, or of equal fall of PO2.
    size : float
        [min] or [kPa]
    least_points : int
        Windows with fewer readings are left out.

    Raises
    ------
    InputError
        The kind is unknown, the size is not above 0, or fewer than 3 points are asked for.
    """

    kind: Literal["time", "oxygen"]
    size: float
    least_points: int = 10

    def __post_init__(self) -> None:
        if self.kind not in ("time", "oxygen"):
            raise InputError(f"windows of equal '{self.kind}'", expected="'time' or 'oxygen'")
        if not 0 < self.size < np.inf:
            raise InputError(f"window size {self.size:g}", expected="minutes, or kPa of falling PO2, above 0")
        if self.least_points < 3:
            found = f"windows of {self.least_points} points"
            raise InputError(found, expected="3 or more: a slope with an error needs them")


@dataclass(frozen=True)
class Phase:
    """A run of readings in which the chamber was in one state.

    Attributes
    ----------
    rows : slice
        Its readings.
    reason : str
        Why it cannot be used (``settling``, ``flush``); empty for a closed phase.
    """

    rows: slice
    reason: str = ""


@dataclass(frozen=True)
class Slopes:
    """One value a window, in the order of time.

    Attributes
    ----------
    time : numpy.ndarray
        Mean over the window's readings [h].
    po2 : numpy.ndarray
        Mean over the window's readings [kPa].
    slope, error : numpy.ndarray
        Least-squares slope of oxygen on time, and its standard error [umol/l/h]. The error takes the readings as
        independent; a probe that smooths makes it too small.
    used : numpy.ndarray of bool
        Readings that lie in a window.
    excluded : dict
        Reason to number of windows left out.
    """

    time: np.ndarray
    po2: np.ndarray
    slope: np.ndarray
    error: np.ndarray
    used: np.ndarray
    excluded: dict[str, int]


def window_slopes(
    hours: np.ndarray, po2: np.ndarray, oxygen: np.ndarray, phases: Sequence[Phase], window: Window
) -> Slopes:
    """Fit a line through each window of each closed phase.

    Parameters
    ----------
    hours : numpy.ndarray
        Time of the readings, ascending [h].
    po2 : numpy.ndarray
        [kPa]
    oxygen : numpy.ndarray
        Concentration [umol/l].
    phases : sequence of Phase
        A window never reaches over two phases.
    window : Window

    Notes
    -----
    A window is left out, and counted, when its phase cannot be used or is shorter than half a window, when it has too
    few readings, and when it crosses a gap. In a phase that cannot be used those windows are counted that it would have
    given.
    """
    steps = np.diff(hours)
    gap = GAP_STEPS * float(np.median(steps[steps > 0])) if (steps > 0).any() else np.inf
    used = np.zeros(hours.size, dtype=bool)
    excluded: Counter[str] = Counter()
    fits = []
    for phase in phases:
        for rows, whole in _cut(hours, po2, phase.rows, window):
            short = "" if whole else "phase shorter than half a window"
            reason = phase.reason or short or _fault(hours[rows], window.least_points, gap)
            if reason:
                excluded[reason] += 1
            else:
                used[rows] = True
                fits.append((hours[rows].mean(), po2[rows].mean(), *_slope(hours[rows], oxygen[rows])))
    time, level, slope, error = np.array(fits).reshape(-1, 4).T
    return Slopes(time, level, slope, error, used, dict(excluded))


def _cut(hours: np.ndarray, po2: np.ndarray, phase: slice, window: Window) -> Iterator[tuple[slice, bool]]:
    """Windows of a phase, and whether they have about the size asked for."""
    if window.kind == "time":
        progress = (hours[phase] - hours[phase][0]) * MINUTES
    else:
        level = median_filter(po2[phase], size=SMOOTHED_READINGS, mode="nearest")
        progress = np.maximum.accumulate(level[0] - level)
    extent = progress[-1] * progress.size / max(1, progress.size - 1)  # the last reading, too, stands for a share
    if extent < window.size / 2:
        yield phase, False
        return
    number = max(1, int(extent / window.size + 1e-9))
    share = progress / progress[-1]  # of the way through the phase
    labels = np.minimum((share * number + 1e-9).astype(int), number - 1)  # the last reading is of the last window
    ends = [*(np.flatnonzero(np.diff(labels)) + 1), labels.size]
    for start, end in zip([0, *ends], ends, strict=False):
        yield slice(phase.start + int(start), phase.start + int(end)), True


def _fault(hours: np.ndarray, least_points: int, gap: float) -> str:
    if np.unique(hours).size < least_points:
        return f"fewer than {least_points} points"
    return "crosses a gap" if np.diff(hours).max() > gap else ""


def _slope(hours: np.ndarray, oxygen: np.ndarray) -> tuple[float, float]:
    """Least-squares slope and its standard error."""
    from_mean = hours - hours.mean()
    spread = from_mean @ from_mean
    slope = from_mean @ (oxygen - oxygen.mean()) / spread
    residual = oxygen - oxygen.mean() - slope * from_mean
    return float(slope), float(np.sqrt(residual @ residual / (hours.size - 2) / spread))
