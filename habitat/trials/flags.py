"""What a reader of a trial's estimate must be warned of."""

from typing import Protocol

import numpy as np
from scipy.stats import linregress, spearmanr

from habitat.trials.classic import two_point_correction

FEW_OBSERVATIONS = 20
"""A trial with fewer is flagged."""
SHORT_LIMITED_PHASE = 4.0
"""A trial with fewer observations on the supply line is flagged."""
PLAUSIBLE_OFFSET = 0.4
"""Largest offset of a sound probe: 2 % of air saturation, twice the largest common correction [kPa]."""
DISAGREEMENT = 1.5
"""Factor beyond the interval at which the two-point correction is said to disagree."""
SURELY_LIMITED = 0.5
"""Chance of being limited above which an observation is left out of what is said about the free animal."""
NOTABLE_DRIFT = 0.05
"""Change of the resting rate over the trial that matters, of itself."""
NOTABLE_RISE = 0.10
"""Rise of the free animal's median rate in the poorer half of its oxygen that matters."""
LEAST_FOR_RISE = 8
"""Free observations below which no trend of the rate with oxygen is sought."""
SIGNIFICANCE = 0.001
"""Chance of raising a flag about a trend where there is none."""


class Interval(Protocol):
    """Anything with a value and the ends of its 95 % interval."""

    value: float
    p025: float
    p975: float


def raised_flags(
    po2: np.ndarray, rate: np.ndarray, limited: np.ndarray, posterior: dict[str, Interval], *, never_limited: bool
) -> tuple[str, ...]:
    """Words for the flags column, in a fixed order.

    Parameters
    ----------
    po2, rate, limited : ndarray, shape (n,)
        Readings [kPa], rates [umol/g/h] and each observation's chance of being limited [1], in the order of time.
    posterior : dict
        Summaries of `sensor_offset` [kPa], `supply_capacity` [umol/g/h/kPa] and `resting_rate` [umol/g/h].
    never_limited : bool
        The trial shows no supply limit; flags about the limited phase do not apply.
    """
    free = limited < SURELY_LIMITED
    judged = {
        "never-limited": never_limited,
        "short-limited-phase": not never_limited and limited.sum() < SHORT_LIMITED_PHASE,
        "offset-implausible": not never_limited and abs(posterior["sensor_offset"].value) > PLAUSIBLE_OFFSET,
        "drift": _rest_drifts(rate, free, posterior["resting_rate"]),
        "estimators-disagree": not never_limited and _two_points_disagree(po2, rate, posterior["supply_capacity"]),
        "rate-rises-as-oxygen-falls": _rate_rises(po2[free], rate[free]),
        "few-observations": po2.size < FEW_OBSERVATIONS,
    }
    return tuple(word for word, raised in judged.items() if raised)


def _rest_drifts(rate: np.ndarray, free: np.ndarray, rest: Interval) -> bool:
    """Whether the rates near rest change steadily in the course of the trial."""
    resting = free & (np.abs(rate / rest.value - 1.0) < 0.25)
    if resting.sum() < FEW_OBSERVATIONS:
        return False
    trend = linregress(np.linspace(0.0, 1.0, rate.size)[resting], rate[resting] / rest.value)
    return bool(trend.pvalue < SIGNIFICANCE and abs(trend.slope) > NOTABLE_DRIFT)


def _two_points_disagree(po2: np.ndarray, rate: np.ndarray, capacity: Interval) -> bool:
    """Whether the two-point correction puts the supply capacity far outside the joint estimate's interval."""
    kink = two_point_correction(po2, rate)
    if kink is None:
        return False
    return not capacity.p025 / DISAGREEMENT < kink.provision < capacity.p975 * DISAGREEMENT


def _rate_rises(po2: np.ndarray, rate: np.ndarray) -> bool:
    """Whether the free animal's rate is higher where its oxygen is poorer."""
    if po2.size < LEAST_FOR_RISE or np.ptp(po2) == 0 or np.ptp(rate) == 0:
        return False
    poorer = po2 <= np.median(po2)
    if poorer.all() or np.median(rate[poorer]) <= (1.0 + NOTABLE_RISE) * np.median(rate[~poorer]):
        return False
    return bool(spearmanr(po2, rate, alternative="less").pvalue < SIGNIFICANCE)
