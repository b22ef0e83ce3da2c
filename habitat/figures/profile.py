"""The picture of one cast and one species."""

import itertools
from typing import Any

import numpy as np
import pandas as pd
import xarray as xr
from matplotlib import colormaps, rc_context
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from habitat.bands import CROSSING, EDGE_KINDS
from habitat.figures.frame import LINE_STYLES, ONE_COLUMN, SMALL, STYLE, finish, pick

MARKERS = ("o", "^", "s", "D", "v")
ACTIVITY_COLOURS = colormaps["viridis"]([0.15, 0.75, 0.45, 0.88, 0.3])
FLAG_SIGNS = {
    "outside-temperature-range": "* beyond measured temperatures",
    "vanishes-at-p95": "? may not exist (chance above 5 %)",
}
DATA_ENDS = ("shallowest sample", "deepest sample", "gap")


@rc_context(STYLE)
def profile_picture(profile: xr.Dataset, bands: pd.DataFrame, *, title: str) -> Figure:
    """Draw one cast and one species: what the water offers, what the animal needs, and the viable bands.

    Parameters
    ----------
    profile : xarray.Dataset
        ``depth(level)`` [m], ``po2(scenario, level)`` [kPa], ``needed(scenario, activity, level)`` [kPa] and, where
        the physiology's uncertainty is known, ``needed_p05`` and ``needed_p95`` like it; the first scenario is the
        baseline. Lines break at missing values; a sample without neighbours is a dot.
    bands : pandas.DataFrame
        Rows of `habitat.viability.band_table` for this cast and species, all scenarios and activities.
    title : str
        Says which cast and species this is.
    """
    figure = Figure(figsize=(ONE_COLUMN, 3.5), layout="constrained")
    water, bars = figure.subplots(1, 2, sharey=True, width_ratios=(1.25, 1))
    bands = bands.astype(dict.fromkeys(bands.filter(like="_m").columns, float))  # columns without a band leave objects
    handles = _draw_pressures(water, profile, bands) + _draw_bars(bars, profile, bands)
    shown, bottom = _depth_shown(profile, bands)
    water.set_ylim(shown, 0)
    water.set_ylabel("depth [m]" if shown >= bottom else f"depth [m] (cut: the cast continues to {bottom:.0f} m)")
    finish(figure, title, handles)
    return figure


def _depth_shown(profile: xr.Dataset, bands: pd.DataFrame) -> tuple[float, float]:
    """Depth down to which a cast is drawn, and down to which it reaches [m].

    A cast that goes far beyond its deepest crossing and its least PO2 is cut, so that the bands stay readable.
    """
    po2 = profile["po2"].isel(scenario=0).to_numpy()
    depth = np.where(np.isfinite(po2), profile["depth"].to_numpy(), np.nan)
    bottom = np.nanmax([1.0, *depth, *bands["lower_m"]])
    crossings = [bands[f"{side}_m"][bands[f"{side}_edge"] == EDGE_KINDS[CROSSING]] for side in ("upper", "lower")]
    action = max([*np.concatenate(crossings), *depth[po2 == np.nanmin(po2, initial=np.inf)]], default=bottom)
    shown = 50.0 * np.ceil(1.3 * action / 50.0)
    return (shown if shown < 0.6 * bottom else 1.02 * bottom), bottom


def _draw_pressures(axes: Axes, profile: xr.Dataset, bands: pd.DataFrame) -> list[Any]:
    """Draw PO2 and the needed PO2 against depth; return legend handles."""
    depth, scenarios, handles = profile["depth"].to_numpy(), list(map(str, profile["scenario"].to_numpy())), []
    for i, scenario in enumerate(scenarios):
        style = {"linestyle": pick(LINE_STYLES, i), "linewidth": 0.7 if i else 1.4}
        _line(axes, profile["po2"].isel(scenario=i), depth, color="black", **style)
        handles.append(Line2D([], [], color="black", label=f"PO₂, {chr(65 + i)}: {scenario}", **style))
        for j, needed in enumerate(profile["needed"].isel(scenario=i).transpose("activity", "level")):
            _line(axes, needed, depth, color=pick(ACTIVITY_COLOURS, j), **style)
    for j, activity in enumerate(profile["activity"].to_numpy()):
        baseline, colour, mark = profile.isel(scenario=0, activity=j), pick(ACTIVITY_COLOURS, j), pick(MARKERS, j)
        every = (0.02 + 0.02 * j, 0.12)
        axes.plot(baseline["needed"], depth, linestyle="none", color=colour, marker=mark, markevery=every)
        handles.append(Line2D([], [], color=colour, marker=mark, label=f"needed PO₂, activity factor {activity:g}"))
        for band in _bands_of(bands, scenarios[0], activity).itertuples():
            axes.axhspan(band.upper_m, band.lower_m, color=colour, alpha=0.1, linewidth=0)
        if "needed_p05" in profile:
            spread = baseline["needed_p05"], baseline["needed_p95"]
            axes.fill_betweenx(depth, *spread, color=colour, alpha=0.3, linewidth=0)
    if "needed_p05" in profile:
        handles.append(Patch(facecolor="0.75", label="5–95 % of the need (A)"))
    axes.set_xlim(left=0)
    axes.set_xlabel("oxygen partial pressure [kPa]")
    return [*handles, Patch(facecolor="0.9", label="viable (A)")]


