"""Pictures of respirometry trials: one trial, the temperature response of a species, the offsets of all trials."""

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from matplotlib import colormaps, rc_context
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import LogLocator, MaxNLocator, NullFormatter
from scipy.special import ndtri

from habitat.figures.frame import HALO, LINE_STYLES, ONE_COLUMN, SMALL, STYLE, finish, shortened
from habitat.species import PARAMETERS, RATE_UNIT, SUPPLY_UNIT, Species
from habitat.trials.estimate import JointEstimate, WithInterval
from habitat.trials.trial import Trial

NEAR_LIMIT = 2.5
"""Up to so many times Pcrit the readings have a panel of their own, in which the limited phase is readable."""

PROVISION_ROOM, ENVELOPE_ROOM = 1.6, 5.0
"""Provision is drawn up to so many times the supply capacity; above, raw readings explode."""

ROW, MOST_ROWS = 0.115, 60
"""Height of a trial in the picture of all trials [inch]; beyond so many trials the rows become narrower."""

RATE_LABEL, SUPPLY_LABEL = (unit.replace("umol", "µmol") for unit in (RATE_UNIT, SUPPLY_UNIT))

AS_READ = {"linestyle": "none", "marker": "o", "markerfacecolor": "none", "color": "0.5", "markeredgewidth": 0.6}
CORRECTED = {"linestyle": "none", "markeredgecolor": "0.2", "markeredgewidth": 0.3}
CHANCES = (  # of being limited: from, below, style, words
    (0.95, np.inf, CORRECTED | {"marker": "^", "color": colormaps["viridis"](0.1)}, "at least 95 %"),
    (0.05, 0.95, CORRECTED | {"marker": "D", "color": colormaps["viridis"](0.55)}, "5–95 %"),
    (-np.inf, 0.05, CORRECTED | {"marker": "o", "color": colormaps["viridis"](0.9)}, "below 5 %"),
)
CUT_OFF = {"linestyle": "none", "marker": "x", "markersize": 4, "color": "0.3", "markeredgewidth": 0.8}
LIMIT, BOUND = ({"color": "black", "linestyle": style, "linewidth": 1.0} for style in ("-", (0, (1, 1))))
REST, CRITICAL, OFFSET = (
    {"color": "black", "linestyle": style, "linewidth": 0.8} for style in ("--", "-.", LINE_STYLES[4])
)
BAND = {"color": "0.45", "alpha": 0.25, "linewidth": 0}
ZERO = {"color": "0.4", "linestyle": ":", "linewidth": 0.7}
KINK = {"linestyle": "none", "marker": "s", "markerfacecolor": "white", "color": "black", "markeredgewidth": 0.7}
BAR = {"color": "0.35", "linewidth": 0.7}
SAME = {"color": "0.6", "linewidth": 0.4}
KNOWN = {"linestyle": "none", "marker": "o", "markersize": 2.5, "color": "black"}
ONLY_BOUND = KNOWN | {"markerfacecolor": "white", "markeredgewidth": 0.7}


# --- one trial ---------------------------------------------------------------------------------------------------


@rc_context(STYLE)
def trial_picture(
    trial: Trial,
    result: JointEstimate,
    envelope: tuple[np.ndarray, np.ndarray],
    kinks: Sequence[tuple[float, float]],
    *,
    title: str,
) -> Figure:
    """Draw one trial: rate and provision against PO2, as read and corrected, and the envelope of provision.

    Readings above a few times Pcrit have narrower panels of their own. A trial that oxygen never limited is drawn as
    read, with the lower bound of its supply capacity.

    Parameters
    ----------
    trial : Trial
    result : JointEstimate
        Its estimates; values may be nan and ends of intervals nan or infinite where nothing is known.
    envelope : tuple of numpy.ndarray
        Candidate corrections [kPa] and the largest provision rate/(PO2 + correction) of the trial at each
        [umol/g/h/kPa].
    kinks : sequence of tuple of float
        Correction [kPa] and provision [umol/g/h/kPa] where the leading observation changes.
    title : str
        Says which trial this is.
    """
    corrected = trial.po2 + result.sensor_offset.value
    limits = _pressure_limits(trial.po2, corrected, result.critical_po2)
    parts = range(len(limits))
    rows = ([f"rate {i}" for i in parts], [f"provision {i}" for i in parts], ["envelope" for _ in parts])
    figure = Figure(figsize=(ONE_COLUMN, 4.9), layout="constrained")
    figure.get_layout_engine().set(wspace=0.0, w_pad=0.02)
    panels = figure.subplot_mosaic(list(rows), width_ratios=(2, 1)[: len(limits)], height_ratios=(1.25, 1, 1))
    for i in parts:
        _draw_rates(panels[f"rate {i}"], trial, corrected, result)
        cut = _draw_provision(panels[f"provision {i}"], trial, corrected, result)
        for axes in (panels[f"rate {i}"], panels[f"provision {i}"]):
            axes.set_xlim(limits[i])
            axes.xaxis.set_major_locator(MaxNLocator(4 if i else 6, prune="lower" if i else None))
            axes.tick_params(labelleft=i == 0)
        panels[f"rate {i}"].tick_params(labelbottom=False)
        panels[f"provision {i}"].set_xlabel("PO₂, coarser [kPa]" if i else "PO₂ [kPa]")
    panels["rate 0"].set_ylabel(f"metabolic rate\n[{RATE_LABEL}]")
    panels["provision 0"].set_ylabel(f"oxygen provision\n[{SUPPLY_LABEL}]")
    _draw_envelope(panels["envelope"], envelope, kinks, result)
    figure.align_ylabels([panels[name] for name in ("rate 0", "provision 0", "envelope")])
    finish(figure, title, _trial_handles(result, cut, kinks))
    return figure


