"""Make the example data: casts, a grid and a warming field of the Halvane Basin, which does not exist.

Everything here is invented: the basin, its coast, its waters, its cruise and its future. The shapes are those of an
eastern-boundary basin with an oxygen minimum zone (OMZ), strongest in the south-east, and the numbers were chosen for
pictures that show what the program does. Nothing was measured. Run from the root of the repository::

    python profiles/make_example.py

The output does not depend on the clock: the same files are written each time.
"""

from collections.abc import Sequence
from datetime import datetime, timedelta
from pathlib import Path
from typing import NamedTuple

import numpy as np
import xarray as xr

from habitat.seawater import concentration_to, pressure_from_depth, solubility

FOLDER = Path(__file__).parent / "example"
NOTICE = "Invented data: the Halvane Basin does not exist, and nothing in this file was measured."

WEST, EAST, SOUTH, NORTH = -120.0, -110.0, 18.0, 28.0  # the box that holds the basin [degrees]
YEAR = 365.0  # [days]
DEEPEST = 1500.0  # depth to which casts and grid reach [m]

GRID_DEPTHS = np.concatenate(
    [np.arange(0, 51, 10), np.arange(75, 301, 25), np.arange(350, 1051, 50), np.arange(1100, 1501, 100)]
).astype(float)  # [m]
SEASON_BOUNDS = np.array([[0.0, 90.0], [90.0, 181.0], [181.0, 273.0], [273.0, 365.0]])  # [days of the year]
# Values are kept as multiples of a power of two, so that most bits of a float are zero and compress to little.
GRID_STEPS = {"temperature": 2.0**-7, "salinity": 2.0**-9, "oxygen": 2.0**-3}  # [degC], [1], [umol/kg]
GRID_ATTRIBUTES = {
    "temperature": {
        "standard_name": "sea_water_temperature",
        "units": "degC",
        "units_metadata": "temperature: on_scale",
        "long_name": "in-situ temperature",
    },
    "salinity": {
        "standard_name": "sea_water_practical_salinity",
        "units": "1",
        "long_name": "practical salinity",
    },
    "oxygen": {
        "standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water",
        "units": "umol kg-1",
        "long_name": "dissolved oxygen",
    },
}

WARMING_DEPTHS = np.array([0.0, 50.0, 100.0, 200.0, 300.0, 500.0, 750.0, 1000.0, 1500.0])  # [m]

CRUISE_START = datetime(2001, 5, 3, 6, 20)
STEAMING = timedelta(hours=11, minutes=25)  # from one cast to the next
CRUISE_LINE = (20.6, 22.3)  # latitude of the outermost and of the innermost cast [degrees north]
NOISE = {"temperature": 0.006, "salinity": 0.002, "oxygen": 0.2}  # standard deviations [degC], [1], [umol/kg]
HEAVE = 3.0  # standard deviation of small vertical displacements, as internal waves make them [m]


class Cast(NamedTuple):
    """How one cast was taken: its place, and the quirks of its file."""

    offshore: float  # [degrees of longitude west of the coast]
    vertical: str = "depth [m]"
    oxygen_unit: str = "umol/kg"
    oxygen_missing: tuple[tuple[float, float], ...] = ()  # depth ranges without oxygen values [m]


CASTS = (
    Cast(7.5),
    Cast(6.0, oxygen_missing=((54.0, 56.0), (439.0, 441.0))),
    Cast(4.7, oxygen_unit="ml/l"),
    Cast(3.4, oxygen_missing=((200.0, 260.0),)),
    Cast(2.4, vertical="pressure [dbar]"),
    Cast(1.6, oxygen_missing=((1174.0, 1176.0),)),
    Cast(1.0),
    Cast(0.45),
)


# --- the invented basin ------------------------------------------------------------------------------------------


def coast_longitude(latitude):
    """Longitude of the coast [degrees east]: it runs from south-south-east to north-north-west."""
    return -110.4 - 0.2 * (latitude - SOUTH) + 0.25 * np.sin(1.3 * (latitude - SOUTH))


def seabed(offshore):
    """Depth of the seabed [m]: a shelf down to 200 m, a slope, and a floor at 3600 m; NaN on land."""
    shelf = 200.0 * np.minimum(offshore / 0.5, 1.0)
    return np.where(offshore > 0, shelf + 3400.0 * smooth_step((offshore - 0.5) / 1.6), np.nan)


