"""From trials at several temperatures to one species: levels, activation energies, and how sure they are together.

For each trait (ln of supply capacity, ln of resting rate) of trial j of individual i::

    y_ij = level + E x_ij + mass_exponent ln(mass_i / M0) + u_i + w_ij + e_ij,    x = (1/T0 - 1/T) / kB

with scatter u between individuals and w between the trials of one individual (each with its own 2 x 2 covariance
across the traits) and the uncertainty e of the trial itself, of known covariance. Variances by restricted maximum
likelihood (Patterson & Thompson 1971, Biometrika 58:545, doi:10.1093/biomet/58.3.545), coefficients by generalised
least squares. As the variances are estimated too, the covariance of the coefficients is widened until Gaussian 95 %
intervals made from it are as wide as t intervals with the degrees of freedom of each coefficient (Satterthwaite 1946,
Biometrics Bulletin 2:110, doi:10.2307/3002019). The widening is done at the mean x of the trials, so that Pcrit(T) and
its uncertainty do not depend on the choice of T0. Measured coverage: tests/benchmarks/response_coverage.py.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import minimize
from scipy.stats import t as student

from habitat.errors import InputError
from habitat.species import BOLTZMANN, PARAMETERS, Response, Species
from habitat.units import ZERO_CELSIUS

SAME_TEMPERATURE = 1.0
"""Trials closer than this are at one temperature, which tells nothing of the activation energy [degC]."""

LEAST_TRIALS = 3
"""Fewer trials leave no degree of freedom beside a level and an activation energy."""

LEAST_MASS_RATIO, LEAST_MASS_INDIVIDUALS = 2.0, 6
"""A mass exponent is fitted from no less."""

PUBLISHED_ENERGIES = (0.29, 0.69)
"""Of supply capacity and resting rate [eV]: Es and Es + E0, E0 = 0.40 (Deutsch et al. 2020, Nature 585:557, p. 559)."""

PUBLISHED_COVARIANCE = ((0.23**2, 0.23**2), (0.23**2, 0.23**2 + 0.28**2))
"""[eV2]: from the spread of Es, 0.23 eV, and of E0, 0.28 eV, among species (same source), taken as independent."""

ENERGIES = PARAMETERS[2:]

MANY = 1e6
"""More degrees of freedom change nothing."""

_SMALLEST_ERROR = 1e-3  # of a logarithm, or of an energy [eV]: keeps the likelihood finite for exact data
_CLOSE = {"ftol": 1e-13, "gtol": 1e-7}
_NORMAL_975 = 1.959963984540054
_TRAIT_PAIRS = np.array([[[1.0, 0.0], [0.0, 0.0]], [[0.0, 1.0], [1.0, 0.0]], [[0.0, 0.0], [0.0, 1.0]]])


@dataclass(frozen=True)
class TrialPoint:
    """What one trial says about its species.

    Attributes
    ----------
    trial, individual : str
    temperature : float
        [degC]
    mass : float or None
        Body mass [g].
    ln_supply_capacity : float
        Of a value in umol/g/h/kPa; NaN when oxygen never limited the animal: the trial is then used for its rate only.
    ln_resting_rate : float
        Of a value in umol/g/h.
    covariance : numpy.ndarray
        Of the two, shape (2, 2): what the trial itself leaves uncertain. Only the last element is used when the supply
        capacity is NaN.
    """

    trial: str
    individual: str
    temperature: float
    mass: float | None
    ln_supply_capacity: float
    ln_resting_rate: float
    covariance: np.ndarray


@dataclass(frozen=True)
class _Observations:
    """Trials by individual; rows run supply capacity, rate, supply capacity, ... and are padded with zeros.

    A padded row has no coefficients, value 0 and error 1, so that it adds nothing to the likelihood. What is known of
    the energies beforehand is one more block, without scatter.
    """

    values: np.ndarray  # (blocks, rows)
    errors: np.ndarray  # (blocks, rows, rows)
    design: np.ndarray  # (blocks, rows, coefficients): two levels, two energies and, if fitted, two mass exponents
    shapes: np.ndarray  # (3 or 6, blocks, rows, rows): derivatives of the covariance by the elements of each scatter


def fit_species(
    points: Sequence[TrialPoint],
    *,
    name: str,
    reference_temperature: float | None = None,
    energies: Mapping[str, tuple[float, float]] | None = None,
    provenance: Mapping[str, Any] | None = None,
) -> Species:
    """Fit temperature and mass dependence over individuals and temperatures.

    An activation energy is measured where at least `LEAST_TRIALS` trials span `SAME_TEMPERATURE`; otherwise it rests on
    the published distribution, with its spread. A mass exponent is fitted when the masses of at least
    `LEAST_MASS_INDIVIDUALS` individuals span a factor of `LEAST_MASS_RATIO`. The provenance says what was done.

    Parameters
    ----------
    points : sequence of TrialPoint
        In any order.
    name : str
        Of the species.
    reference_temperature : float, optional
        T0 [degC]; by default the mean of the trials, rounded to 0.1.
    energies : mapping, optional
        Activation energies known from elsewhere: ``supply_energy`` and ``resting_energy``, each a value and its
        standard deviation [eV]. Trials at several temperatures refine them as far as that deviation allows.
    provenance : mapping, optional
        Added to what the fit says of itself.

    Returns
    -------
    Species
        The covariance, in the order of `habitat.species.PARAMETERS`, says how well the mean animal is known; how much
        individuals differ from it is the scatter named in the provenance.

    Raises
    ------
    InputError
        Fewer than 2 trials have a supply capacity, the uncertainty of one is not known, temperature and mass change
        together, `energies` is incomplete, or a result is beyond what a species file may hold.
    """
    points = sorted(points, key=lambda point: (point.individual, point.trial))  # sums do not depend on the order given
    usable = [point for point in points if np.isfinite(point.ln_supply_capacity)]
    if len(usable) < 2:
        raise InputError(
            f"{len(usable)} of {len(points)} trials with a supply capacity",
            where=name,
            expected="2 or more trials in which oxygen became limiting",
            remedy="add trials that run to lower oxygen",
        )
    temperatures = np.array([point.temperature for point in points])
    if reference_temperature is None:
        reference_temperature = round(float(temperatures.mean()), 1)
    known, energy_notes = _known_energies(points, usable, energies, name)
    mean_mass, fit_mass, mass_notes = _mass_source(points, usable)
    centre = float(_inverse_temperature(temperatures).mean())
    observed = _observations(points, known, centre, mean_mass if fit_mass else None)
    _check_design(name, observed.design)
    scatter = _scatter(observed)
    model = _Weighted(observed, scatter)
    freedom = _freedom(model, observed.shapes)

    wider = student.ppf(0.975, freedom) / _NORMAL_975
    move = np.eye(4)
    move[[0, 1], [2, 3]] = _inverse_temperature(reference_temperature) - centre
    values, exponents = move @ model.coefficients[:4], (model.coefficients[4:] if fit_mass else np.zeros(2))
    covariance = move @ (model.covariance * np.outer(wider, wider))[:4, :4] @ move.T
    _check_limits(name, reference_temperature, values[2:], exponents)
    said = _said(points, usable, scatter, freedom)
    notes = [*(provenance or {}).get("notes", []), *energy_notes, *mass_notes, *_scatter_notes(points, usable)]
    return Species(
        name=name,
        reference_temperature=reference_temperature,
        supply_capacity=Response(float(np.exp(values[0])), float(values[2]), float(exponents[0])),
        resting_rate=Response(float(np.exp(values[1])), float(values[3]), float(exponents[1])),
        temperature_range=_temperature_range(temperatures),
        body_mass=mean_mass,
        covariance=tuple(tuple(float(value) for value in row) for row in covariance),
        provenance=dict(provenance or {}) | said | ({"notes": notes} if notes else {}),
    )


# --- what can be fitted ------------------------------------------------------------------------------------------


def _inverse_temperature(temperature: Any) -> Any:
    """-1/(kB T) [1/eV] of a temperature [degC]: the Arrhenius variable but for its zero."""
    return -1.0 / (BOLTZMANN * (temperature + ZERO_CELSIUS))


def _known_energies(
    points: Sequence[TrialPoint],
    usable: Sequence[TrialPoint],
    given: Mapping[str, tuple[float, float]] | None,
    name: str,
) -> tuple[dict[int, tuple[float, np.ndarray]], list[str]]:
    """Energies not left to the trials alone: number to value and row of their covariance; and what there is to say."""
    if given is not None:
        if set(given) != set(ENERGIES) or not all(sd >= 0 for _, sd in given.values()):
            raise InputError(
                f"activation energies {dict(given)}",
                where=name,
                expected=f"{' and '.join(ENERGIES)}, each with a value and a standard deviation in eV",
                remedy="give both, or neither",
            )
        rows = np.diag([given[key][1] ** 2 for key in ENERGIES])
        return {k: (given[key][0], rows[k]) for k, key in enumerate(ENERGIES)}, ["activation energies were given"]
    known, notes = {}, []
    for k, trials in enumerate((usable, points)):
        span = float(np.ptp([point.temperature for point in trials]))
        if len(trials) < LEAST_TRIALS or span < SAME_TEMPERATURE:
            known[k] = PUBLISHED_ENERGIES[k], np.array(PUBLISHED_COVARIANCE[k])
            notes.append(
                f"{ENERGIES[k]} rests on the published distribution (Deutsch et al. 2020, Nature 585:557), with its "
                f"spread: {len(trials)} trials over {span:.1f} degC do not show it"
            )
    return known, notes


def _mass_source(points: Sequence[TrialPoint], usable: Sequence[TrialPoint]) -> tuple[float | None, bool, list[str]]:
    """Geometric mean mass [g], whether an exponent can be fitted, and what there is to say."""
    without = sum(point.mass is None for point in points)
    if without:
        said = "no trial has a body mass" if without == len(points) else f"{without} of {len(points)} have no body mass"
        return None, False, [f"no mass exponent: {said}"]
    mean = float(np.exp(np.mean([np.log(point.mass) for point in points])))
    masses = [point.mass for point in usable]
    ratio, individuals = max(masses) / min(masses), len({point.individual for point in usable})
    if ratio >= LEAST_MASS_RATIO and individuals >= LEAST_MASS_INDIVIDUALS:
        return mean, True, []
    return mean, False, [f"no mass exponent: masses of {individuals} individuals span a factor of {ratio:.2f}"]


def _temperature_range(temperatures: np.ndarray) -> tuple[float, float]:
    """Where the animal was measured [degC]; a single temperature stands for half of `SAME_TEMPERATURE` either way."""
    lowest, highest = float(temperatures.min()), float(temperatures.max())
    margin = 0.0 if highest > lowest else SAME_TEMPERATURE / 2
    return lowest - margin, highest + margin


def _check_design(name: str, design: np.ndarray) -> None:
    """Refuse trials in which two effects are one."""
    if np.linalg.matrix_rank(design.reshape(-1, design.shape[-1])) < design.shape[-1]:
        raise InputError(
            "temperature and body mass change together from trial to trial",
            where=name,
            expected="trials that tell their effects apart",
            remedy="leave out the masses, or give the activation energies",
        )


def _check_limits(name: str, reference: float, energies: np.ndarray, exponents: np.ndarray) -> None:
    """Refuse what a species file cannot hold; such values come from too little spread, not from an animal."""
    if not -5 <= reference <= 50:
        raise InputError(f"reference temperature {reference} degC", where=name, expected="-5 to 50 degC")
    remedy = "use trials further apart in temperature, or give the activation energies"
    for key, energy in zip(ENERGIES, energies, strict=True):
        if not abs(energy) <= 3:
            raise InputError(f"{key} came out as {energy:.2f} eV", where=name, expected="-3 to 3 eV", remedy=remedy)
    if not np.all(np.abs(exponents) <= 2):
        found = "mass exponents came out as {:.2f} and {:.2f}".format(*exponents)
        raise InputError(found, where=name, expected="-2 to 2", remedy="check the masses, or leave them out")


# --- the mixed model ---------------------------------------------------------------------------------------------


def _observations(
    points: Sequence[TrialPoint], known: dict[int, tuple[float, np.ndarray]], centre: float, mean_mass: float | None
) -> _Observations:
    individuals: dict[str, list[TrialPoint]] = {}
    for point in points:
        individuals.setdefault(point.individual, []).append(point)
    rows = 2 * max(len(trials) for trials in individuals.values())
    shape = (len(individuals) + bool(known), rows)
    values, present, design = np.zeros(shape), np.zeros(shape), np.zeros((*shape, 6 if mean_mass else 4))
    errors = np.tile(np.eye(rows), (len(values), 1, 1))
    for i, trials in enumerate(individuals.values()):
        for j, point in enumerate(trials):
            both = np.array([point.ln_supply_capacity, point.ln_resting_rate])
            traits = np.flatnonzero(np.isfinite(both))
            at = 2 * j + traits
            values[i, at], present[i, at] = both[traits], 1.0
            own = np.asarray(point.covariance)[np.ix_(traits, traits)]
            if not np.isfinite(own).all():
                raise InputError("its uncertainty is not known", where=f"trial '{point.trial}'", remedy="leave it out")
            errors[i][np.ix_(at, at)] = own + _SMALLEST_ERROR**2 * np.eye(traits.size)
            design[i, at, traits] = 1.0
            design[i, at, 2 + traits] = _inverse_temperature(point.temperature) - centre
            if mean_mass:
                design[i, at, 4 + traits] = np.log(point.mass / mean_mass)
    which = list(known)
    for row, (k, (value, variances)) in enumerate(known.items()):
        values[-1, row], design[-1, row, 2 + k] = value, 1.0
        errors[-1, row, : len(which)] = variances[which] + _SMALLEST_ERROR**2 * np.eye(2)[k][which]
    return _Observations(values, errors, design, _components(present, len(individuals)))


def _components(present: np.ndarray, individuals: int) -> np.ndarray:
    """Mark where the elements (supply, both, rate) of the scatter between trials, then individuals, enter.

    With one individual, or one trial of each, the two kinds of scatter cannot be told apart: only one is kept.
    """
    trials = present.shape[1] // 2
    patterns = [np.eye(trials)]
    if individuals > 1 and trials > 1:
        patterns.append(np.ones((trials, trials)))
    shapes = np.array([np.kron(pattern, pair) for pattern in patterns for pair in _TRAIT_PAIRS])
    return shapes[:, None] * present[:, :, None] * present[:, None, :]


class _Weighted:
    """Generalised least squares at given scatter."""

    def __init__(self, observed: _Observations, scatter: np.ndarray) -> None:
        values, design = observed.values, observed.design
        variance = observed.errors + np.tensordot(scatter, observed.shapes, axes=1)
        self.weights = np.linalg.inv(variance)
        self.weighted = self.weights @ design
        precision = np.einsum("inp,inq->pq", design, self.weighted)
        self.covariance = np.linalg.inv(precision)
        self.coefficients = self.covariance @ np.einsum("inp,in->p", self.weighted, values)
        misfit = values - design @ self.coefficients
        self.pulled = np.einsum("inm,im->in", self.weights, misfit)
        determinants = np.linalg.slogdet(variance)[1].sum() + np.linalg.slogdet(precision)[1]
        self.deviance = determinants + float(np.sum(misfit * self.pulled))


def _scatter(observed: _Observations) -> np.ndarray:
    """Elements of the scatter covariances at the largest restricted likelihood, each covariance being a square L L'."""
    shapes = observed.shapes
    alike = _Weighted(observed, np.tile([1.0, 0.0, 1.0], len(shapes) // 3))
    misfit = observed.values - observed.design @ alike.coefficients
    unit = max(float(np.sqrt(np.mean(misfit**2))), _SMALLEST_ERROR)  # the search is over numbers near 1

    def elements(roots: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        a, b, c = unit * roots.reshape(-1, 3).T
        zero = np.zeros_like(a)
        jacobian = np.array([[2 * a, zero, zero], [b, a, zero], [zero, 2 * b, 2 * c]]) * unit
        return np.stack([a * a, a * b, b * b + c * c], axis=-1).ravel(), np.moveaxis(jacobian, -1, 0)

    def objective(roots: np.ndarray) -> tuple[float, np.ndarray]:
        scatter, jacobian = elements(roots)
        model = _Weighted(observed, scatter)
        traces = np.einsum("inm,kinm->k", model.weights, shapes)
        explained = np.einsum(
            "pq,inp,kinm,imq->k", model.covariance, model.weighted, shapes, model.weighted, optimize=True
        )
        squares = np.einsum("in,kinm,im->k", model.pulled, shapes, model.pulled, optimize=True)
        gradient = (traces - explained - squares).reshape(-1, 3)
        return model.deviance, np.einsum("ck,ckr->cr", gradient, jacobian).ravel()

    start = np.tile([0.7, 0.0, 0.7], len(shapes) // 3)
    return elements(minimize(objective, start, jac=True, method="L-BFGS-B", options=_CLOSE).x)[0]


def _freedom(model: _Weighted, shapes: np.ndarray) -> np.ndarray:
    """Degrees of freedom of the coefficients' variances, from the expected information about the scatter."""
    leaning = model.weights @ shapes
    first = np.einsum("inp,kinm,imq->kpq", model.weighted, shapes, model.weighted, optimize=True)
    second = np.einsum("inp,kinm,limr,irq->klpq", model.weighted, shapes, leaning, model.weighted, optimize=True)
    spread = model.covariance @ first
    information = 0.5 * (
        np.einsum("kinm,limn->kl", leaning, leaning, optimize=True)
        - 2.0 * np.einsum("pq,klqp->kl", model.covariance, second)
        + np.einsum("kpq,lqp->kl", spread, spread)
    )
    # Scatter that the trials cannot split leaves the information singular; the coefficients do not depend on the split.
    uncertain = np.linalg.pinv(information, rcond=1e-13, hermitian=True)
    change = np.einsum("kpr,rp->kp", spread, model.covariance)
    variances = np.einsum("kp,kl,lp->p", change, uncertain, change)
    own = 2.0 * np.diag(model.covariance) ** 2
    return np.clip(own / np.maximum(variances, own / MANY), 1.0, MANY)


# --- what the species file says of it ----------------------------------------------------------------------------


def _said(
    points: Sequence[TrialPoint], usable: Sequence[TrialPoint], scatter: np.ndarray, freedom: np.ndarray
) -> dict[str, Any]:
    scatters = {}
    for kind, (supply, _, rate) in zip(("between_trials", "between_individuals"), scatter.reshape(-1, 3), strict=False):
        scatters[kind] = {key: round(float(np.sqrt(v)), 4) for key, v in zip(PARAMETERS, (supply, rate), strict=False)}
    return {
        "temperature_response": {
            "method": "restricted maximum likelihood over individuals and trials, widened for small samples",
            "trials": len(points),
            "trials_without_supply_capacity": len(points) - len(usable),
            "individuals": len({point.individual for point in points}),
            "scatter_sd": scatters,
            "degrees_of_freedom": {key: round(float(v), 1) for key, v in zip(PARAMETERS, freedom, strict=False)},
        }
    }


def _scatter_notes(points: Sequence[TrialPoint], usable: Sequence[TrialPoint]) -> list[str]:
    individuals = {point.individual for point in points}
    if len(individuals) == 1:
        return ["one individual: how individuals differ is unknown, and the uncertainty is that of this one only"]
    notes = []
    if len(individuals) == len(points):
        notes.append("one trial of each individual: scatter between trials includes that between individuals")
    if len({point.individual for point in usable}) == 1:
        notes.append("supply capacities are of one individual only: how individuals differ in it is unknown")
    return notes
