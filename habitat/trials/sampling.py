"""Posterior distributions by maximisation and adaptive importance sampling; densities take many points at once."""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import numpy as np
from scipy.optimize import minimize
from scipy.special import gammaln, ndtri
from scipy.stats import chi2, qmc

LogDensity = Callable[[np.ndarray], np.ndarray]
"""Takes points of shape (m, d) and returns log densities of shape (m,), up to a constant."""

DEGREES_OF_FREEDOM = 6.0
"""Of the Student distributions from which points are proposed: tails heavier than the posterior's."""

LEAST_ROUNDS, MOST_ROUNDS = 4, 12
ENOUGH_DRAWS = 250.0
"""Effective draws with which the ends of a 95 % interval are good to about a seventh of a standard deviation."""


@dataclass(frozen=True)
class WeightedDraws:
    """Points and weights that stand for a distribution.

    Attributes
    ----------
    points : ndarray, shape (m, d)
    weights : ndarray, shape (m,)
        Sum to 1.
    """

    points: np.ndarray
    weights: np.ndarray

    @property
    def effective_size(self) -> float:
        """Number of equally weighted draws that would serve as well."""
        return float(1.0 / (self.weights @ self.weights))


def maximise(
    log_density: LogDensity, start: np.ndarray, scale: np.ndarray, free: np.ndarray
) -> tuple[np.ndarray, float]:
    """Climb to the nearest maximum (BFGS), all gradients in one call of the density.

    Parameters
    ----------
    log_density : callable
    start, scale : ndarray, shape (d,)
        Where to begin, and each coordinate's natural step.
    free : ndarray of int
        Which coordinates may move.

    Returns
    -------
    point : ndarray, shape (d,)
    value : float
    """
    step = 1e-3
    moves = np.zeros((2 * free.size + 1, start.size))
    moves[1 + np.arange(free.size), free] = step
    moves[1 + free.size + np.arange(free.size), free] = -step

    def at(x: np.ndarray) -> np.ndarray:
        point = start.copy()
        point[free] += x * scale[free]
        return point

    def descend(x: np.ndarray) -> tuple[float, np.ndarray]:
        values = log_density(at(x) + moves * scale)
        return -values[0], (values[1 + free.size :] - values[1 : 1 + free.size]) / (2.0 * step)

    found = minimize(descend, np.zeros(free.size), jac=True, method="BFGS", options={"gtol": 0.02, "maxiter": 80})
    return at(found.x), -float(found.fun)


def laplace_spread(log_density: LogDensity, mode: np.ndarray, step: np.ndarray, widest: np.ndarray) -> np.ndarray:
    """Covariance of the normal distribution with the curvature of a density at its mode, shape (d, d).

    Parameters
    ----------
    log_density : callable
    mode, step : ndarray, shape (d,)
        The maximum, and each coordinate's natural step: differences are taken over 0.05 of it.
    widest : ndarray, shape (d,)
        Standard deviations that hardly any coordinate exceeds, such as those of the priors.
    """
    rows, columns = np.triu_indices(mode.size)
    axes = 0.05 * np.diag(step)
    corners = [p * axes[rows] + q * axes[columns] for p, q in ((1, 1), (1, -1), (-1, 1), (-1, -1))]
    values = log_density(mode + np.concatenate(corners)).reshape(4, -1)
    second = np.zeros((mode.size, mode.size))
    second[rows, columns] = second[columns, rows] = -(values[0] - values[1] - values[2] + values[3])
    box = np.outer(widest, widest)
    curvatures, vectors = np.linalg.eigh(second / (4.0 * 0.05**2 * np.outer(step, step)) * box)
    return (vectors / np.maximum(curvatures, 0.5)) @ vectors.T * box


def importance_sample(
    log_density: LogDensity, centre: np.ndarray, spread: np.ndarray, *, draws: int = 512
) -> WeightedDraws:
    """Sample a distribution from a first guess of its centre and spread, refitting both after every round.

    There are `LEAST_ROUNDS` rounds, and more, up to `MOST_ROUNDS`, while the draws are worth fewer than `ENOUGH_DRAWS`.

    Proposals are Student distributions; the points of all rounds are weighted against their even mixture (deterministic
    mixture weights: Owen & Zhou 2000, J. Am. Stat. Assoc. 95:135). The points are quasi-random with fixed seeds, so
    that the same data give the same answer.

    Parameters
    ----------
    log_density : callable
    centre : ndarray, shape (d,)
    spread : ndarray, shape (d, d)
        Covariance.
    draws : int
        Number of points from each proposal (a power of two).
    """
    floor = np.diag(np.diag(spread)) * 1e-3
    proposals, points, logs = [], [], []
    for number in range(MOST_ROUNDS):
        factor = np.linalg.cholesky(spread + floor)
        proposals.append((centre, factor))
        points.append(centre + _student_points(draws, centre.size, number) @ factor.T)
        logs.append(log_density(points[-1]))
        everything = np.concatenate(points)
        proposed = np.logaddexp.reduce([_student_log_density(everything, *p) for p in proposals], axis=0)
        ratio = np.concatenate(logs) - proposed
        weights = np.exp(ratio - ratio.max())
        sample = WeightedDraws(everything, weights / weights.sum())
        if number + 1 >= LEAST_ROUNDS and sample.effective_size >= ENOUGH_DRAWS:
            break
        # Cut before refitting, so that one lucky point does not become the whole of the next proposal.
        cut = np.minimum(weights, weights.mean() * np.sqrt(weights.size) / 2.0)
        cut /= cut.sum()
        centre = cut @ everything
        away = everything - centre
        spread = away.T @ (cut[:, None] * away)
    return sample


@cache
def _student_points(count: int, size: int, number: int) -> np.ndarray:
    """Quasi-random points of a standard Student distribution, shape (count, size)."""
    uniform = qmc.Sobol(size + 1, seed=np.random.default_rng(number)).random(count)
    return ndtri(uniform[:, :size]) * np.sqrt(DEGREES_OF_FREEDOM / chi2.ppf(uniform[:, size:], DEGREES_OF_FREEDOM))


def _student_log_density(points: np.ndarray, centre: np.ndarray, factor: np.ndarray) -> np.ndarray:
    """Log density of a Student distribution whose scale matrix has the Cholesky factor `factor`."""
    size, freedom = centre.size, DEGREES_OF_FREEDOM
    distance = (np.linalg.solve(factor, (points - centre).T) ** 2).sum(axis=0)
    constant = gammaln((freedom + size) / 2.0) - gammaln(freedom / 2.0) - size / 2.0 * np.log(freedom * np.pi)
    return constant - np.log(np.diag(factor)).sum() - (freedom + size) / 2.0 * np.log1p(distance / freedom)
