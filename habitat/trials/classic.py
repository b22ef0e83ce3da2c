"""Published estimators of supply capacity, sensor offset and resting rate.

Supply capacity: the largest provision and the mean of the three largest (J. Exp. Biol. 224, jeb242210,
doi:10.1242/jeb.242210). Resting rate: Chabot, Steffensen & Farrell 2016, J. Fish Biol. 88:81.
"""

from dataclasses import dataclass

import numpy as np

LOWEST_COUNT = 10
"""Of the mean of the lowest observations, and per cent of them in its other form (Chabot et al. 2016)."""
LOWEST_DROPPED = 5
"""Observations taken as outliers before the lowest ten per cent (Chabot et al. 2016)."""
LARGEST_MIXTURE_CV = 0.054
"""Above this coefficient of variation a quantile serves better than the lowest normal (Chabot et al. 2016)."""
MIXTURE_COMPONENTS = 4
"""Largest number of normal distributions tried."""
LEAST_COMPONENT = 0.1
"""Share of the observations below which a component is not taken for rest (our choice)."""
PLAUSIBLE_SHARE = 0.02
"""Largest correction of a probe that is believed, of the trial's highest PO2: twice the common 0.1-1 %."""


@dataclass(frozen=True)
class Kink:
    """A correction at which the lead in provision passes from one observation to another.

    Attributes
    ----------
    offset : float
        The correction [kPa].
    provision : float
        Provision of both observations there [umol/g/h/kPa].
    first, second : int
        Which observation leads below and above the correction.
    """

    offset: float
    provision: float
    first: int
    second: int


@dataclass(frozen=True)
class RestingMixture:
    """The lowest normal distribution of a mixture: its mean [umol/g/h] and coefficient of variation [1]."""

    mean: float
    variation: float


def largest_provision(po2: np.ndarray, rate: np.ndarray, *, count: int = 1) -> float:
    """Mean of the `count` largest provisions rate/PO2 as observed [umol/g/h/kPa]; nan without a positive reading.

    Parameters
    ----------
    po2, rate : ndarray, shape (n,)
        [kPa], [umol/g/h]. Readings of zero or less have no provision and are passed over.
    count : int
        1 for the largest, 3 for the more careful published form.
    """
    positive = po2 > 0
    provision = np.sort(rate[positive] / po2[positive])[-count:]
    return float(provision.mean()) if provision.size else float("nan")


def provision_kinks(po2: np.ndarray, rate: np.ndarray, lowest: float, highest: float) -> list[Kink]:
    """Kinks of the upper envelope of rate/(PO2 + c) over the corrections c from `lowest` to `highest` [kPa].

    Two observations swap the lead at exactly ``c = (M1 P2 - M2 P1) / (M2 - M1)``. Every PO2 + `lowest` must be
    positive; rates of zero or less never lead.
    """
    kinks: list[Kink] = []
    provision = np.where(rate > 0, rate, 0.0) / (po2 + lowest)
    correction, leader = lowest, int(np.argmax(provision))
    while True:
        # Only a higher rate overtakes as the correction grows; the first to do so takes the lead.
        rivals = np.flatnonzero(rate > rate[leader])
        if not rivals.size:
            return kinks
        swaps = (rate[leader] * po2[rivals] - rate[rivals] * po2[leader]) / (rate[rivals] - rate[leader])
        nearest = int(np.argmin(swaps))
        correction = max(float(swaps[nearest]), correction)
        if correction > highest:
            return kinks
        follower = int(rivals[nearest])
        kinks.append(Kink(correction, float(rate[leader] / (po2[leader] + correction)), leader, follower))
        leader = follower


