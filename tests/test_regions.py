"""Which columns lie in a region, and the area that each stands for."""

import json

import numpy as np
import pytest
import xarray as xr
from hypothesis import example, given
from hypothesis import strategies as st

from habitat.errors import InputError
from habitat.regions import EARTH_RADIUS, EVERYWHERE, Region, box, column_areas, read_polygons


def casts(longitudes, latitudes):
    places = {"longitude": ("cast", np.array(longitudes, float)), "latitude": ("cast", np.array(latitudes, float))}
    return xr.Dataset(coords=places, attrs={"form": "casts"})


def grid(longitudes, latitudes):
    return xr.Dataset(coords={"longitude": longitudes, "latitude": latitudes}, attrs={"form": "grid"})


def write_geojson(path, *features):
    path.write_text(json.dumps({"type": "FeatureCollection", "features": list(features)}), encoding="utf-8")
    return path


def polygon(*corners, kind="Polygon", **properties):
    rings = [[*corners, corners[0]]]
    geometry = {"type": kind, "coordinates": [rings] if kind == "MultiPolygon" else rings}
    return {"type": "Feature", "properties": properties, "geometry": geometry}


# --- boxes -------------------------------------------------------------------------------------------------------


def test_a_box_holds_its_inside_and_its_edge():
    inside = box("b", -120, -110, 20, 28).contains(casts([-120, -115, -110, -109.9, -115], [20, 24, 28, 24, 28.1]))
    assert inside.values.tolist() == [True, True, True, False, False]


def test_a_box_across_the_date_line():
    longitudes = [169, 170, 179, 180, -180, 181, -179, 190, -170, -169, 0]
    inside = box("b", 170, -170, -10, 10).contains(casts(longitudes, [0] * len(longitudes)))
    assert inside.values.tolist() == [False] + [True] * 8 + [False, False]


def test_a_box_in_the_other_convention():
    assert box("b", 240, 250, -10, 10).contains(casts([-115, 245, 115], [0, 0, 0])).values.tolist() == [
        True,
        True,
        False,
    ]


def test_a_box_all_the_way_round():
    longitudes = np.arange(-180, 540, 7.5)
    assert box("b", -180, 180, -90, 90).contains(casts(longitudes, np.zeros(longitudes.size))).all()


def test_a_box_on_a_grid():
    inside = box("b", 10, 20, 0, 5).contains(grid([5.0, 15.0, 25.0], [-1.0, 1.0]))
    assert inside.transpose("latitude", "longitude").values.tolist() == [[False] * 3, [False, True, False]]


def test_everywhere_holds_every_column():
    assert Region(EVERYWHERE).contains(casts([0, 190, -170], [89, -89, 0])).all()
    assert Region(EVERYWHERE).contains(grid([0.0, 1.0], [3.0])).sizes == {"longitude": 2, "latitude": 1}


TENTHS = st.integers(-1800, 1800).map(lambda tenths: tenths / 10)


@example(west=-179.7, width=100, turns=-360.0)  # (west - 360 - west) % 360 is a hair less than 360
@given(west=TENTHS, width=st.integers(1, 1800), turns=st.sampled_from([-360.0, 0.0, 360.0]))
def test_the_edges_of_a_box_are_inside_in_every_longitude_convention(west, width, turns):
    east = round(west + width / 10, 1)
    region = box("b", west, east, -10, 10)
    inside = region.contains(casts([west + turns, east + turns, west - 0.1 + turns, east + 0.1 + turns], [0] * 4))
    assert inside.values.tolist() == [True, True, False, False]


@given(longitudes=st.lists(st.floats(-180, 180), min_size=1, max_size=8), west=TENTHS, east=TENTHS)
def test_the_longitude_convention_does_not_matter(longitudes, west, east):
    if west == east:
        east += 1.0
    region = box("b", west, east, -10, 10)
    latitudes = [0.0] * len(longitudes)
    here = region.contains(casts(longitudes, latitudes))
    there = region.contains(casts(np.array(longitudes) % 360.0, latitudes))
    xr.testing.assert_identical(here, there)


@pytest.mark.parametrize(
    ("limits", "message"),
    [
        ((0, 10, 5, 5), r"^region 'b': latitudes 5 to 5; expected box = \[west, east, south, north\] with -90"),
        ((0, 10, 28, 20), r"latitudes 28 to 20"),
        ((-30, 30, -100, 20), r"latitudes -100 to 20"),
        ((0, 10, float("nan"), 20), r"latitudes nan to 20"),
        ((7, 7, 0, 20), r"^region 'b': longitudes 7 to 7; expected two different meridians"),
        ((0, float("inf"), 0, 20), r"longitudes 0 to inf"),
    ],
)
def test_an_impossible_box_is_refused(limits, message):
    with pytest.raises(InputError, match=message):
        box("b", *limits)


# --- polygons ----------------------------------------------------------------------------------------------------


def test_polygons_are_named_by_their_property_or_numbered(tmp_path):
    triangle = [(0, 0), (10, 0), (0, 10)]
    path = write_geojson(tmp_path / "p.geojson", polygon(*triangle, name="shelf"), polygon(*triangle))
    assert [region.name for region in read_polygons(path, "coast")] == ["shelf", "coast 2"]
    single = write_geojson(tmp_path / "q.geojson", polygon(*triangle))
    assert [region.name for region in read_polygons(single, "coast")] == ["coast"]


