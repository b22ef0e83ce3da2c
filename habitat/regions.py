"""Regions of a report: boxes and polygons, and how much each column weighs."""

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import shapely
import xarray as xr

from habitat.errors import InputError

EARTH_RADIUS = 6371.0
"""Radius of the sphere on which areas are computed [km]."""

COORDINATE_DIGITS = 9
"""Decimals of a degree that count: 0.1 mm on the ground."""

EVERYWHERE = "everywhere"


@dataclass(frozen=True)
class Region:
    """A named part of the map.

    Attributes
    ----------
    name : str
    shape : shapely.Geometry or None
        In degrees east and north, longitudes continuous (a shape across the date line runs beyond 180); None means
        everywhere.
    """

    name: str
    shape: shapely.Geometry | None = None

    def contains(self, columns: xr.Dataset) -> xr.DataArray:
        """Whether each column lies inside or on the edge of the region, whatever the longitude convention."""
        longitude, latitude = xr.broadcast(columns["longitude"], columns["latitude"])
        if self.shape is None:
            return xr.ones_like(longitude, dtype=bool).drop_vars(longitude.coords)
        west = self.shape.bounds[0]
        around = west + (longitude - west).round(COORDINATE_DIGITS) % 360.0
        around = around.round(COORDINATE_DIGITS)  # else rounding would put some points of the edge outside
        inside = shapely.intersects_xy(self.shape, around.to_numpy(), latitude.to_numpy())
        return xr.DataArray(inside, dims=longitude.dims)


def box(name: str, west: float, east: float, south: float, north: float) -> Region:
    """Region between two meridians and two parallels; west > east crosses the date line.

    Raises
    ------
    InputError
        South is not below north, a latitude is beyond 90 degrees, or west and east are the same.
    """
    if not -90 <= south < north <= 90:
        raise InputError(
            f"latitudes {south} to {north}",
            where=f"region '{name}'",
            expected="box = [west, east, south, north] with -90 <= south < north <= 90",
        )
    if not np.isfinite([west, east]).all() or west == east:
        raise InputError(
            f"longitudes {west} to {east}",
            where=f"region '{name}'",
            expected="two different meridians; [-180, 180] goes all the way round",
        )
    if west > east:
        east += 360.0
    return Region(name, shapely.box(west, south, east, north))


def read_polygons(path: str | Path, name: str) -> list[Region]:
    """Read regions from a GeoJSON file, one for each polygon feature.

    A feature is called by its property ``name``; without one, by `name` and its number.

    Raises
    ------
    InputError
        The file is missing, not GeoJSON, or holds no polygon.
    """
    path = Path(path)
    try:
        content = json.loads(path.read_text(encoding="utf-8-sig"))
    except FileNotFoundError:
        raise InputError("file not found", where=str(path), remedy=f"check polygon in region '{name}'") from None
    except (OSError, ValueError) as error:
        raise InputError(f"not readable as GeoJSON ({error})", where=str(path)) from None
    features = content.get("features", [content]) if isinstance(content, dict) else []
    features = [feature for feature in features or [] if isinstance(feature, dict)]
    regions = []
    for number, feature in enumerate(features, start=1):
        geometry = feature.get("geometry", feature)
        if not isinstance(geometry, dict) or geometry.get("type") not in ("Polygon", "MultiPolygon"):
            continue
        label = (feature.get("properties") or {}).get("name") or (name if len(features) == 1 else f"{name} {number}")
        regions.append(Region(str(label), _shape(geometry, path, label)))
    if not regions:
        raise InputError(
            "no polygon in the file", where=str(path), expected="GeoJSON with Polygon or MultiPolygon features"
        )
    return regions


def _shape(geometry: dict, path: Path, label: str) -> shapely.Geometry:
    try:
        shape = shapely.from_geojson(json.dumps(geometry))
    except shapely.GEOSException as error:
        raise InputError(f"polygon '{label}' is damaged ({error})", where=str(path)) from None
    south, north = shape.bounds[1], shape.bounds[3]
    if not -90 <= south <= north <= 90:
        raise InputError(
            f"polygon '{label}' reaches latitudes {south:g} to {north:g}",
            where=str(path),
            expected="positions as [longitude, latitude]",
        )
    if not shapely.is_valid(shape):
        reason = shapely.is_valid_reason(shape)
        raise InputError(
            f"polygon '{label}' is not valid: {reason}", where=str(path), remedy="redraw it without crossings"
        )
    return shape


def column_areas(columns: xr.Dataset) -> xr.DataArray | None:
    """Area that each column of a grid stands for [km2], on a sphere; None for casts, which stand for themselves.

    Cells reach half-way to their neighbours: ``R^2 dlon (sin north - sin south)``.
    """
    if columns.attrs.get("form") != "grid":
        return None
    south, north = _cell_limits(columns["latitude"].to_numpy(), limit=90.0)
    west, east = _cell_limits(np.unwrap(columns["longitude"].to_numpy(), period=360.0), limit=np.inf)
    band = EARTH_RADIUS**2 * np.abs(np.sin(np.deg2rad(north)) - np.sin(np.deg2rad(south)))
    area = band[:, None] * np.deg2rad(np.abs(east - west))[None, :]
    return xr.DataArray(area, dims=("latitude", "longitude"), attrs={"units": "km2", "long_name": "cell area"})


def _cell_limits(centres: np.ndarray, limit: float) -> tuple[np.ndarray, np.ndarray]:
    """Limits half-way between centres; a lone centre stands for one degree."""
    centres = centres.astype(float)
    if centres.size == 1:
        limits = centres + np.array([-0.5, 0.5])
    else:
        middle = (centres[:-1] + centres[1:]) / 2
        first, last = 1.5 * centres[0] - 0.5 * centres[1], 1.5 * centres[-1] - 0.5 * centres[-2]
        limits = np.concatenate([[first], middle, [last]])
    return np.clip(limits[:-1], -limit, limit), np.clip(limits[1:], -limit, limit)