def two_point_correction(po2: np.ndarray, rate: np.ndarray, *, plausible: float = PLAUSIBLE_SHARE) -> Kink | None:
    """Sensor offset and supply capacity from two observations assumed to be at full supply capacity.

    Corrections within `plausible` of the trial's highest PO2 on either side are believed; a reading of zero or less
    proves a correction of at least its size, and then the range begins there. The last kink of the range is
    taken: of the rules tried on simulated trials (first, last, sharpest, least correction) it erred least.

    Parameters
    ----------
    po2, rate : ndarray, shape (n,)
        [kPa], [umol/g/h].
    plausible : float
        Largest believed correction, of the highest PO2 [1].

    Returns
    -------
    Kink or None
        None when no kink lies in the range.
    """
    reach = plausible * float(po2.max())
    proven = -float(po2.min())
    lowest = max(-reach, proven + 1e-6 * reach)
    kinks = provision_kinks(po2, rate, lowest, max(reach, proven + reach))
    return kinks[-1] if kinks else None


def resting_quantile(rate: np.ndarray, quantile: float) -> float:
    """Low quantile of the rates, usually 0.1 to 0.3 [umol/g/h] (Chabot et al. 2016)."""
    return float(np.quantile(rate, quantile))


def lowest_ten(rate: np.ndarray) -> float:
    """Mean of the ten lowest rates [umol/g/h] (Chabot et al. 2016)."""
    return float(np.sort(rate)[:LOWEST_COUNT].mean())


def lowest_ten_per_cent(rate: np.ndarray) -> float:
    """Mean of the lowest ten per cent after dropping the five lowest [umol/g/h] (Chabot et al. 2016).

    nan when nothing is left after dropping.
    """
    kept = np.sort(rate)[LOWEST_DROPPED:]
    count = max(round(kept.size * LOWEST_COUNT / 100.0), 1)
    return float(kept[:count].mean()) if kept.size else float("nan")


def lowest_normal(rate: np.ndarray) -> RestingMixture:
    """Lowest normal distribution of the mixture that the Bayesian information criterion prefers (Chabot et al. 2016).

    Parameters
    ----------
    rate : ndarray, shape (n,)
        [umol/g/h]; at least two different values.
    """
    best = min((_fit_mixture(rate, count) for count in range(1, MIXTURE_COMPONENTS + 1)), key=lambda fit: fit[0])
    _, share, mean, sd = best
    lowest = min(np.flatnonzero(share >= LEAST_COMPONENT), key=lambda i: mean[i])
    return RestingMixture(float(mean[lowest]), float(sd[lowest] / abs(mean[lowest])))


def resting_rate(rate: np.ndarray, *, quantile: float = 0.2) -> tuple[float, str]:
    """Resting rate by the published rule: the lowest normal when its CV is 5.4 % or less, otherwise a quantile.

    Parameters
    ----------
    rate : ndarray, shape (n,)
        Rates of one undisturbed individual above its Pcrit [umol/g/h].
    quantile : float
        0.2 or 0.25.

    Returns
    -------
    value : float
        [umol/g/h].
    estimator : str
        Which of the two was used.
    """
    mixture = lowest_normal(rate)
    if mixture.variation <= LARGEST_MIXTURE_CV:
        return mixture.mean, "lowest normal distribution"
    return resting_quantile(rate, quantile), f"quantile {quantile:g}"


def _fit_mixture(rate: np.ndarray, count: int) -> tuple[float, np.ndarray, np.ndarray, np.ndarray]:
    """Fit `count` normals by expectation maximisation: information criterion, shares, means, standard deviations."""
    mean = np.quantile(rate, (np.arange(count) + 0.5) / count)
    narrowest = 0.02 * rate.std()
    sd, share = np.full(count, rate.std() / count), np.full(count, 1.0 / count)
    likelihood = -np.inf
    for _ in range(500):
        z = (rate[:, None] - mean) / sd
        density = share * np.exp(-0.5 * z * z) / (sd * np.sqrt(2.0 * np.pi)) + 1e-300
        total = density.sum(axis=1, keepdims=True)
        before, likelihood = likelihood, float(np.log(total).sum())
        if likelihood - before < 1e-6:
            break
        belongs = density / total
        weight = belongs.sum(axis=0)
        share, mean = weight / rate.size, (belongs * rate[:, None]).sum(axis=0) / weight
        sd = np.maximum(np.sqrt((belongs * (rate[:, None] - mean) ** 2).sum(axis=0) / weight), narrowest)
    return (3 * count - 1) * np.log(rate.size) - 2.0 * likelihood, share, mean, sd
