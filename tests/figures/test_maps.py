"""Maps of grids and of casts."""

import numpy as np
import pytest
from matplotlib.colors import to_rgba
from scenes import places, texts, totals

from habitat import figures
from habitat.figures import maps
from habitat.regions import Region, box


def test_a_map_is_sorted_whatever_the_order_and_convention_of_longitudes():
    values = [[1.0, 2.0, 3.0, 4.0], [5.0, 6.0, 7.0, 8.0]]
    east = totals([10, 11], [178, 179, 180, 181], values)
    mixed = totals([11, 10], [-179, 178, -180, 179], [[8.0, 5.0, 7.0, 6.0], [4.0, 1.0, 3.0, 2.0]])
    pictures = [figures.thickness_map(grid, None, title="Prawn") for grid in (east, mixed)]
    for figure in pictures:
        mesh = figure.axes[0].collections[0]
        np.testing.assert_array_equal(mesh.get_array(), values)
        np.testing.assert_allclose(mesh.get_coordinates()[0, :, 0], [177.5, 178.5, 179.5, 180.5, 181.5])
        assert any(text.endswith("°E") for text in texts(figure))
        assert any(text.endswith("°W") for text in texts(figure))


def test_a_change_is_centred_on_zero_and_in_metres():
    before = totals([0, 1], [0, 1], [[100, 100], [100, np.nan]])
    after = totals([0, 1], [0, 1], [[40, 90], [110, np.nan]])
    figure = figures.thickness_map(after, before, title="Prawn, warmer")
    mesh = figure.axes[1].collections[0]
    np.testing.assert_array_equal(mesh.get_array().filled(np.nan), [[-60, -10], [10, np.nan]])
    assert (mesh.norm.vmin, mesh.norm.vmax) == (-60, 60)
    expected = {"thickness of viable water [m]", "change from the baseline [m]", "longitude [°]", "latitude [°]"}
    assert expected | {"Prawn, warmer", "land or no data"} <= set(texts(figure))


def test_no_viable_water_differs_from_no_data_and_from_little():
    figure = figures.thickness_map(totals([0, 1], [0, 1], [[0, 0.1], [500, np.nan]]), None, title="Prawn")
    axes = figure.axes[0]
    mesh = axes.collections[0]
    none, little, _, missing = mesh.to_rgba(mesh.get_array()).reshape(4, 4)
    assert tuple(none) == to_rgba("white")
    assert tuple(little) != tuple(none)
    assert missing[3] == 0  # transparent, so that the grey behind it shows
    assert axes.get_facecolor() == to_rgba(maps.NO_DATA)


@pytest.mark.parametrize("west", [-175.0, 185.0], ids=["-180 to 180", "0 to 360"])
def test_regions_are_outlined_in_the_longitudes_of_the_map_and_named(west):
    grid = totals([0, 5, 10], [180, 185, 190, 195], np.ones((3, 4)))
    regions = [box("northern box", west, west + 5, 4, 8), Region("everywhere")]
    figure = figures.thickness_map(grid, None, title="Prawn", regions=regions)
    (outline,) = figure.axes[0].lines
    assert (outline.get_xdata().min(), outline.get_xdata().max()) == (185, 190)
    assert {"1", "1 northern box"} <= set(texts(figure))
    assert "2 everywhere" not in texts(figure)


@pytest.mark.parametrize(
    "grid",
    [
        totals([0, 1], [0, 1], np.full((2, 2), np.nan)),
        totals([5], [100, 101, 102], [[1, 2, 3]]),
        totals([5], [100], [[7]]),
        totals([-89.5, 0, 89.5], [0, 120, 240], np.ones((3, 3))),
    ],
    ids=["all missing", "one row", "one cell", "globe"],
)
def test_poor_grids_are_drawn(tmp_path, grid):
    figure = figures.thickness_map(grid, grid, title="Prawn")
    figures.save(figure, tmp_path / "poor")
    assert figure.axes[0].collections[0].get_array().size >= grid["thickness"].size
    (west, east), (south, north) = figure.axes[0].get_xlim(), figure.axes[0].get_ylim()
    assert east - west >= 1
    assert north - south >= 1


@pytest.mark.parametrize("count", [1, 8, 500])
def test_casts_are_dots_at_their_places(tmp_path, count):
    casts = places(count)
    figure = figures.station_map(casts, title="Prawn")
    dots = figure.axes[0].collections[0]
    east, north = dots.get_offsets().T
    np.testing.assert_allclose(east % 360, casts["longitude"] % 360)
    np.testing.assert_allclose(north, casts["latitude"])
    np.testing.assert_array_equal(dots.get_array(), casts["thickness_m"])
    assert 8 <= dots.get_sizes()[0] <= 40  # points squared: 3 to 7 pt wide
    assert ("cast 0" in texts(figure)) == (count <= maps.NAMED_CASTS)
    figures.save(figure, tmp_path / "casts")


def test_a_cast_without_a_value_is_a_cross():
    figure = figures.station_map(places(3, thickness_m=[10.0, np.nan, 30.0]), title="Prawn")
    dots, crosses = figure.axes[0].collections
    assert (len(dots.get_offsets()), len(crosses.get_offsets())) == (2, 1)
    assert "no valid sample" in texts(figure)


def test_a_change_of_casts_is_a_second_map():
    figure = figures.station_map(
        places(3, change_m=[-20.0, 0.0, 5.0]), title="Prawn", regions=[box("b", -150, -140, 0, 20)]
    )
    dots = figure.axes[1].collections[0]
    assert (dots.norm.vmin, dots.norm.vmax) == (-20, 20)
    assert {"change from the baseline [m]", "1 b"} <= set(texts(figure))
