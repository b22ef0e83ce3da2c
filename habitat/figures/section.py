"""The picture of a section."""

from collections.abc import Sequence

import cmocean
import numpy as np
import xarray as xr
from matplotlib import rc_context
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from habitat.bands import SURFACE_WITHIN, gather
from habitat.figures.frame import HALO, LINE_STYLES, ONE_COLUMN, STYLE, finish, pick, shortened

SPLIT_DEPTH = 1000.0
"""In a section more than twice as deep, the water above this depth has a panel of its own [m]."""

HATCHES = ("///", "\\\\\\", "|||", "---", "...")
SEA_FLOOR = "0.55"
WATER_COLOURS = ListedColormap(cmocean.cm.ice(np.linspace(0.3, 1.0, 256)))


@rc_context(STYLE)
def section_picture(section: xr.Dataset, *, title: str) -> Figure:
    """Draw PO2 along a section, the viable water hatched and the lines where the oxygen margin is zero.

    Each cast is linear in depth between its samples, joined by the same rules as the bands; the water between two
    casts is interpolated where both have data. White water was not sampled.

    Parameters
    ----------
    section : xarray.Dataset
        ``distance(cast)`` [km], ``depth(cast, level)`` [m], ``po2(cast, level)`` and ``margin(activity, cast, level)``
        [kPa], and ``seabed_depth(cast)`` [m] where it is known.
    title : str
        Says which species, scenario and section this is.
    """
    section = section.sortby("distance")
    stations, names = section["distance"].to_numpy(), list(map(str, section["cast"].to_numpy()))
    if len(stations) == 1:  # a lone cast is drawn 1 km wide
        section = section.isel(cast=[0, 0]).assign(distance=("cast", stations + np.array([-0.5, 0.5])))
    if "seabed_depth" not in section:
        section["seabed_depth"] = xr.full_like(section["distance"], np.nan, dtype=float)
    deepest = section["depth"].where(np.isfinite(section["po2"])).max().fillna(1.0).item()
    bottom = 1.03 * max(deepest, 1.0)
    limits = [(0.0, SPLIT_DEPTH), (SPLIT_DEPTH, bottom)] if bottom > 2 * SPLIT_DEPTH else [(0.0, bottom)]

    figure = Figure(figsize=(ONE_COLUMN, 2.9), layout="constrained")
    panels = figure.subplots(len(limits), 1, sharex=True, squeeze=False)[:, 0]
    figure.get_layout_engine().set(hspace=0, h_pad=0.03)
    levels = MaxNLocator(12).tick_values(0, max(1.0, section["po2"].max().fillna(0).item()))
    colours = ScalarMappable(BoundaryNorm(levels, WATER_COLOURS.N), WATER_COLOURS)
    for axes, (upper, lower) in zip(panels, limits, strict=True):
        _draw_water(axes, section, np.linspace(upper, lower, 200), colours)
        floor = section["seabed_depth"].clip(max=bottom)
        axes.fill_between(section["distance"], floor, bottom, color=SEA_FLOOR, linewidth=0, zorder=3)
        axes.set_ylim(lower, upper)
    figure.supylabel("depth [m]", size=7)
    panels[-1].set_xlabel("distance along the section [km]")
    _station_ticks(panels[0], stations, [shortened(name, 10) for name in names])
    figure.colorbar(colours, ax=list(panels), label="oxygen partial pressure [kPa]", aspect=35, pad=0.02)
    handles = []
    for j, activity in enumerate(section["activity"].to_numpy()):
        style = {"facecolor": "none", "linestyle": pick(LINE_STYLES, j), "hatch": pick(HATCHES, j)}
        handles.append(Patch(edgecolor="black", label=f"viable, activity factor {activity:g}", **style))
    if np.isfinite(section["seabed_depth"]).any():
        handles.append(Patch(facecolor=SEA_FLOOR, label="sea floor"))
    finish(figure, title, handles)
    return figure


def _draw_water(axes: Axes, section: xr.Dataset, at: np.ndarray, colours: ScalarMappable) -> None:
    """Draw PO2 at the depths `at` in colour, and for each activity its viable water and its line of zero margin."""
    distance, po2 = section["distance"].to_numpy(), _on_depths(section, section["po2"], at)
    if not np.isfinite(po2).any():
        axes.text(0.5, 0.5, "too few valid samples", ha="center", va="center", transform=axes.transAxes)
        return
    axes.contourf(distance, at, po2.T, levels=colours.norm.boundaries, norm=colours.norm, cmap=colours.cmap)
    for j, values in enumerate(section["margin"].transpose("activity", ...)):
        margin = _on_depths(section, values, at)
        if (margin >= 0).any():
            axes.contourf(distance, at, margin.T, levels=[0, np.inf], colors="none", hatches=[pick(HATCHES, j)])
        if np.nanmin(margin) < 0 < np.nanmax(margin):
            style = {"colors": "black", "linewidths": 1.1, "linestyles": [pick(LINE_STYLES, j)]}
            axes.contour(distance, at, margin.T, levels=[0], **style).set_path_effects(HALO)


def _on_depths(section: xr.Dataset, values: xr.DataArray, at: np.ndarray) -> np.ndarray:
    """Interpolate each cast to the depths `at`, joining samples and reaching surface and seabed as the bands do."""
    depth, values = (field.transpose("cast", "level").to_numpy() for field in (section["depth"], values))
    samples = gather(depth, values, values, section["seabed_depth"].to_numpy())
    field = np.full((samples.columns, at.size), np.nan)
    for cast in np.unique(samples.column):
        own = samples.column == cast
        z, joined = samples.depth[own], samples.joined[own]
        above = np.clip(np.searchsorted(z, at, side="right") - 1, 0, None)
        gap = ~joined[above] & (at > z[above]) & (at < z[-1])
        top = 0.0 if z[0] <= SURFACE_WITHIN else z[0]
        known = (at >= top) & (at <= samples.bottom[cast]) & ~gap
        field[cast, known] = np.interp(at[known], z, samples.po2[own])
    return field


def _station_ticks(axes: Axes, distance: np.ndarray, names: Sequence[str]) -> None:
    """Tick every station along the top, and name as many as have room."""
    top, room = axes.secondary_xaxis("top"), 0.02 * np.ptp(axes.get_xlim()) * (1 + max(map(len, names)))
    named = [0]
    for i, place in enumerate(distance):
        if place - distance[named[-1]] >= room:
            named.append(i)
    top.set_xticks(distance, minor=True)
    top.set_xticks(distance[named], [names[i] for i in named])
