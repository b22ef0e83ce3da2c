"""Maps of a grid and of casts."""

from collections.abc import Sequence
from typing import Any

import cmocean
import numpy as np
import pandas as pd
import shapely
import xarray as xr
from matplotlib import colormaps, rc_context
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import ListedColormap, Normalize
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.ticker import MaxNLocator

from habitat.figures.frame import HALO, ONE_COLUMN, SMALL, STYLE, TWO_COLUMNS, finish, shortened
from habitat.regions import Region

NAMED_CASTS = 12
"""Up to so many casts a map gives their names."""

NO_DATA = "0.82"
NOT_VIABLE = Patch(facecolor="white", edgecolor="0.2", linewidth=0.4, label="no viable water")
CHANGE_COLOURS = ListedColormap(cmocean.cm.balance_r(np.linspace(0.1, 0.9, 256)))


@rc_context(STYLE)
def thickness_map(
    totals: xr.Dataset, baseline: xr.Dataset | None, *, title: str, regions: Sequence[Region] = ()
) -> Figure:
    """Map the thickness of viable water on a grid and, where a baseline is given, its change from there.

    Parameters
    ----------
    totals : xarray.Dataset
        ``thickness(latitude, longitude)`` [m] of one species, activity and scenario, NaN where there are no data;
        longitudes in any order and convention.
    baseline : xarray.Dataset or None
        The same for the baseline.
    title : str
        Says which species, activity and scenario this is.
    regions : sequence of Region
        Outlined and numbered on the map, named in the legend.
    """
    change = [] if baseline is None else [totals["thickness"] - baseline["thickness"]]
    fields = [_gridded(field) for field in (totals["thickness"], *change)]
    x, y = fields[0]["longitude"].to_numpy(), fields[0]["latitude"].to_numpy()
    limits = [(z[0] - (z[1] - z[0]) / 2, z[-1] + (z[-1] - z[-2]) / 2) for z in (x, y)]
    figure, panels, colours = _map_panels(*limits, [field.to_numpy() for field in fields])
    for axes, field, style in zip(panels, fields, colours, strict=True):
        axes.set_facecolor(NO_DATA)
        axes.pcolormesh(x, y, field, rasterized=True, **style)
    handles = [Patch(facecolor=NO_DATA, label="land or no data"), NOT_VIABLE, *_draw_regions(panels, regions)]
    finish(figure, title, handles)
    return figure


def _gridded(field: xr.DataArray) -> xr.DataArray:
    """Sort a field by latitude and longitude; a lone row or column becomes one degree wide."""
    field = field.assign_coords(longitude=("longitude", _continuous(field["longitude"].to_numpy())))
    for name in ("latitude", "longitude"):
        field = field.sortby(name)
        if field.sizes[name] == 1:
            field = field.isel({name: [0, 0]}).assign_coords({name: field[name].item() + np.array([-0.25, 0.25])})
    return field.transpose("latitude", "longitude")


@rc_context(STYLE)
def station_map(places: pd.DataFrame, *, title: str, regions: Sequence[Region] = ()) -> Figure:
    """Map casts as dots coloured by the thickness of viable water and, where it is given, by its change.

    Parameters
    ----------
    places : pandas.DataFrame
        One row a cast: ``cast``, ``latitude``, ``longitude``, ``thickness_m`` and perhaps ``change_m``; a cross stands
        for a missing value.
    title, regions
        As in `thickness_map`.
    """
    x, y = _continuous(places["longitude"].to_numpy(float)), places["latitude"].to_numpy(float)
    limits = [(z.min() - margin, z.max() + margin) for z in (x, y) for margin in [max(0.5, 0.08 * np.ptp(z))]]
    values = [places[name].to_numpy(float) for name in ("thickness_m", "change_m") if name in places]
    figure, panels, colours = _map_panels(*limits, values)
    size = np.clip(900 / len(places), 8, 40)
    for axes, value, style in zip(panels, values, colours, strict=True):
        known = np.isfinite(value)
        axes.scatter(x[known], y[known], size, value[known], edgecolor="0.2", linewidth=0.4, **style)
        axes.scatter(x[~known], y[~known], size, "0.4", marker="x", linewidth=0.8)
        for east, north, name in zip(x, y, places["cast"].astype(str), strict=True):
            if len(places) <= NAMED_CASTS:
                side, align = (-4, "right") if east > np.mean(limits[0]) else (4, "left")
                placed = {"xytext": (side, 3), "textcoords": "offset points", "ha": align, "size": SMALL}
                axes.annotate(shortened(name, 12), (east, north), path_effects=HALO, **placed).set_in_layout(False)
    handles = [NOT_VIABLE]
    if not np.isfinite(values).all():
        handles.append(Line2D([], [], linestyle="none", marker="x", color="0.4", label="no valid sample"))
    finish(figure, title, handles + _draw_regions(panels, regions))
    return figure