def _line(axes: Axes, values: xr.DataArray, depth: np.ndarray, **style: Any) -> None:
    """Draw a line that breaks at missing values, and a dot for each sample that no line would show."""
    axes.plot(values, depth, **style)
    valid = np.pad(np.isfinite(values) & np.isfinite(depth), 1)
    alone = valid[1:-1] & ~valid[:-2] & ~valid[2:]
    axes.plot(values[alone], depth[alone], linestyle="none", marker=".", color=style["color"])


def _bands_of(bands: pd.DataFrame, scenario: str, activity: float) -> pd.DataFrame:
    return bands[(bands["scenario"] == scenario) & np.isclose(bands["activity"], activity) & (bands["band"] > 0)]


def _draw_bars(axes: Axes, profile: xr.Dataset, bands: pd.DataFrame) -> list[Any]:
    """Draw the bands as one bar for each scenario and activity; return legend handles of the signs that occur."""
    scenarios, activities = list(map(str, profile["scenario"].to_numpy())), profile["activity"].to_numpy()
    top, width = axes.get_xaxis_transform(), len(activities) + 0.7
    nothing = "no valid sample" if bands["flags"].str.contains("no-valid-sample").all() else "none viable"
    for (i, scenario), (j, activity) in itertools.product(enumerate(scenarios), enumerate(activities)):
        x, own, colour = i * width + j, _bands_of(bands, scenario, activity), pick(ACTIVITY_COLOURS, j)
        axes.plot(x, 1.02, pick(MARKERS, j), color=colour, transform=top, clip_on=False)
        axes.bar(np.full(len(own), x), own["thickness_m"], 0.72, own["upper_m"], color=colour)
        _draw_edges(axes, x, own)
        if own.empty:
            axes.text(x, 0.5, nothing, rotation=90, ha="center", va="center", size=SMALL, transform=top)
        signs = "".join(sign[0] for flag, sign in FLAG_SIGNS.items() if own["flags"].str.contains(flag).any())
        axes.text(x, 1.03, signs, ha="center", va="bottom", size=SMALL, transform=top)
    centres = np.arange(len(scenarios)) * width + (len(activities) - 1) / 2
    axes.set_xticks(centres, [chr(65 + i) for i in range(len(scenarios))])
    axes.set(xlim=(-0.8, len(scenarios) * width - 0.9), xlabel="viable bands by scenario")
    signs = [
        (bands.filter(regex="_m_p[0-9]").notna(), {"marker": "_", "label": "5–95 % of an edge"}),
        (bands.filter(like="_edge").isin(DATA_ENDS), {"linestyle": ":", "label": "ends where the data end"}),
        *((bands["flags"].str.contains(f), {"linestyle": "none", "label": sign}) for f, sign in FLAG_SIGNS.items()),
    ]
    return [Line2D([], [], color="black", linewidth=0.7, **style) for occurs, style in signs if occurs.to_numpy().any()]


def _draw_edges(axes: Axes, x: float, own: pd.DataFrame) -> None:
    """Draw the 5-95 % of each edge, and a dotted line where a band ends only because the data do."""
    for side in ("upper", "lower"):
        ends = own[f"{side}_m"][own[f"{side}_edge"].isin(DATA_ENDS)]
        axes.hlines(ends, x - 0.45, x + 0.45, color="black", linestyle=":", linewidth=1)
        edges = own[[f"{side}_m", f"{side}_m_p05", f"{side}_m_p95"]].astype(float)
        reach = pd.DataFrame({"min": edges.min(axis=1), "max": edges.max(axis=1)})
        for low, high in reach[reach["min"] < reach["max"]].to_numpy():
            axes.plot([x, x], [low, high], color="black", linewidth=0.7, marker="_")