def _pressure_limits(po2: np.ndarray, corrected: np.ndarray, critical: WithInterval) -> list[tuple[float, float]]:
    """Limits of one PO2 axis, or of two where the limited phase is a small part of the trial [kPa]."""
    seen = np.concatenate([po2, corrected[np.isfinite(corrected)]])
    highest = 1.03 * seen.max()
    lowest = min(0.0, seen.min()) - 0.01 * highest
    near = np.ceil(NEAR_LIMIT * critical.value)
    return [(lowest, near), (near, highest)] if highest > 1.5 * near else [(lowest, highest)]


def _draw_rates(axes: Axes, trial: Trial, corrected: np.ndarray, result: JointEstimate) -> None:
    """Draw the rates, the limit that supply sets to them, the resting rate and Pcrit."""
    capacity, along = result.supply_capacity, np.array([0.0, 2.0 * max(1.0, trial.po2.max())])
    known = np.isfinite(capacity.value)
    axes.fill_between(along, *np.outer(_interval(capacity), along), **BAND)
    axes.plot(along, (capacity.value if known else capacity.p025) * along, **LIMIT if known else BOUND)
    _mark(axes.axhline, axes.axhspan, result.resting_rate, REST)
    _mark(axes.axvline, axes.axvspan, result.critical_po2, CRITICAL, bound=result.critical_po2.p975)
    _draw_observations(axes, (trial.po2, trial.rate), (corrected, trial.rate), result.limited)
    axes.set_ylim(min(0.0, 1.1 * trial.rate.min()), 1.08 * trial.rate.max())


def _draw_provision(axes: Axes, trial: Trial, corrected: np.ndarray, result: JointEstimate) -> list[Line2D]:
    """Draw rate/PO2 before and after correction; return a legend handle that counts what is cut off."""
    readings = {"as read": trial.po2, "corrected": corrected}
    provision = {name: _provision(po2, trial.rate) for name, po2 in readings.items()}
    capacity = result.supply_capacity
    top = PROVISION_ROOM * np.nanmax([capacity.value, capacity.p025, *_interval(capacity)])
    _mark(axes.axhline, axes.axhspan, capacity, LIMIT, bound=capacity.p025)
    _draw_observations(axes, *((readings[name], provision[name]) for name in readings), result.limited)
    above, none = [], []
    for name, po2 in readings.items():
        beyond = provision[name] > top
        axes.plot(po2[beyond], np.full(beyond.sum(), 0.96 * top), **CUT_OFF)
        above += [f"{beyond.sum()} {name} (up to {provision[name][beyond].max():.3g})"] if beyond.any() else []
        none += [f"{(po2 <= 0).sum()} {name}"] if (po2 <= 0).any() else []
    axes.set_ylim(min(0.0, *(np.nanmin(values, initial=0.0) for values in provision.values())), top)
    said = [f"provision above the axis: {', '.join(above)}"] if above else []
    said += [f"no provision at PO₂ ≤ 0: {', '.join(none)}"] if none else []
    return [Line2D([], [], label="; ".join(said), **CUT_OFF)] if said else []


def _provision(po2: np.ndarray, rate: np.ndarray) -> np.ndarray:
    """Rate over PO2; nan where a reading is not positive, because such a quotient means nothing."""
    return np.divide(rate, po2, out=np.full(rate.shape, np.nan), where=po2 > 0)