def _continuous(longitude: np.ndarray) -> np.ndarray:
    """Turn longitudes so that they run on without a jump, from the widest gap between them."""
    turned = longitude % 360.0
    ordered = np.unique(turned)
    gaps = np.diff(ordered, append=ordered[0] + 360.0)
    around_the_globe = gaps.max() <= 1.5 * np.median(gaps)
    start = longitude.min() % 360.0 if around_the_globe else ordered[(np.argmax(gaps) + 1) % ordered.size]
    return start + (turned - start) % 360.0


def _map_panels(
    x_limits: tuple[float, float], y_limits: tuple[float, float], values: Sequence[np.ndarray]
) -> tuple[Figure, Sequence[Axes], list[dict[str, Any]]]:
    """Lay out one map, or two side by side, with colour bars; return also the colours of each as `norm` and `cmap`."""
    x, y, count = np.mean(x_limits), np.mean(y_limits), len(values)
    narrowing = max(np.cos(np.deg2rad(y)), 0.1)
    width, height = np.ptp(x_limits) * narrowing / 2, np.ptp(y_limits) / 2
    width, height = max(width, height / 1.3), max(height, 0.4 * width)  # a map is no narrow strip
    size = (TWO_COLUMNS if count > 1 else ONE_COLUMN, (ONE_COLUMN - 0.7) * height / width + 0.75)
    figure = Figure(figsize=size, layout="compressed")
    panels = figure.subplots(1, count, sharex=True, sharey=True, squeeze=False)[0]
    most, change = (max(1.0, np.nanmax(np.abs(v), initial=0.0)) for v in (values[0], values[-1]))
    above_zero = colormaps["viridis"].with_extremes(under="white")
    colours = [
        {"norm": Normalize(1e-12 * most, most), "cmap": above_zero},
        {"norm": Normalize(-change, change), "cmap": CHANGE_COLOURS},
    ][:count]
    labels = ("thickness of viable water [m]", "change from the baseline [m]")
    for axes, style, label in zip(panels, colours, labels, strict=False):
        axes.set(xlim=(x - width / narrowing, x + width / narrowing), ylim=(y - height, y + height))
        axes.set(aspect=1 / narrowing, xlabel="longitude [°]")
        axes.xaxis.set_major_locator(MaxNLocator(5))
        axes.xaxis.set_major_formatter(lambda east, _: _degrees((east + 180) % 360 - 180, "EW"))
        axes.yaxis.set_major_formatter(lambda north, _: _degrees(north, "NS"))
        figure.colorbar(ScalarMappable(**style), ax=axes, location="bottom", label=label, aspect=30, pad=0.03)
    panels[0].set_ylabel("latitude [°]")
    figure.get_layout_engine().set(wspace=0.06)
    return figure, panels, colours


def _degrees(value: float, letters: str) -> str:
    return f"{abs(value):g}°{letters[int(value < 0)] if value else ''}"


def _draw_regions(panels: Sequence[Axes], regions: Sequence[Region]) -> list[Any]:
    """Outline and number the regions; return legend handles with their names."""
    outlined = [region for region in regions if region.shape is not None]
    for axes in panels:
        (west, east), (south, north) = axes.get_xlim(), axes.get_ylim()
        for number, region in enumerate(outlined, start=1):
            for turn in (-720.0, -360.0, 0.0, 360.0, 720.0):  # map and region may count longitudes differently
                shape = shapely.transform(region.shape, lambda points, turn=turn: points + np.array([turn, 0.0]))
                seen = shapely.get_coordinates(shapely.intersection(shape, shapely.box(west, south, east, north)))
                if not len(seen):
                    continue
                for ring in shapely.get_parts(shapely.boundary(shape)):
                    axes.plot(*shapely.get_coordinates(ring).T, color="black", linewidth=0.8, path_effects=HALO)
                corner, style = seen[np.argmin(seen @ [1, -1])], {"textcoords": "offset points", "path_effects": HALO}
                axes.annotate(str(number), corner, (3, -3), ha="left", va="top", **style)
        axes.set(xlim=(west, east), ylim=(south, north))
    return [Line2D([], [], color="black", linewidth=0.8, label=f"{i} {r.name}") for i, r in enumerate(outlined, 1)]
