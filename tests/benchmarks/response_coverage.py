"""Coverage of the 95 % intervals of a species fitted to invented trials whose truth is known.

usage: python tests/benchmarks/response_coverage.py [--species 300] [--seeds 1 2 3]

Each design draws individuals (sd 0.15 of ln alpha and 0.20 of ln rate, correlation 0.4), their trials (sd 0.05 and
0.08), and an error of known covariance for each trial (sd between 0.05 and 0.10, correlation 0.3); the truth is
alpha 1.1, rate 2.4 at 10 degC, energies 0.30 and 0.62 eV, exponents -0.2 and -0.25 where masses are drawn. Prints bias,
root-mean-square error, coverage and median width of the intervals made from the covariance of the species file. With a
single temperature the energies come from the published distribution, and their columns only show that.
"""

import argparse
import time
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from habitat.species import Response, Species
from habitat.trials.response import TrialPoint, fit_species

TRUTH = Species("truth", 10.0, Response(1.1, 0.30, -0.2), Response(2.4, 0.62, -0.25), body_mass=2.0)
INDIVIDUAL = np.array([[0.15**2, 0.4 * 0.15 * 0.20], [0.4 * 0.15 * 0.20, 0.20**2]])
TRIAL = np.array([[0.05**2, 0.0], [0.0, 0.08**2]])
NORMAL_975 = 1.959964


@dataclass(frozen=True)
class Design:
    """How trials are spread over individuals and temperatures."""

    plan: Callable[[np.random.Generator], list[tuple[int, float]]]
    missing: float = 0.0  # share of trials without a supply capacity
    masses: tuple[float, float] | None = None  # lowest and highest [g]
    individual: float = 1.0  # factor on the scatter between individuals
    trial: float = 1.0  # factor on the scatter between trials


def crossed(individuals: int, temperatures: tuple[float, ...]) -> Callable[[np.random.Generator], list]:
    """Every individual at every temperature."""
    return lambda _: [(i, t) for i in range(individuals) for t in temperatures]


def nested(individuals: int, temperatures: tuple[float, ...]) -> Callable[[np.random.Generator], list]:
    """Every individual at one temperature only."""
    return lambda _: [(i, temperatures[i % len(temperatures)]) for i in range(individuals)]


def unbalanced(rng: np.random.Generator) -> list[tuple[int, float]]:
    """8 individuals, each at 1 to 4 of four temperatures."""
    return [
        (i, float(t)) for i in range(8) for t in rng.choice([4.0, 8.0, 12.0, 16.0], rng.integers(1, 5), replace=False)
    ]


THREE = (5.0, 10.0, 15.0)
DESIGNS = {
    "10 individuals x 3 temperatures": Design(crossed(10, THREE)),
    "the same, little scatter": Design(crossed(10, THREE), individual=0.2, trial=0.2),
    "the same, no scatter at all": Design(crossed(10, THREE), individual=0.0, trial=0.0),
    "the same, 30 % without alpha": Design(crossed(10, THREE), missing=0.3),
    "the same, masses 1-4 g": Design(crossed(10, THREE), masses=(1.0, 4.0)),
    "5 x 2": Design(crossed(5, (6.0, 14.0))),
    "4 x 3": Design(crossed(4, THREE)),
    "3 x 3": Design(crossed(3, THREE)),
    "2 x 2": Design(crossed(2, (6.0, 14.0))),
    "20 x 1": Design(crossed(20, (10.0,))),
    "3 x 1": Design(crossed(3, (10.0,))),
    "12, each at one of 3": Design(nested(12, THREE)),
    "8, each at 1 to 4 of 4": Design(unbalanced),
}


def invented(design: Design, rng: np.random.Generator) -> list[TrialPoint]:
    """Draw the trials of one species."""
    plan = design.plan(rng)
    count = 1 + max(individual for individual, _ in plan)
    own = design.individual * rng.multivariate_normal(np.zeros(2), INDIVIDUAL, count)
    masses = np.exp(rng.uniform(*np.log(design.masses), count)) if design.masses else np.full(count, 2.0)
    points = []
    for number, (individual, temperature) in enumerate(plan):
        animal = TRUTH.at_mass(masses[individual])
        x = animal.inverse_temperature(temperature)
        traits = (animal.supply_capacity, animal.resting_rate)
        mean = np.array([np.log(trait.value) + trait.activation_energy * x for trait in traits])
        deviations = rng.uniform(0.05, 0.10, 2)
        known = np.outer(deviations, deviations) * np.array([[1.0, 0.3], [0.3, 1.0]])
        drawn = own[individual] + design.trial * rng.multivariate_normal(np.zeros(2), TRIAL)
        alpha, rate = mean + drawn + rng.multivariate_normal(np.zeros(2), known)
        alpha = np.nan if rng.random() < design.missing else alpha
        points.append(TrialPoint(f"t{number}", f"i{individual}", temperature, masses[individual], alpha, rate, known))
    return points


def judged(species: Species, temperatures: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Errors and standard deviations of ln alpha, ln rate, both energies, and ln Pcrit at the temperatures."""
    truth = TRUTH.at_mass(species.body_mass)
    pairs = ((species.supply_capacity, truth.supply_capacity), (species.resting_rate, truth.resting_rate))
    x = truth.inverse_temperature(species.reference_temperature)
    levels = [np.log(a.value / b.value) - b.activation_energy * x for a, b in pairs]
    energies = [a.activation_energy - b.activation_energy for a, b in pairs]
    critical = np.log(species.pcrit(temperatures) / truth.pcrit(temperatures))
    deviations = np.sqrt(np.diag(species.covariance))
    return np.array([*levels, *energies, *critical]), np.array([*deviations, *species.log_pcrit_sd(temperatures)])


def study(design: Design, species: int, seeds: list[int]) -> tuple[np.ndarray, np.ndarray]:
    """Errors and standard deviations, one row a species."""
    results = []
    for seed in seeds:
        rng = np.random.default_rng(seed)
        for _ in range(species):
            points = invented(design, rng)
            measured = [point.temperature for point in points]
            temperatures = np.linspace(min(measured), max(measured), 5)
            results.append(judged(fit_species(points, name="x"), temperatures))
    errors, deviations = np.array(results).transpose(1, 0, 2)
    return errors, deviations


def main() -> None:
    """Print one table a design."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--species", type=int, default=300)
    parser.add_argument("--seeds", type=int, nargs="+", default=[1, 2, 3])
    parser.add_argument("--only", default="", help="designs whose name contains this")
    options = parser.parse_args()
    labels = ["ln alpha", "ln rate", "E alpha", "E rate", *(f"ln Pcrit {k}" for k in range(1, 6))]
    print(f"{'design':34s}{'':10s}" + "".join(f"{label:>12s}" for label in labels))
    for name, design in DESIGNS.items():
        if options.only not in name:
            continue
        begun = time.perf_counter()
        errors, deviations = study(design, options.species, options.seeds)
        spent = (time.perf_counter() - begun) / len(errors)
        rows = {
            "bias": errors.mean(axis=0),
            "rmse": np.sqrt((errors**2).mean(axis=0)),
            "coverage": 100 * (np.abs(errors) <= NORMAL_975 * deviations).mean(axis=0),
            "width": 2 * NORMAL_975 * np.median(deviations, axis=0),
        }
        for kind, numbers in rows.items():
            digits = ".1f" if kind == "coverage" else ".4f"
            print(f"{name:34s}{kind:10s}" + "".join(f"{number:12{digits}}" for number in numbers))
        print(f"{'':34s}{1000 * spent:.0f} ms a species", flush=True)


if __name__ == "__main__":
    main()
