"""Small finished results to draw, and ways to ask a picture what it shows."""

import numpy as np
import pandas as pd
import xarray as xr
from matplotlib.patches import Rectangle
from matplotlib.text import Text

from habitat import figures
from habitat.regions import box
from habitat.species import Response, Species
from habitat.viability import BAND_COLUMNS

COVARIANCE = ((0.004, 0, 0, 0), (0, 0.006, 0, 0), (0, 0, 0.0025, 0), (0, 0, 0, 0.0025))


PRAWN = Species("Example prawn", 10.0, Response(1.10, 0.30), Response(2.40, 0.62), covariance=COVARIANCE)


LONG = "a scenario whose name was written by somebody with much to say about $warming$ and_oxygen, and no wish to stop"


def profile(depth, po2, scenarios=("baseline",), activities=(1.0, 2.5), uncertainty=True):
    """Cast with the same PO2 in all scenarios, and a need of 2 kPa per activity factor."""
    shape, depth = (len(scenarios), len(activities), len(depth)), np.asarray(depth, float)
    needed = np.broadcast_to(2.0 * np.array(activities)[:, None], shape)
    dims = ("scenario", "activity", "level")
    variables = {
        "depth": ("level", depth),
        "po2": (("scenario", "level"), np.broadcast_to(np.asarray(po2, float), (len(scenarios), len(depth)))),
        "needed": (dims, needed),
    }
    if uncertainty:
        variables |= {"needed_p05": (dims, 0.9 * needed), "needed_p95": (dims, 1.1 * needed)}
    return xr.Dataset(variables, coords={"scenario": list(scenarios), "activity": list(activities)})


def row(scenario="baseline", activity=1.0, band=1, upper=0.0, lower=200.0, **others):
    """One row of a band table, without uncertainty unless given."""
    edges = {"upper_edge": "surface" if upper == 0 else "crossing", "lower_edge": "crossing", "flags": ""}
    values = {"scenario": scenario, "activity": activity, "band": band, "upper_m": upper, "lower_m": lower}
    return dict.fromkeys(BAND_COLUMNS, np.nan) | edges | values | {"thickness_m": lower - upper} | others


def empty_row(**others):
    return row(band=0, upper=np.nan, lower=np.nan, upper_edge=None, lower_edge=None, **others)


def letters(figure):
    """All texts of a picture that say something, laid out."""
    figure.draw_without_rendering()
    return [text for text in figure.findobj(Text) if text.get_text() and text.get_visible()]


def texts(figure):
    """All words of a picture, line breaks undone."""
    return [text.get_text().replace("\n", " ") for text in letters(figure)]


def rectangles(axes):
    """Upper and lower depth of each bar or shading [m], not of the frame."""
    patches = [patch for patch in axes.patches if isinstance(patch, Rectangle)]
    return sorted((patch.get_y(), patch.get_y() + patch.get_height()) for patch in patches)


def drawn_beyond(figure):
    """Words that reach beyond the limits of the picture."""
    page, extents = figure.bbox, [(text.get_text(), text.get_window_extent()) for text in letters(figure)]
    return [
        text for text, box in extents if not (box.x0 >= 0 and box.y0 >= 0 and box.x1 <= page.x1 and box.y1 <= page.y1)
    ]


DEPTHS = np.arange(0.0, 1000.0, 10.0)


PO2 = np.interp(DEPTHS, [0, 300, 600, 1000], [20.0, 1.0, 1.0, 6.0])


def section(seabed=(500.0, 800.0, 450.0), po2=None):
    """Three casts 100 km apart, PO2 falling by 1 kPa in 50 m from 20 kPa; needs of 10 and 15 kPa."""
    depth = np.broadcast_to(np.arange(0.0, 460.0, 50.0), (3, 10))
    po2 = 20.0 - depth / 50.0 if po2 is None else np.asarray(po2)
    variables = {
        "distance": ("cast", [0.0, 100.0, 200.0]),
        "depth": (("cast", "level"), depth),
        "po2": (("cast", "level"), po2),
        "margin": (("activity", "cast", "level"), np.stack([po2 - 10.0, po2 - 15.0])),
    }
    if seabed is not None:
        variables["seabed_depth"] = ("cast", list(seabed))
    return xr.Dataset(variables, coords={"cast": ["A1", "A2", "A3"], "activity": [1.0, 1.5]})


def zero_lines(axes):
    """Depths along each line of zero margin, which alone is black and has one level."""
    sets = [c for c in axes.collections if getattr(c, "levels", None) is not None and list(c.levels) == [0]]
    return [np.concatenate([path.vertices[:, 1] for path in lines.get_paths()]) for lines in sets]


def totals(latitude, longitude, values):
    coords = {"latitude": list(latitude), "longitude": list(longitude)}
    return xr.Dataset({"thickness": (("latitude", "longitude"), np.array(values, float))}, coords=coords)


def places(count, **others):
    rng = np.random.default_rng(4)
    names = [f"cast {i}" for i in range(count)]
    where = {"latitude": rng.uniform(10, 30, count), "longitude": rng.uniform(-150, -110, count)}
    return pd.DataFrame({"cast": names, **where, "thickness_m": rng.uniform(0, 900, count), **others})


def pictures():
    """One picture of each kind."""
    grid = totals([0, 1], [0, 1], [[1, 2], [3, np.nan]])
    yield figures.profile_picture(profile(DEPTHS, PO2), pd.DataFrame([row()]), title="Prawn")
    yield figures.section_picture(section(), title="Prawn")
    yield figures.thickness_map(grid, grid, title="Prawn", regions=[box("box", 0, 1, 0, 1)])
    yield figures.station_map(places(4), title="Prawn")