def smooth_step(fraction):
    """Rise from 0 at 0 to 1 at 1, level at both ends."""
    inside = np.clip(fraction, 0.0, 1.0)
    return inside**2 * (3.0 - 2.0 * inside)


def waters(depth, latitude, offshore, day):
    """Water of the basin at any place and season; the arguments broadcast.

    Parameters
    ----------
    depth : array-like
        [m, positive down].
    latitude : array-like
        [degrees north].
    offshore : array-like
        [degrees of longitude west of the coast].
    day : array-like
        Day of the year, counted from 0 [days].

    Returns
    -------
    temperature, salinity, oxygen : ndarray
        In situ [degC], practical [1], concentration [umol/kg].
    """
    offshore = np.maximum(offshore, 0.0)
    summer = np.cos(2 * np.pi * (day - 250.0) / YEAR)  # 1 in the warmest days, -1 in the coldest
    eddies = np.sin(2 * np.pi * offshore / 3.7) * np.cos(2 * np.pi * (latitude - SOUTH) / 5.3)
    lifted = np.maximum(depth - 12.0 * eddies * smooth_step(depth / 150.0), 0.0)

    bottom_of_mixing = 40.0 + 45.0 * (1.0 - np.exp(-offshore / 2.0)) - 12.0 * summer
    mixed = 1.0 / (1.0 + np.exp((lifted - bottom_of_mixing) / 12.0))

    upwelled = 2.0 * np.exp(-offshore / 0.8)
    surface_temperature = 27.0 - 0.4 * (latitude - SOUTH) - upwelled + 1.8 * summer
    temperature = mixed * surface_temperature + (1.0 - mixed) * (2.0 + 12.5 * np.exp(-lifted / 600.0))

    subsurface_maximum = 0.25 * np.exp(-(((lifted - 180.0) / 110.0) ** 2))
    intermediate_minimum = 0.12 * np.exp(-(((lifted - 750.0) / 280.0) ** 2))
    salinity = 34.55 + subsurface_maximum - intermediate_minimum - 0.02 * (latitude - SOUTH) * mixed

    saturated = 1.02 * solubility(temperature, salinity)
    oxygen = mixed * saturated + (1.0 - mixed) * oxygen_below_mixing(lifted, latitude, offshore)
    return temperature, salinity, oxygen


def oxygen_below_mixing(depth, latitude, offshore):
    """Oxygen below the mixed layer [umol/kg]: used up with depth, lowest in the OMZ, renewed from below.

    Towards the south-east the OMZ is stronger, its top and its core are shallower.
    """
    strength = np.exp(-offshore / 5.0 - (latitude - SOUTH) / 40.0)  # 1 in the south-eastern corner
    core = 1.5 + 30.0 * (1.0 - strength) ** 1.45
    core_depth = 680.0 - 230.0 * strength
    scale = 255.0 - 160.0 * strength
    from_above = 190.0 * np.exp(-((depth / scale) ** 1.5))
    from_below = (46.0 - core) * smooth_step((depth - core_depth) / (DEEPEST - core_depth))
    return core + from_above + from_below


# --- casts -------------------------------------------------------------------------------------------------------


def cast_depths(deepest: float) -> np.ndarray:
    """Depths of the samples [m]: every 5 m near the surface, every 25 m in the deep."""
    steps = [np.arange(5, 100, 5), np.arange(100, 300, 10), np.arange(300, 600, 20), np.arange(600, 1501, 25)]
    depths = np.concatenate(steps).astype(float)
    return depths[depths <= deepest]


def sample_cast(cast: Cast, latitude: float, day: float, rng: np.random.Generator) -> dict[str, np.ndarray]:
    """Sample the basin as an instrument would, with small displacements of the water and noise of the sensors."""
    depth = cast_depths(min(float(seabed(cast.offshore)), DEEPEST))
    displaced = depth + HEAVE * smoothed(rng.standard_normal(depth.size))
    values = waters(np.maximum(displaced, 0.0), latitude, cast.offshore, day)
    sampled = {
        name: value + NOISE[name] * rng.standard_normal(depth.size) for name, value in zip(NOISE, values, strict=True)
    }
    sampled["oxygen"] = np.maximum(sampled["oxygen"], 0.0)
    for upper, lower in cast.oxygen_missing:
        sampled["oxygen"][(depth >= upper) & (depth <= lower)] = np.nan
    return {"depth": depth, **sampled}