def _draw_observations(
    axes: Axes, as_read: tuple[np.ndarray, np.ndarray], corrected: tuple[np.ndarray, np.ndarray], limited: np.ndarray
) -> None:
    axes.plot(*as_read, **AS_READ)
    for low, high, style, _ in CHANCES:
        own = (limited >= low) & (limited < high)
        axes.plot(corrected[0][own], corrected[1][own], **style)


def _draw_envelope(
    axes: Axes, envelope: tuple[np.ndarray, np.ndarray], kinks: Sequence[tuple[float, float]], result: JointEstimate
) -> None:
    """Draw the largest provision against the candidate correction, its kinks and the joint estimate."""
    (candidates, provision), capacity, offset = envelope, result.supply_capacity, result.sensor_offset
    level = capacity.value if np.isfinite(capacity.value) else capacity.p025
    axes.axvline(0.0, **ZERO)
    _mark(axes.axhline, axes.axhspan, capacity, LIMIT, bound=capacity.p025)
    _mark(axes.axvline, axes.axvspan, offset, OFFSET)
    axes.plot(candidates, provision, color="black", linewidth=1.6, path_effects=HALO)
    axes.plot(*np.array(kinks).reshape(-1, 2).T, **KINK)
    highest = 1.2 * max(provision.max(), level)
    if highest > ENVELOPE_ROOM * level:
        highest = ENVELOPE_ROOM * level
        said = f"cut: provision up to {provision.max():.3g}"
        axes.text(0.98, 0.95, said, ha="right", va="top", size=SMALL, transform=axes.transAxes, path_effects=HALO)
    ends = [*candidates, *(end for end in (offset.value, offset.p025, offset.p975) if np.isfinite(end))]
    axes.set(xlim=(min(ends), max(ends)), ylim=(0.8 * min(provision.min(), level), highest), yscale="log")
    axes.yaxis.set_major_locator(LogLocator(subs=(1, 2, 5)))
    axes.yaxis.set_major_formatter("{x:g}")
    axes.yaxis.set_minor_formatter(NullFormatter())
    axes.set_xlabel("candidate correction c [kPa]; 0: as read")
    axes.set_ylabel(f"largest rate/(PO₂ + c)\n[{SUPPLY_LABEL}]")


def _trial_handles(result: JointEstimate, cut: Sequence[Line2D], kinks: Sequence[tuple[float, float]]) -> list[Any]:
    """Legend handles: the observations, what is cut off, the estimates in numbers, and the flags."""
    capacity, critical, offset = result.supply_capacity, result.critical_po2, result.sensor_offset
    handles = [Line2D([], [], label="as read", **AS_READ)]
    for low, high, style, words in CHANCES:
        if np.isfinite(offset.value) and ((result.limited >= low) & (result.limited < high)).any():
            handles.append(Line2D([], [], label=f"corrected, chance of being limited {words}", **style))
    handles += cut
    if not np.isfinite(capacity.value):
        handles.append(
            Line2D([], [], label=f"never limited: α is at least {capacity.p025:.3g} {SUPPLY_LABEL},", **BOUND)
        )
        handles.append(Line2D([], [], label=f"and Pcrit at most {critical.p975:.3g} kPa", **BOUND))
    estimates = (
        ("supply capacity α", capacity, SUPPLY_LABEL, LIMIT),
        ("resting rate", result.resting_rate, RATE_LABEL, REST),
        ("Pcrit", critical, "kPa", CRITICAL),
        ("sensor offset c", offset, "kPa", OFFSET),
    )
    for name, quantity, unit, style in estimates:
        if np.isfinite(quantity.value):
            handles.append(Line2D([], [], label=f"{name} = {_said(quantity)} {unit}", **style))
    handles.append(Patch(label="95 % interval", **BAND))
    if len(kinks):
        handles.append(Line2D([], [], label="kink: the leading observation changes", **KINK))
    if result.flags:
        handles.append(Line2D([], [], linestyle="none", label=f"flags: {'; '.join(result.flags)}"))
    return handles


def _interval(quantity: WithInterval) -> np.ndarray:
    """Both ends of an interval; nan where there is none, or only a bound."""
    ends = np.array([quantity.p025, quantity.p975])
    return np.where(np.isfinite([quantity.value, *ends]).all(), ends, np.nan)


