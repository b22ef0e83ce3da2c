"""Write the invented respirometry trials of the Halvane Basin example.

Nothing in the file was measured. Six veil prawns, which do not exist, were "run" at three temperatures each in a
sealed chamber: each asks for its resting rate, with a burst of activity now and then, and gets at most what its supply
capacity allows. The probe of each trial is off by an amount that differs from trial to trial.

usage: python profiles/make_trials.py
"""

from pathlib import Path

import numpy as np

FOLDER = Path(__file__).parents[1] / "examples"
NAME = "veil_prawn_trials.csv"
BOLTZMANN = 8.617333262e-5  # eV/K
SUPPLY_CAPACITY, SUPPLY_ENERGY = 0.75, 0.22  # umol/g/h/kPa at 10 degC, eV
RESTING_RATE, RESTING_ENERGY = 1.20, 0.62  # umol/g/h at 10 degC, eV
TEMPERATURES = (6.0, 10.0, 14.0)
OBSERVATIONS = 60
HOURS_BETWEEN = 0.1


def trial(rng: np.random.Generator, supply: float, rest: float) -> tuple[np.ndarray, np.ndarray]:
    """Invent readings of PO2 [kPa] and rates [umol/g/h], in the order of time."""
    demand = np.full(OBSERVATIONS, rest)
    for start in rng.choice(OBSERVATIONS - 20, size=2, replace=False):
        since = np.arange(OBSERVATIONS) - start
        demand += np.where(since >= 0, rest * rng.uniform(0.5, 2.0) * np.exp(-np.maximum(since, 0) / 3), 0.0)
    po2 = np.geomspace(19.5, 0.3, OBSERVATIONS)
    rate = np.minimum(demand, supply * po2)
    rate = rate * rng.normal(1.0, 0.04, OBSERVATIONS) + rng.normal(0.0, 0.02 * rest, OBSERVATIONS)
    return po2 - rng.normal(0.0, 0.12) + rng.normal(0.0, 0.02, OBSERVATIONS), rate


def main(folder: Path = FOLDER) -> None:
    """Write the table into `folder`."""
    rng = np.random.default_rng(20010503)
    lines = [
        "# Invented data: the veil prawn does not exist, and nothing in this file was measured.",
        "trial,individual,time [h],po2 [kPa],rate [umol/g/h],temperature [degC],salinity,mass [g]",
    ]
    for number in range(1, 7):
        own_supply, own_rest = np.exp(rng.normal(0.0, [0.08, 0.12]))
        mass = rng.uniform(1.0, 1.5)
        for temperature in TEMPERATURES:
            x = (1 / 283.15 - 1 / (temperature + 273.15)) / BOLTZMANN
            supply = SUPPLY_CAPACITY * own_supply * np.exp(SUPPLY_ENERGY * x)
            rest = RESTING_RATE * own_rest * np.exp(RESTING_ENERGY * x)
            for i, (po2, rate) in enumerate(zip(*trial(rng, supply, rest), strict=True)):
                place = f"P{number}-{temperature:.0f},P{number},{i * HOURS_BETWEEN:.1f}"
                lines.append(f"{place},{po2:.3f},{rate:.4f},{temperature:.1f},34.6,{mass:.2f}")
    (folder / NAME).write_text("\n".join(lines) + "\n", encoding="utf-8")


if __name__ == "__main__":
    main()
