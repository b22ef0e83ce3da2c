"""From trials to one row a trial and a species: which estimator is used where, and what is left out."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial

import numpy as np
import pandas as pd

from habitat.errors import InputError
from habitat.trials import classic
from habitat.trials.estimate import BACKGROUND_SD, JointEstimate, WithInterval, joint_estimate
from habitat.trials.response import TrialPoint
from habitat.trials.trial import Trial

JOINT = "joint"

SUPPLY_ESTIMATORS = (JOINT, "largest", "three-largest", "two-point")
"""Ways to the supply capacity; all but the joint one are published or known, and give no interval."""

PUBLISHED_RESTS: Mapping[str, Callable[[np.ndarray], float]] = {
    "rule": lambda rates: classic.resting_rate(rates)[0],
    "lowest-normal": lambda rates: classic.lowest_normal(rates).mean,
    "lowest-ten": classic.lowest_ten,
    "lowest-ten-per-cent": classic.lowest_ten_per_cent,
    **{f"quantile-{q:g}": partial(classic.resting_quantile, quantile=q) for q in (0.1, 0.15, 0.2, 0.25, 0.3)},
}
"""Estimators of the resting rate of Chabot et al. 2016, J. Fish Biol. 88:81."""

RESTING_ESTIMATORS = (JOINT, *PUBLISHED_RESTS)
"""Ways to the resting rate."""

SAME_TEMPERATURE = 1.0
"""Trials of one individual this close in temperature share their observations of the resting rate [degC]."""

ENOUGH_HOURS, ENOUGH_POINTS = 24.0, 50
"""Less is too little for a published estimator of the resting rate (Chabot et al. 2016: 24 h or more)."""

TABLE_COLUMNS = (
    "trial", "individual", "temperature_degC", "n", "sensor_offset_kpa", "sensor_offset_p025", "sensor_offset_p975",
    "supply_capacity", "supply_capacity_p025", "supply_capacity_p975", "resting_rate", "critical_po2_kpa",
    "critical_po2_p025", "critical_po2_p975", "flags",
)  # fmt: skip


@dataclass(frozen=True)
class Analysis:
    """What a trial gave, by the estimators asked for.

    Attributes
    ----------
    trial : Trial
    joint : JointEstimate
        Always made: it judges the trial, whatever estimator gives the numbers.
    sensor_offset : WithInterval
        [kPa]; without interval for the two-point correction, 0 where readings are taken as they are.
    supply_capacity, critical_po2 : WithInterval
        [umol/g/h/kPa], [kPa]
    resting_rate : float
        [umol/g/h]
    notes : tuple of str
        Warnings in words.
    """

    trial: Trial
    joint: JointEstimate
    sensor_offset: WithInterval
    supply_capacity: WithInterval
    resting_rate: float
    critical_po2: WithInterval
    notes: tuple[str, ...] = ()

    @property
    def never_limited(self) -> bool:
        """Whether oxygen never limited the animal, so that its supply capacity is only known to be larger."""
        return "never-limited" in self.joint.flags


def analyse(
    trials: Sequence[Trial], *, supply: str = JOINT, resting: str = JOINT, background_sd: float = BACKGROUND_SD
) -> list[Analysis]:
    """Estimate sensor offset, supply capacity, resting rate and Pcrit of every trial.

    Parameters
    ----------
    trials : sequence of Trial
    supply : str
        One of `SUPPLY_ESTIMATORS`.
    resting : str
        One of `RESTING_ESTIMATORS`.
    background_sd : float
        See `habitat.trials.estimate.joint_estimate`.

    Raises
    ------
    InputError
        A trial has too few observations or none that can be used, or an estimator is not known.
    """
    for given, known, option in (
        (supply, SUPPLY_ESTIMATORS, "--supply"),
        (resting, RESTING_ESTIMATORS, "--resting-rate"),
    ):
        if given not in known:
            raise InputError(f"estimator '{given}'", where=option, expected=f"one of {', '.join(known)}")
    joint = [_joint(trial, background_sd) for trial in trials]
    rests = [_resting(i, trials, joint, resting) for i in range(len(trials))]
    return [_analysis(trial, own, supply, *rest) for trial, own, rest in zip(trials, joint, rests, strict=True)]


def trial_table(analyses: Sequence[Analysis]) -> pd.DataFrame:
    """Lay the analyses out with one row a trial, in the columns `TABLE_COLUMNS`."""
    rows = []
    for analysis in analyses:
        trial, offset = analysis.trial, analysis.sensor_offset
        supply, critical = analysis.supply_capacity, analysis.critical_po2
        start = (trial.name, trial.individual, trial.temperature, trial.po2.size)
        values = [
            *(offset.value, offset.p025, offset.p975, supply.value, supply.p025, supply.p975, analysis.resting_rate),
            *(critical.value, critical.p025, critical.p975),
        ]
        known = [value if np.isfinite(value) else np.nan for value in values]
        rows.append((*start, *known, ";".join(analysis.joint.flags)))
    return pd.DataFrame(rows, columns=list(TABLE_COLUMNS))


def species_points(analyses: Sequence[Analysis]) -> list[TrialPoint]:
    """Take from each analysis what the fit over individuals and temperatures needs.

    The supply capacity of a never-limited trial is only known to be larger than it showed, so that it is left out.
    """
    return [
        TrialPoint(
            trial=analysis.trial.name,
            individual=analysis.trial.individual,
            temperature=analysis.trial.temperature,
            mass=analysis.trial.mass,
            ln_supply_capacity=np.nan if analysis.never_limited else float(np.log(analysis.supply_capacity.value)),
            ln_resting_rate=float(np.log(analysis.resting_rate)),
            covariance=analysis.joint.covariance[np.ix_([0, 2], [0, 2])],
        )
        for analysis in analyses
    ]


def provenance(analyses: Sequence[Analysis], *, supply: str, resting: str) -> dict[str, object]:
    """Say in a species file which trials were used how."""
    excluded: dict[str, int] = {}
    for analysis in analyses:
        for reason, count in analysis.trial.excluded.items():
            excluded[reason] = excluded.get(reason, 0) + count
    never = [analysis.trial.name for analysis in analyses if analysis.never_limited]
    offsets = {a.trial.name: round(a.sensor_offset.value, 4) for a in analyses if np.isfinite(a.sensor_offset.value)}
    said: dict[str, object] = {
        "supply_estimator": supply,
        "resting_estimator": resting,
        "trials": [analysis.trial.name for analysis in analyses],
        "trials_used_for_the_rate_only": dict.fromkeys(never, "never-limited"),
        "sensor_offsets_kpa": offsets,
        "observations_left_out": excluded,
    }
    notes = [f"{analysis.trial.name}: {note}" for analysis in analyses for note in analysis.notes]
    return said | ({"notes": notes} if notes else {})


def _joint(trial: Trial, background_sd: float) -> JointEstimate:
    try:
        return joint_estimate(trial.po2, trial.rate, background_sd=background_sd)
    except InputError as error:
        where = f"trial '{trial.name}'"
        raise InputError(error.found, where=where, expected=error.expected, remedy=error.remedy) from None


def _resting(
    number: int, trials: Sequence[Trial], joint: Sequence[JointEstimate], estimator: str
) -> tuple[float, tuple[str, ...]]:
    """Resting rate of one trial's individual at that temperature, and warnings about it."""
    if estimator == JOINT:
        return joint[number].resting_rate.value, ()
    own = trials[number]
    free, hours = [], 0.0
    for trial, estimate in zip(trials, joint, strict=True):
        if trial.individual == own.individual and abs(trial.temperature - own.temperature) <= SAME_TEMPERATURE:
            offset, critical = estimate.sensor_offset.value, estimate.critical_po2.value
            above = trial.po2 + offset > critical if np.isfinite(offset + critical) else np.ones(trial.po2.size, bool)
            free.append(trial.rate[above])
            hours += float(np.ptp(trial.time)) if trial.time is not None else 0.0
    rates = np.concatenate(free)
    if not rates.size:
        raise InputError("no observation above Pcrit", where=f"trial '{own.name}'", remedy="use --resting-rate joint")
    few = f"the resting rate rests on {rates.size} observations over {hours:.1f} h"
    little = hours < ENOUGH_HOURS or rates.size < ENOUGH_POINTS
    return PUBLISHED_RESTS[estimator](rates), (f"{few}; 24 h or more are recommended",) if little else ()