def smoothed(noise: np.ndarray) -> np.ndarray:
    """Take the running mean over five samples, scaled back to the variance of the input."""
    return np.convolve(noise, np.ones(5) / np.sqrt(5), mode="same")


def cast_text(number: int, cast: Cast, time: datetime, latitude: float, sampled: dict[str, np.ndarray]) -> str:
    """Write one cast as a table, in the vertical coordinate and oxygen unit of its own."""
    longitude = float(coast_longitude(latitude)) - cast.offshore
    depth, temperature, salinity, oxygen = sampled.values()
    pressure = pressure_from_depth(depth, latitude)
    vertical = pressure if cast.vertical.startswith("pressure") else depth
    oxygen = concentration_to(oxygen, temperature, salinity, pressure, longitude, latitude, unit=cast.oxygen_unit)
    digits = 2 if cast.oxygen_unit == "umol/kg" else 4

    headings = "cast,time,latitude [degrees_north],longitude [degrees_east],seabed_depth [m],"
    headings += f"{cast.vertical},temperature [degC],salinity,oxygen [{cast.oxygen_unit}]"
    station = f"H{number:02d},{time:%Y-%m-%dT%H:%M},{latitude:.4f},{longitude:.4f},{seabed(cast.offshore):.0f}"
    lines = [
        f"# {NOTICE}",
        f"# Halvane Basin, invented cruise of May 2001, cast {number} of {len(CASTS)}, from offshore to the coast.",
        headings,
    ]
    for z, t, s, o in zip(vertical, temperature, salinity, oxygen, strict=True):
        measured = f"{o:.{digits}f}" if np.isfinite(o) else ""
        lines.append(f"{station},{z:.1f},{t:.3f},{s:.3f},{measured}")
    return "\n".join(lines) + "\n"


def write_casts(folder: Path) -> None:
    """Write one CSV file a cast."""
    rng = np.random.default_rng(20010503)
    latitudes = np.linspace(*CRUISE_LINE, len(CASTS))
    for index, (cast, latitude) in enumerate(zip(CASTS, latitudes.tolist(), strict=True)):
        time = CRUISE_START + index * STEAMING
        day = (time - datetime(time.year, 1, 1)) / timedelta(days=1)
        sampled = sample_cast(cast, latitude, day, rng)
        text = cast_text(index + 1, cast, time, latitude, sampled)
        (folder / f"halvane_{index + 1:02d}.csv").write_text(text, encoding="utf-8", newline="\n")


# --- grid and warming field --------------------------------------------------------------------------------------


def grid() -> xr.Dataset:
    """Four seasons of the basin on a grid of half a degree."""
    latitude, longitude = np.arange(SOUTH + 0.25, NORTH, 0.5), np.arange(WEST + 0.25, EAST, 0.5)
    day = SEASON_BOUNDS.mean(axis=1)
    depth = GRID_DEPTHS[:, None, None]
    offshore = coast_longitude(latitude)[:, None] - longitude
    floor = seabed(offshore)
    in_water = depth <= floor  # False on land, where the floor is NaN
    values = waters(depth, latitude[:, None], offshore, day[:, None, None, None])

    dims = ("time", "depth", "latitude", "longitude")
    dataset = xr.Dataset(coords=grid_coordinates(GRID_DEPTHS, latitude, longitude))
    attrs = {"standard_name": "time", "units": "days since 2001-01-01", "calendar": "standard", "axis": "T"}
    dataset = dataset.assign_coords(time=("time", day, attrs))
    for (name, attrs), value in zip(GRID_ATTRIBUTES.items(), values, strict=True):
        stepped = np.round(value / GRID_STEPS[name]) * GRID_STEPS[name]
        dataset[name] = (dims, np.where(in_water, stepped, np.nan), {**attrs, "cell_methods": "time: mean"})
    attrs = {"standard_name": "sea_floor_depth_below_geoid", "units": "m", "long_name": "depth of the seabed"}
    dataset["seabed_depth"] = (dims[2:], floor.round(), attrs)
    bounds = {
        "time": SEASON_BOUNDS,
        "depth": depth_bounds(GRID_DEPTHS),
        "latitude": latitude[:, None] + np.array([-0.25, 0.25]),
        "longitude": longitude[:, None] + np.array([-0.25, 0.25]),
    }
    for name, edges in bounds.items():
        dataset[name].attrs["bounds"] = f"{name}_bnds"
        dataset[f"{name}_bnds"] = ((name, "bounds"), edges)
    return dataset.assign_attrs(global_attributes("Halvane Basin, four seasons of an invented year"))


