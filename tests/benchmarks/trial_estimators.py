"""How well the estimators do on invented trials: prints the table of a simulation study.

Run as ``python tests/benchmarks/trial_estimators.py [trials] [first_seed] [number_of_seeds] [family ...]``.
"""

import sys
import time
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from habitat.trials.classic import largest_provision, two_point_correction
from habitat.trials.estimate import BACKGROUND_SD, JointEstimate, joint_estimate

sys.path.insert(0, str(Path(__file__).parents[1] / "trials"))
from invented_trials import FAMILIES, Trial, informed_fit, simulate_trial

LEAST_LIMITED = 3
"""Fewer limited observations leave the informed analyst without a bound."""
COMMON_CORRECTION = 0.01
"""Largest correction in common practice, of the highest PO2."""
STATED_BACKGROUND_SD = 0.03
"""Spread of the background in its family, which an analyst with blanks would know."""


def limited_trials(family: str, count: int, seed: int) -> Iterator[Trial]:
    """Invent `count` trials in which at least `LEAST_LIMITED` observations were limited."""
    rng = np.random.default_rng(seed)
    while count:
        trial = simulate_trial(family, rng)
        if trial.limited.sum() >= LEAST_LIMITED:
            count -= 1
            yield trial


def judge(trial: Trial, estimate: JointEstimate) -> dict[str, float]:
    """Errors of every estimator on one trial, and whether the intervals hold the truth."""
    truth = np.log(trial.supply_capacity)
    bound, bound_offset, _ = informed_fit(trial)
    largest = largest_provision(trial.po2, trial.rate)
    row = {"bound": bound - truth, "bound offset": bound_offset - trial.offset}
    row["largest"] = np.log(largest) - truth
    row["three largest"] = np.log(largest_provision(trial.po2, trial.rate, count=3)) - truth
    for name, plausible in (("two-point 1 %", COMMON_CORRECTION), ("two-point 2 %", 2 * COMMON_CORRECTION)):
        kink = two_point_correction(trial.po2, trial.rate, plausible=plausible)
        row[name] = np.log(kink.provision if kink else largest) - truth
    row["never-limited"] = float("never-limited" in estimate.flags)
    if row["never-limited"]:
        return row
    row["joint"] = np.log(estimate.supply_capacity.value) - truth
    row["joint offset"] = estimate.sensor_offset.value - trial.offset
    for name, quantity, true in (
        ("alpha", estimate.supply_capacity, trial.supply_capacity),
        ("offset", estimate.sensor_offset, trial.offset),
        ("Pcrit", estimate.critical_po2, trial.critical_po2),
        ("rest", estimate.resting_rate, trial.resting_rate),
    ):
        row["covers " + name] = float(quantity.p025 <= true <= quantity.p975)
    row["Pcrit"] = np.log(estimate.critical_po2.value / trial.critical_po2)
    return row


def study_family(family: str, count: int, seeds: range, background_sd: float) -> dict[str, float]:
    """Root-mean-square errors, coverage and seconds per trial of one family over several seeds."""
    rows, seconds = [], 0.0
    for seed in seeds:
        for trial in limited_trials(family, count, seed):
            start = time.perf_counter()
            estimate = joint_estimate(trial.po2, trial.rate, background_sd=background_sd)
            seconds += time.perf_counter() - start
            rows.append(judge(trial, estimate))
    found = {}
    for name in rows[0] | rows[-1]:
        values = np.array([row[name] for row in rows if name in row])
        share = name.startswith("covers") or name == "never-limited"
        found[name] = values.mean() if share else np.sqrt((values**2).mean())
    return found | {"seconds": seconds / len(rows), "trials": len(rows)}


def recognised_share(family: str, count: int, seeds: range) -> float:
    """Share of never-limited trials of a family that are recognised as such."""
    found = []
    for seed in seeds:
        rng = np.random.default_rng(seed)
        for _ in range(count):
            trial = simulate_trial(family, rng, reaches_limit=False)
            found.append("never-limited" in joint_estimate(trial.po2, trial.rate).flags)
    return float(np.mean(found))


def main() -> None:
    """Print one line a family."""
    count, first, seed_count = (int(x) for x in (*sys.argv[1:4], *("200", "1000", "3")[len(sys.argv[1:4]) :]))
    seeds, families = range(first, first + seed_count), sys.argv[4:] or FAMILIES
    print(
        "family                      | bound  joint  ratio | offset: bound joint ratio | covers alpha offset Pcrit rest"
        " | rms Pcrit | largest/joint three 2-pt(1%) 2-pt(2%) | false alarms  recognised | s/trial trials"
    )
    for family in families:
        settings = [("", BACKGROUND_SD)]
        if family == "background drift":
            settings.append((", stated", STATED_BACKGROUND_SD))
        for suffix, background_sd in settings:
            f = study_family(family, count, seeds, background_sd)
            print(
                f"{family + suffix:27s} | {f['bound']:.4f} {f['joint']:.4f} {f['joint'] / f['bound']:.2f}  | "
                f"       {f['bound offset']:.4f} {f['joint offset']:.4f} {f['joint offset'] / f['bound offset']:.2f} | "
                f"    {f['covers alpha']:.3f} {f['covers offset']:.3f}  {f['covers Pcrit']:.3f} {f['covers rest']:.3f}"
                f" | {f['Pcrit']:.4f}    | {f['largest'] / f['joint']:12.1f} {f['three largest'] / f['joint']:5.1f} "
                f"{f['two-point 1 %'] / f['joint']:8.1f} {f['two-point 2 %'] / f['joint']:8.1f} | "
                f"{f['never-limited']:.3f}         {recognised_share(family, count // 2, seeds):.3f}      | "
                f"{f['seconds']:.3f}   {f['trials']}",
                flush=True,
            )


if __name__ == "__main__":
    main()