def _analysis(trial: Trial, joint: JointEstimate, supply: str, rest: float, notes: tuple[str, ...]) -> Analysis:
    if not rest > 0:
        found = f"the resting rate came out as {rest:.3g} umol/g/h"
        raise InputError(
            found, where=f"trial '{trial.name}'", expected="a positive rate", remedy="check the background"
        )
    if supply == JOINT:
        offset, capacity = joint.sensor_offset, joint.supply_capacity
        own_rest = rest == joint.resting_rate.value
        critical = joint.critical_po2 if own_rest else _alone(rest / capacity.value)
        return Analysis(trial, joint, offset, capacity, rest, critical, notes)
    value, shift = _published_supply(trial, supply)
    return Analysis(trial, joint, _alone(shift), _alone(value), rest, _alone(rest / value), notes)


def _published_supply(trial: Trial, estimator: str) -> tuple[float, float]:
    """Supply capacity and sensor offset by a published or known estimator."""
    if estimator == "two-point":
        kink = classic.two_point_correction(trial.po2, trial.rate)
        if kink is None:
            return classic.largest_provision(trial.po2, trial.rate), 0.0
        return kink.provision, kink.offset
    count = {"largest": 1, "three-largest": 3}[estimator]
    return classic.largest_provision(trial.po2, trial.rate, count=count), 0.0


def _alone(value: float) -> WithInterval:
    return WithInterval(value, np.nan, np.nan)


def reasons(analyses: Sequence[Analysis]) -> Mapping[str, int]:
    """Count the flags raised over all trials."""
    flags = [flag for analysis in analyses for flag in analysis.joint.flags]
    return {flag: flags.count(flag) for flag in dict.fromkeys(flags)}
