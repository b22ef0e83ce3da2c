"""Coverage from readings to species in one go, with every estimate made.

usage: python tests/benchmarks/readings_to_species.py [species first_seed]

Ten invented individuals are run at three temperatures each. Each has its own supply capacity and resting rate (standard
deviations 0.15 and 0.20 of the logarithms, correlation 0.4); each trial is one of the families "constant" and
"wandering", brought to the animal's values. Prints the share of 95 % intervals of the species file that hold the truth.
"""

import sys
from pathlib import Path

import numpy as np

from habitat.species import BOLTZMANN, Species
from habitat.trials.analysis import analyse, species_points
from habitat.trials.response import fit_species
from habitat.trials.trial import Trial

sys.path.insert(0, str(Path(__file__).parents[1] / "trials"))
from invented_trials import simulate_trial

INDIVIDUALS, TEMPERATURES = 10, (6.0, 10.0, 14.0)
SUPPLY_ENERGY, RESTING_ENERGY = 0.30, 0.62  # eV
SCATTER = np.array([[0.15**2, 0.4 * 0.15 * 0.20], [0.4 * 0.15 * 0.20, 0.20**2]])
TRUTH = np.array([np.log(1.10), np.log(2.40), SUPPLY_ENERGY, RESTING_ENERGY])


def invented_species(rng: np.random.Generator) -> list[Trial]:
    """All trials of one species; a simulated trial is brought to the animal's values by the units of PO2 and rate."""
    trials = []
    for individual in range(INDIVIDUALS):
        own = TRUTH[:2] + rng.multivariate_normal([0, 0], SCATTER)
        for number, temperature in enumerate(TEMPERATURES):
            x = (1 / 283.15 - 1 / (temperature + 273.15)) / BOLTZMANN
            supply, rest = np.exp(own + x * TRUTH[2:])
            # A trial with this Pcrit is drawn from the family, so that readings and their errors stay in kPa.
            simulated = simulate_trial("constant" if individual % 2 else "wandering", rng)
            while abs(np.log(simulated.critical_po2 * supply / rest)) > 0.05:
                simulated = simulate_trial("constant" if individual % 2 else "wandering", rng)
            rate = simulated.rate * supply / simulated.supply_capacity
            scale = rest / supply / simulated.critical_po2
            name = f"{individual}-{number}"
            trials.append(Trial(name, str(individual), temperature, simulated.po2 * scale, rate * scale))
    return trials


def covered(species: Species) -> np.ndarray:
    """Whether each 95 % interval holds the truth: four parameters, then Pcrit at the temperatures."""
    found = np.array(
        [
            *(np.log(species.supply_capacity.value), np.log(species.resting_rate.value)),
            *(species.supply_capacity.activation_energy, species.resting_rate.activation_energy),
        ]
    )
    inside = np.abs(found - TRUTH) < 1.96 * np.sqrt(np.diag(species.covariance))
    x = species.inverse_temperature(np.array(TEMPERATURES))
    error = np.log(species.pcrit(np.array(TEMPERATURES))) - (TRUTH[1] - TRUTH[0] + (TRUTH[3] - TRUTH[2]) * x)
    return np.concatenate([inside, np.abs(error) < 1.96 * species.log_pcrit_sd(np.array(TEMPERATURES))])


def main() -> None:
    """Run and print."""
    count, seed = (int(text) for text in sys.argv[1:3]) if len(sys.argv) == 3 else (100, 1)
    rng = np.random.default_rng(seed)
    results = []
    for _ in range(count):
        points = species_points(analyse(invented_species(rng)))
        results.append(covered(fit_species(points, name="invented", reference_temperature=10.0)))
    names = ["ln alpha", "ln rate", "E alpha", "E rate", *(f"Pcrit({t:g} degC)" for t in TEMPERATURES)]
    for name, share in zip(names, np.mean(results, axis=0), strict=True):
        print(f"{name:16s} {100 * share:5.1f} %")


if __name__ == "__main__":
    main()