def warming_field() -> xr.Dataset:
    """Invented changes of temperature and oxygen by the end of an invented century, on a grid of one degree.

    The field reaches half a degree beyond the basin and over land, so that it can be interpolated anywhere in it.
    """
    latitude, longitude = np.arange(SOUTH - 0.5, NORTH + 1.0, 1.0), np.arange(WEST - 0.5, EAST + 1.0, 1.0)
    depth = WARMING_DEPTHS[:, None, None]
    northward = (latitude[:, None] - SOUTH) / (NORTH - SOUTH)
    eastward = (longitude - WEST) / (EAST - WEST)
    warming = (2.9 + 0.5 * northward - 0.4 * eastward) * np.exp(-depth / 420.0) + 0.2
    change = -(11.0 + 4.0 * northward + 2.0 * eastward) * np.exp(-depth / 500.0) - 1.0

    dims = ("depth", "latitude", "longitude")
    dataset = xr.Dataset(coords=grid_coordinates(WARMING_DEPTHS, latitude, longitude))
    attrs = {"long_name": "warming of sea water", "units": "K", "units_metadata": "temperature: difference"}
    dataset["warming"] = (dims, warming.round(3), attrs)
    dataset["oxygen_change"] = (dims, change.round(2), {"long_name": "change of oxygen", "units": "umol kg-1"})
    return dataset.assign_attrs(global_attributes("Halvane Basin, invented change over an invented century"))


def grid_coordinates(depth: np.ndarray, latitude: np.ndarray, longitude: np.ndarray) -> dict[str, tuple]:
    """Coordinates with the attributes of the CF conventions."""
    down = {"standard_name": "depth", "units": "m", "positive": "down", "axis": "Z"}
    return {
        "depth": ("depth", depth, down),
        "latitude": ("latitude", latitude, {"standard_name": "latitude", "units": "degrees_north", "axis": "Y"}),
        "longitude": ("longitude", longitude, {"standard_name": "longitude", "units": "degrees_east", "axis": "X"}),
    }


def depth_bounds(depths: np.ndarray) -> np.ndarray:
    """Bounds [m] halfway between depths, from the surface on; the last cell is as thick below its depth as above."""
    between = (depths[1:] + depths[:-1]) / 2
    edges = np.concatenate([[0.0], between, [2 * depths[-1] - between[-1]]])
    return np.stack([edges[:-1], edges[1:]], axis=1)


def global_attributes(title: str) -> dict[str, str]:
    """Attributes of a whole netCDF file, with its title."""
    return {"Conventions": "CF-1.11", "title": title, "comment": NOTICE, "source": "profiles/make_example.py"}


def write_netcdf(dataset: xr.Dataset, path: Path, packed: Sequence[str]) -> None:
    """Write a dataset with the variables `packed` as compressed single precision, and no fill value elsewhere."""
    fill = np.float32(9.96921e36)
    small = {"dtype": "float32", "zlib": True, "complevel": 9, "shuffle": True, "_FillValue": fill}
    encoding = {str(name): small if name in packed else {"_FillValue": None} for name in dataset.variables}
    dataset.to_netcdf(path, engine="netcdf4", format="NETCDF4", encoding=encoding)


def main(folder: Path = FOLDER) -> None:
    """Write all example data into `folder`."""
    folder.mkdir(parents=True, exist_ok=True)
    write_casts(folder)
    write_netcdf(grid(), folder / "halvane_grid.nc", packed=[*GRID_STEPS, "seabed_depth"])
    write_netcdf(warming_field(), folder / "halvane_warming.nc", packed=["warming", "oxygen_change"])


if __name__ == "__main__":
    main()
