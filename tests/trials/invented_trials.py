"""Invented respirometry trials with known truth, and how well an informed analyst could do.

A sealed animal draws the oxygen of its chamber down in proportion to its own rate, ``dPO2/dt = -k MO2``. It asks for a
demand ``d(t)``, never less than its resting rate, and gets ``MO2 = min(d, alpha PO2)``. Readings are taken at equal
intervals of time until the last falls to the stated oxygen. What the families leave open is chosen here once: a trial
of the undisturbed animal lasts six hours, bursts come 0.8 times an hour and halve in about ten minutes, Pcrit is
log-normal about 2.2 kPa.
"""

from dataclasses import dataclass

import numpy as np

START_PO2, END_PO2 = 20.0, 0.3
"""[kPa]"""
PO2_SD = 0.02
"""Random error of a PO2 reading [kPa]."""
OFFSET_SD = 0.12
"""Spread of the sensor offsets [kPa]."""
NOMINAL_HOURS = 6.0
BURSTS_PER_HOUR = 0.8
BURST_DECAY_HOURS = 0.25
FINE_STEPS_PER_HOUR = 200

FAMILIES = ("constant", "wandering", "settling", "heavy noise", "18 observations", "background drift", "gain error")


@dataclass(frozen=True)
class Trial:
    """One invented trial and its truth.

    Attributes
    ----------
    po2, rate : ndarray, shape (n,)
        Readings [kPa] and measured rates [umol/g/h], in the order of time.
    offset : float
        What the readings need added to be right, gain apart [kPa].
    supply_capacity, resting_rate : float
        [umol/g/h/kPa] and [umol/g/h].
    limited : ndarray of bool, shape (n,)
        Where the animal asked for more than it could get.
    rate_sd : ndarray, shape (n,)
        Standard deviation of each rate's random error [umol/g/h].
    """

    po2: np.ndarray
    rate: np.ndarray
    offset: float
    supply_capacity: float
    resting_rate: float
    limited: np.ndarray
    rate_sd: np.ndarray

    @property
    def critical_po2(self) -> float:
        """Resting rate over supply capacity [kPa]."""
        return self.resting_rate / self.supply_capacity


def simulate_trial(family: str, rng: np.random.Generator, *, reaches_limit: bool = True) -> Trial:
    """Invent one trial of a family.

    Parameters
    ----------
    family : str
        One of `FAMILIES`.
    rng : numpy.random.Generator
    reaches_limit : bool
        False stops the trial while the animal can still have all it asks for: at the oxygen that twice to three times
        its resting rate needs, and, where it is active, before any burst is cut short.
    """
    supply_capacity = 1.10 * np.exp(0.3 * rng.standard_normal())
    critical = np.clip(2.2 * np.exp(0.25 * rng.standard_normal()), 1.0, 4.0)
    resting = supply_capacity * critical
    drawdown = (START_PO2 - critical + critical * np.log(critical / END_PO2)) / (resting * NOMINAL_HOURS)
    end = END_PO2 if reaches_limit else critical * rng.uniform(2.0, 3.0)

    count = 18 if family == "18 observations" else 80
    po2, demand, share = _draw_down(_demand(family, resting, rng), supply_capacity, drawdown, end, count, reaches_limit)
    rate = np.minimum(demand, supply_capacity * po2)
    if family == "background drift":
        rate = rate + resting * rng.uniform(-0.05, 0.05) * share

    relative, absolute = (0.10, 0.05) if family == "heavy noise" else (0.04, 0.02)
    rate_sd = np.hypot(relative * rate, absolute * resting)
    gain = rng.choice([0.98, 1.02]) if family == "gain error" else 1.0
    offset = OFFSET_SD * rng.standard_normal()
    return Trial(
        po2=gain * po2 - offset + PO2_SD * rng.standard_normal(po2.size),
        rate=rate + rate_sd * rng.standard_normal(po2.size),
        offset=offset,
        supply_capacity=supply_capacity,
        resting_rate=resting,
        limited=demand > supply_capacity * po2,
        rate_sd=rate_sd,
    )


def _demand(family: str, resting: float, rng: np.random.Generator) -> np.ndarray:
    """Rate that the animal asks for on a fine grid of time [umol/g/h]."""
    time = np.arange(int(3 * NOMINAL_HOURS * FINE_STEPS_PER_HOUR)) / FINE_STEPS_PER_HOUR
    excess = np.zeros(time.size)
    if family == "wandering":
        decay = np.exp(-1.0 / (BURST_DECAY_HOURS * FINE_STEPS_PER_HOUR))
        starts = rng.random(time.size) < BURSTS_PER_HOUR / FINE_STEPS_PER_HOUR
        peaks = rng.uniform(0.5, 4.0, time.size)
        level = 0.0
        for i in range(time.size):
            level = max(level * decay, peaks[i] if starts[i] else 0.0)
            excess[i] = level
    elif family == "settling":
        excess = 2.0 * np.exp(-time / (NOMINAL_HOURS / 12.0))
    return resting * (1.0 + excess)


def _draw_down(
    demand: np.ndarray, supply_capacity: float, drawdown: float, end: float, count: int, reaches_limit: bool
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Find the true PO2, the demand and the share of the time gone at `count` equal intervals up to `end`."""
    po2 = [START_PO2]
    for asked in demand:
        supply = supply_capacity * po2[-1]
        if po2[-1] <= end or (not reaches_limit and asked > supply):
            break
        po2.append(po2[-1] - drawdown / FINE_STEPS_PER_HOUR * min(asked, supply))
    index = np.linspace(0, min(len(po2), demand.size) - 1 - (not reaches_limit), count).round().astype(int)
    return np.array(po2)[index], demand[index], np.linspace(0.0, 1.0, count)


def informed_fit(trial: Trial) -> tuple[float, float, np.ndarray]:
    """Find what an analyst would who knew the limited observations and the noise: the bound of any estimator.

    Weighted regression of rate on reading through the observations that truly were limited, the random error of the
    reading carried over to the rate by the true slope.

    Returns
    -------
    ln_supply_capacity, offset : float
        ln [umol/g/h/kPa] and [kPa].
    covariance : ndarray, shape (2, 2)
        Of the two.
    """
    po2, rate = trial.po2[trial.limited], trial.rate[trial.limited]
    weight = 1.0 / (trial.rate_sd[trial.limited] ** 2 + (trial.supply_capacity * PO2_SD) ** 2)
    design = np.column_stack([np.ones_like(po2), po2])
    normal = design.T @ (weight[:, None] * design)
    intercept, slope = np.linalg.solve(normal, design.T @ (weight * rate))
    slope = max(slope, 1e-3 * trial.supply_capacity)
    gradient = np.array([[0.0, 1.0 / slope], [1.0 / slope, -intercept / slope**2]])
    return float(np.log(slope)), float(intercept / slope), gradient @ np.linalg.inv(normal) @ gradient.T