def test_a_triangle_holds_its_inside(tmp_path):
    (region,) = read_polygons(write_geojson(tmp_path / "p.geojson", polygon((0, 0), (10, 0), (0, 10))), "t")
    assert region.contains(casts([1, 361, 5, 6, -1], [1, 1, 5, 6, 1])).values.tolist() == [True] * 3 + [False] * 2


@pytest.mark.parametrize("west", [-180.0, 180.0])
def test_a_polygon_across_the_date_line(tmp_path, west):
    # RFC 7946 section 3.1.9 wants it cut in two there; drawn on from 180 it is read as well.
    east_of_it = [[[-180, 0], [-170, 0], [-170, 5], [-180, 5], [-180, 0]]]
    parts = {
        -180.0: [[[[175, 0], [180, 0], [180, 5], [175, 5], [175, 0]]], east_of_it],
        180.0: [[[[175, 0], [190, 0], [190, 5], [175, 5], [175, 0]]]],
    }[west]
    feature = {"type": "Feature", "properties": None, "geometry": {"type": "MultiPolygon", "coordinates": parts}}
    (region,) = read_polygons(write_geojson(tmp_path / "p.geojson", feature), "d")
    inside = region.contains(casts([174, 176, 180, -180, -175, 185, -169], [2] * 7))
    assert inside.values.tolist() == [False, True, True, True, True, True, False]


def test_a_bare_geometry_and_a_byte_order_mark(tmp_path):
    path = tmp_path / "p.geojson"
    geometry = polygon((0, 0), (10, 0), (0, 10))["geometry"]
    path.write_text(json.dumps(geometry), encoding="utf-8-sig")
    assert [region.name for region in read_polygons(path, "coast")] == ["coast"]


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("{", r"p\.geojson: not readable as GeoJSON"),
        ("[1, 2]", r"p\.geojson: no polygon in the file; expected GeoJSON with Polygon or MultiPolygon features"),
        ('{"features": null}', r"no polygon in the file"),
        ('{"features": [3]}', r"no polygon in the file"),
        ('{"features": [{"geometry": null}]}', r"no polygon in the file"),
        ('{"type": "Point", "coordinates": [1, 2]}', r"no polygon in the file"),
        ('{"type": "Polygon", "coordinates": [[[0, 0], [1, 1]]]}', r"polygon 't' is damaged"),
        (
            '{"type": "Polygon", "coordinates": [[[0, 0], [2, 2], [2, 0], [0, 2], [0, 0]]]}',
            r"polygon 't' is not valid: Self-intersection.*; redraw it without crossings",
        ),
        (
            '{"type": "Polygon", "coordinates": [[[0, 120], [5, 120], [5, 130], [0, 120]]]}',
            r"polygon 't' reaches latitudes 120 to 130; expected positions as \[longitude, latitude\]",
        ),
    ],
)
def test_a_file_without_a_usable_polygon_is_refused(text, message, tmp_path):
    path = tmp_path / "p.geojson"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError, match=message):
        read_polygons(path, "t")


def test_a_missing_polygon_file_is_named(tmp_path):
    with pytest.raises(InputError, match=r"p\.geojson: file not found; check polygon in region 't'"):
        read_polygons(tmp_path / "p.geojson", "t")


# --- areas -------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "latitudes",
    [np.arange(-89.5, 90), np.arange(-90.0, 91, 2), np.arange(89.5, -90, -1), [-85, -60, -20, 0, 10, 50, 85]],
)
@pytest.mark.parametrize("longitudes", [np.arange(0.5, 360), np.arange(-180.0, 180, 5), np.r_[150.5:180, -179.5:150]])
def test_areas_of_the_globe_sum_to_the_sphere(latitudes, longitudes):
    area = column_areas(grid(longitudes, np.array(latitudes, float)))
    # 4 pi R^2; uneven latitudes leave the poles out: cells reach to -97.5, cut at -90, and to 102.5, cut at 90.
    assert float(area.sum()) == pytest.approx(4 * np.pi * EARTH_RADIUS**2, rel=1e-12)
    assert area.dims == ("latitude", "longitude")


def test_a_one_degree_cell_at_the_equator():
    # 2 pi 6371 km / 360 = 111.1949 km a degree, squared: 12364.3 km2; half a degree from the equator the cosine is 1.
    area = column_areas(grid([10.0, 11.0, 12.0], [-1.0, 0.0, 1.0]))
    assert float(area[1, 1]) == pytest.approx(111.1949**2, rel=2e-5)
    assert area.attrs["units"] == "km2"


@pytest.mark.parametrize(("latitude", "share"), [(0.0, 1.0), (60.0, 0.5), (90.0, 0.0)])
def test_a_lone_column_stands_for_a_square_degree(latitude, share):
    area = float(column_areas(grid([10.0], [latitude])).squeeze())
    # The cap of half a degree about a pole is 111.19^2 (pi/180) / 8 km2 wide, one degree of longitude.
    expected = share * 111.1949**2 if share else 111.1949**2 * np.pi / 180 / 8
    assert area == pytest.approx(expected, rel=1e-4)


def test_casts_have_no_area():
    assert column_areas(casts([0], [0])) is None