def _mark(line: Any, span: Any, quantity: WithInterval, style: dict[str, Any], bound: float = np.nan) -> None:
    """Draw an estimate, or its bound, as a straight line through the panel, and its interval as a band."""
    if np.isfinite(quantity.value):
        line(quantity.value, **style)
    elif np.isfinite(bound):
        line(bound, **BOUND)
    if np.isfinite(_interval(quantity)).all():
        span(*_interval(quantity), **BAND)


def _said(quantity: WithInterval) -> str:
    """Value with its interval in words."""
    ends = f" ({quantity.p025:.3g} to {quantity.p975:.3g})" if np.isfinite(_interval(quantity)).all() else ""
    return f"{quantity.value:.3g}{ends}"


# --- one species -------------------------------------------------------------------------------------------------


@rc_context(STYLE)
def species_picture(table: pd.DataFrame, species: Species, *, title: str) -> Figure:
    """Draw ln(supply capacity) and ln(resting rate) against inverse temperature, with the fit and what it leaves.

    Residuals of one individual are joined by a line. They hold the effect of body mass where the fit has one, since
    the table has no masses.

    Parameters
    ----------
    table : pandas.DataFrame
        One row a trial, see `habitat.trials.analysis.TABLE_COLUMNS`. A supply capacity that is missing but has a
        lower bound is a trial that oxygen never limited; it is drawn as a bound.
    species : Species
        The fit; its bands are drawn where its uncertainty is known.
    title : str
        Says which species this is.
    """
    temperature = table["temperature_degC"].to_numpy(float)
    spare = max(1.0, 0.06 * np.ptp(temperature))
    shown = np.linspace(temperature.min() - spare, temperature.max() + spare, 101)
    figure = Figure(figsize=(ONE_COLUMN, 5.2), layout="constrained")
    panels = figure.subplots(4, 1, sharex=True, height_ratios=(2, 1, 2, 1))
    figure.get_layout_engine().set(hspace=0, h_pad=0.02)
    for trait, pair in zip(PARAMETERS[:2], (panels[:2], panels[2:]), strict=True):
        _draw_response(*pair, table, species, trait, shown)
    panels[0].set_ylabel(f"ln α [{SUPPLY_LABEL}]")
    panels[2].set_ylabel(f"ln resting rate [{RATE_LABEL}]")
    panels[-1].set_xlabel("inverse temperature (1/T₀ − 1/T)/kB [1/eV]")
    panels[0].set_xlim(*species.inverse_temperature(shown[[0, -1]]))
    ticks = [t for t in MaxNLocator(6, steps=(1, 2, 5, 10)).tick_values(*shown[[0, -1]]) if shown[0] <= t <= shown[-1]]
    top = panels[0].secondary_xaxis("top")
    top.set_xticks(species.inverse_temperature(np.array(ticks)), [f"{tick:g}" for tick in ticks])
    top.set_xlabel("temperature [°C]")
    figure.align_ylabels(panels)
    finish(figure, title, _species_handles(table, species))
    return figure


def _draw_response(
    fit: Axes, residuals: Axes, table: pd.DataFrame, species: Species, trait: str, shown: np.ndarray
) -> None:
    """Draw one trait (one of `PARAMETERS`) of all trials with its fit, and the residuals below."""
    column = trait.removeprefix("ln_")
    response, along = getattr(species, column), species.inverse_temperature(shown)
    x = species.inverse_temperature(table["temperature_degC"].to_numpy(float))
    value, low, high = (_logarithm(table, name) for name in (column, f"{column}_p025", f"{column}_p975"))
    line, expected = (np.log(response.value) + response.activation_energy * at for at in (along, x))
    if species.covariance is not None:
        level = PARAMETERS.index(trait)
        own = np.array(species.covariance)[level::2, level::2]  # of ln(value) and its activation energy
        reach = ndtri(0.975) * np.sqrt(own[0, 0] + 2 * own[0, 1] * along + own[1, 1] * along**2)
        fit.fill_between(along, line - reach, line + reach, **BAND)
        residuals.fill_between(along, -reach, reach, **BAND)
    residuals.set_ylabel("residual")
    fit.plot(along, line, **LIMIT)
    residuals.axhline(0.0, **LIMIT)
    for _, rows in table.assign(x=x, left=value - expected).sort_values("x").groupby("individual"):
        residuals.plot(rows["x"], rows["left"], **SAME)
    bounded = np.isnan(value) & np.isfinite(low)
    for axes, subtracted in ((fit, 0.0), (residuals, expected)):
        axes.vlines(x, low - subtracted, high - subtracted, **BAR)
        axes.plot(x, value - subtracted, **KNOWN)
    fit.plot(x[bounded], low[bounded], **ONLY_BOUND | {"marker": "^"})


