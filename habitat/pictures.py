"""Which pictures a study draws: gathers finished data for `habitat.figures` and writes the files."""

import re
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from itertools import count
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr

from habitat import figures
from habitat.regions import EARTH_RADIUS
from habitat.studyfile import Animal, Study
from habitat.viability import TAILS, oxygen_pressure

LONGEST_NAME = 100
"""Of a picture's file [characters]; different names that come out alike are numbered."""


@dataclass(frozen=True)
class Results:
    """What one animal gave in all oceans; every mapping goes by scenario name, the baseline first.

    Attributes
    ----------
    animal : Animal
    totals : mapping of str to xarray.Dataset
    bands : pandas.DataFrame or None
        Band table of all scenarios; None for grids too large for one.
    """

    animal: Animal
    totals: Mapping[str, xr.Dataset]
    bands: pd.DataFrame | None


def count_pictures(study: Study, columns: xr.Dataset) -> int:
    """Count the pictures that `draw` will make."""
    animals, oceans = len(study.animals), 1 + len(study.scenarios)
    if columns.attrs["form"] == "casts":
        maps = oceans * sum(len(animal.activities) for animal in study.animals)
        return animals * columns.sizes["cast"] + (animals * oceans if _is_section(columns) else 0) + maps
    return oceans * sum(len(animal.activities) for animal in study.animals)


def draw(study: Study, oceans: Mapping[str, xr.Dataset], results: list[Results], folder: Path) -> Iterator[str]:
    """Draw and write the pictures of a study; yields the title of each before it is drawn.

    Parameters
    ----------
    study : Study
    oceans : mapping of str to xarray.Dataset
        Scenario name to water columns, the baseline first.
    results : list of Results
    folder : Path
        Exists.
    """
    columns = next(iter(oceans.values()))
    for result in results:
        if columns.attrs["form"] == "casts":
            yield from _cast_pictures(study, oceans, result, folder)
            if _is_section(columns):
                yield from _section_pictures(study, oceans, result, folder)
            yield from _station_maps(study, columns, result, folder)
        else:
            yield from _thickness_maps(study, result, folder)


def _cast_pictures(study: Study, oceans: Mapping[str, xr.Dataset], result: Results, folder: Path) -> Iterator[str]:
    animal = result.animal
    profiles = _profiles(oceans, animal, study.hydrostatic)
    for i, cast in enumerate(profiles["cast"].values.astype(str)):
        title = f"{animal.species.name}, cast {cast}"
        yield title
        profile = profiles.isel(cast=i)
        profile = profile.isel(level=np.isfinite(profile["depth"].values))
        picture = figures.profile_picture(profile, result.bands[result.bands["cast"] == cast], title=title)
        figures.save(picture, _stem(folder, "profile", animal.species.name, cast))


def _profiles(oceans: Mapping[str, xr.Dataset], animal: Animal, hydrostatic: bool) -> xr.Dataset:
    """PO2 and the needed PO2 of all casts, in all oceans and at all activities."""
    activity = xr.DataArray(list(animal.activities), dims="activity", coords={"activity": list(animal.activities)})
    each = []
    for columns in oceans.values():
        temperature = columns["temperature"]
        profile = {
            "po2": oxygen_pressure(columns, hydrostatic=hydrostatic),
            "needed": activity * animal.species.pcrit(temperature),
        }
        if animal.species.covariance is not None:
            low, high = (activity * animal.species.pcrit(temperature, quantile) for quantile in TAILS)
            profile |= {"needed_p05": low, "needed_p95": high}
        each.append(xr.Dataset(profile))
    profiles = xr.concat(each, pd.Index(list(oceans), name="scenario"))
    return profiles.assign(depth=next(iter(oceans.values()))["depth"])


def _section_pictures(study: Study, oceans: Mapping[str, xr.Dataset], result: Results, folder: Path) -> Iterator[str]:
    animal = result.animal
    for scenario, columns in oceans.items():
        title = f"{animal.species.name}, {scenario}"
        yield title
        po2 = oxygen_pressure(columns, hydrostatic=study.hydrostatic)
        activity = xr.DataArray(list(animal.activities), dims="activity", coords={"activity": list(animal.activities)})
        section = xr.Dataset(
            {
                "po2": po2,
                "margin": po2 - activity * animal.species.pcrit(columns["temperature"]),
                "depth": columns["depth"],
                "distance": ("cast", _distance(columns)),
            }
        )
        if "seabed_depth" in columns:
            section["seabed_depth"] = columns["seabed_depth"]
        picture = figures.section_picture(section, title=title)
        figures.save(picture, _stem(folder, "section", animal.species.name, scenario))


def _station_maps(study: Study, columns: xr.Dataset, result: Results, folder: Path) -> Iterator[str]:
    animal = result.animal
    places = columns[["latitude", "longitude"]].to_dataframe().reset_index()[["cast", "latitude", "longitude"]]
    baseline, before = next((scenario, totals["thickness"]) for scenario, totals in result.totals.items())
    for scenario, totals in result.totals.items():
        for i, activity in enumerate(animal.activities):
            title = f"{animal.species.name}, activity {activity:g}, {scenario}"
            yield title
            thickness = totals["thickness"].isel(activity=i).values
            shown = places.assign(thickness_m=thickness)
            if scenario != baseline:
                shown["change_m"] = thickness - before.isel(activity=i).values
            picture = figures.station_map(shown, title=title, regions=study.regions)
            figures.save(picture, _stem(folder, "map", animal.species.name, f"activity {activity:g}", scenario))


def _thickness_maps(study: Study, result: Results, folder: Path) -> Iterator[str]:
    animal = result.animal
    means = {scenario: _mean_over_time(totals) for scenario, totals in result.totals.items()}
    baseline = next(iter(means))
    for scenario, totals in means.items():
        for i, activity in enumerate(animal.activities):
            title = f"{animal.species.name}, activity {activity:g}, {scenario}"
            yield title
            before = None if scenario == baseline else means[baseline].isel(activity=i)
            picture = figures.thickness_map(totals.isel(activity=i), before, title=title, regions=study.regions)
            figures.save(picture, _stem(folder, "map", animal.species.name, f"activity {activity:g}", scenario))


def _mean_over_time(totals: xr.Dataset) -> xr.Dataset:
    thickness = totals[["thickness"]]
    return thickness.mean("time") if "time" in thickness.dims else thickness


def _is_section(columns: xr.Dataset) -> bool:
    """Whether the casts lie at three places at least, so that a section through them says something."""
    places = set(zip(columns["latitude"].values.tolist(), columns["longitude"].values.tolist(), strict=True))
    return len(places) >= 3


def _distance(columns: xr.Dataset) -> np.ndarray:
    """Distance along the casts in their order [km], on a sphere (haversine)."""
    latitude, longitude = (np.deg2rad(columns[name].values.astype(float)) for name in ("latitude", "longitude"))
    half = np.sin(np.diff(latitude) / 2) ** 2
    half += np.cos(latitude[:-1]) * np.cos(latitude[1:]) * np.sin(np.diff(longitude) / 2) ** 2
    return np.concatenate([[0.0], np.cumsum(2 * EARTH_RADIUS * np.arcsin(np.sqrt(half)))])


def _stem(folder: Path, *parts: str) -> Path:
    """Path of a picture without its ending: plain letters, digits, points and dashes, not long, and not yet taken."""
    words = (re.sub(r"[^\w.]+", "-", part, flags=re.ASCII).strip("-.").lower() for part in parts)
    name = "_".join(word for word in words if word)[:LONGEST_NAME]
    taken = {path.stem for path in folder.iterdir()}
    free = (candidate for number in count(2) if (candidate := f"{name}-{number}") not in taken)
    return folder / (name if name not in taken else next(free))