def _logarithm(table: pd.DataFrame, column: str) -> np.ndarray:
    """Logarithm of a column, nan where it is missing; the table gives no interval of a resting rate."""
    if column not in table:
        return np.full(len(table), np.nan)
    values = table[column].to_numpy(float)
    return np.log(values, out=np.full(values.shape, np.nan), where=values > 0)


def _species_handles(table: pd.DataFrame, species: Species) -> list[Any]:
    supply, rest = species.supply_capacity, species.resting_rate
    label = f"fit, E = {supply.activation_energy:.3g} eV (α), {rest.activation_energy:.3g} eV (rate)"
    handles = [Line2D([], [], label="trial, 95 % where known", **BAR | KNOWN | {"linestyle": "-"})]
    if table["individual"].duplicated().any():
        handles.append(Line2D([], [], label="same individual", **SAME))
    if table["supply_capacity"].isna().any():
        handles.append(Line2D([], [], label="never limited: at least", **ONLY_BOUND | {"marker": "^"}))
    handles.append(Line2D([], [], label=label, **LIMIT))
    if species.covariance is not None:
        handles.append(Patch(label="95 % of the fit", **BAND))
    return handles


# --- all trials --------------------------------------------------------------------------------------------------


@rc_context(STYLE)
def offsets_picture(table: pd.DataFrame, *, title: str) -> Figure:
    """Draw sensor offset and Pcrit of all trials with their 95 % intervals, the coldest on top.

    Parameters
    ----------
    table : pandas.DataFrame
        One row a trial, see `habitat.trials.analysis.TABLE_COLUMNS`. A Pcrit that is missing but has an upper bound is
        that of a trial that oxygen never limited; it is drawn as a bound.
    title : str
        Says which species this is.
    """
    table = table.sort_values("temperature_degC", kind="stable")
    count, rows = len(table), np.arange(len(table))
    figure = Figure(figsize=(ONE_COLUMN, 0.6 + ROW * np.clip(count, 8, MOST_ROWS)), layout="constrained")
    offsets, critical = figure.subplots(1, 2, sharey=True)
    _draw_estimates(offsets, table, "sensor_offset", rows)
    offsets.axvline(0.0, **ZERO)
    offsets.set_xlabel("sensor offset [kPa]")
    bounded = _draw_estimates(critical, table, "critical_po2", rows)
    critical.set_xlim(left=0.0)
    critical.set_xlabel("Pcrit [kPa]")
    flagged = table["flags"] != ""
    names = [shortened(str(name), 14) + " *" * flag for name, flag in zip(table["trial"], flagged, strict=True)]
    named = rows[:: int(np.ceil(count / MOST_ROWS))]
    offsets.set_ylim(count - 0.4, -0.6)
    offsets.set_yticks(named, [names[row] for row in named])
    right = critical.secondary_yaxis("right")
    right.set_yticks(named, [f"{table['temperature_degC'].iloc[row]:.1f}" for row in named])
    right.set_ylabel("temperature [°C]")
    handles = [Line2D([], [], label="estimate, 95 % where known", **BAR | KNOWN | {"linestyle": "-"})]
    if bounded:
        handles.append(Line2D([], [], label="never limited: at most", **ONLY_BOUND | {"marker": "<"}))
    if flagged.any():
        handles.append(Line2D([], [], linestyle="none", label="* flagged in the table"))
    finish(figure, title, handles)
    return figure


def _draw_estimates(axes: Axes, table: pd.DataFrame, name: str, rows: np.ndarray) -> bool:
    """Draw one quantity of all trials, or its upper bound; say whether there are bounds."""
    value, low, high = (table[f"{name}_{end}"].to_numpy(float) for end in ("kpa", "p025", "p975"))
    axes.grid(axis="y", color="0.9", linewidth=0.4)
    axes.set_axisbelow(True)
    axes.hlines(rows, low, high, **BAR)
    axes.plot(value, rows, **KNOWN)
    bounded = np.isnan(value) & np.isfinite(high)
    axes.hlines(rows[bounded], 0.0, high[bounded], **BAR | {"linestyle": ":"})
    axes.plot(high[bounded], rows[bounded], **ONLY_BOUND | {"marker": "<"})
    for row in rows[np.isnan(value) & ~bounded]:
        style = {"ha": "center", "va": "center", "size": SMALL, "path_effects": HALO}
        axes.annotate("not known", (0.5, row), xycoords=("axes fraction", "data"), **style)
    return bool(bounded.any())
