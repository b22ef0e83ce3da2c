"""Section through casts: zero lines, gaps and the sea floor."""

import numpy as np
import pytest
from scenes import drawn_beyond, section, texts, zero_lines

from habitat import figures


def test_lines_of_zero_margin_lie_where_the_margin_is_zero():
    figure = figures.section_picture(section(), title="Prawn, baseline")
    (at_higher_activity,) = zero_lines(figure.axes[0])
    np.testing.assert_allclose(at_higher_activity, 250.0, atol=1e-6)  # 20 - 250/50 = 15 kPa
    assert {"Prawn, baseline", "viable, activity factor 1", "viable, activity factor 1.5", "sea floor"} <= set(
        texts(figure)
    )


def test_a_section_runs_downward_with_units_and_stations():
    figure = figures.section_picture(section(), title="Prawn")
    axes = figure.axes[0]
    assert axes.get_ylim() == (pytest.approx(1.03 * 450), 0)
    assert axes.get_xlabel() == "distance along the section [km]"
    assert {"depth [m]", "oxygen partial pressure [kPa]", "A1", "A2", "A3"} <= set(texts(figure))


def test_a_deep_section_gives_the_upper_water_a_panel():
    deep = section(seabed=None)
    deep["depth"] = deep["depth"] * 10  # 4500 m
    figure = figures.section_picture(deep, title="Prawn")
    upper, lower = figure.axes[:2]
    assert upper.get_ylim() == (1000, 0)
    assert lower.get_ylim() == (pytest.approx(1.03 * 4500), 1000)
    assert "sea floor" not in texts(figure)


def test_casts_are_drawn_in_the_order_of_their_distance():
    sloping = section(po2=20.0 - np.arange(10.0) - np.array([[0.0], [2.0], [4.0]]))
    shuffled = figures.section_picture(sloping.isel(cast=[2, 0, 1]), title="Prawn")
    ordered = figures.section_picture(sloping, title="Prawn")
    for one, other in zip(zero_lines(shuffled.axes[0]), zero_lines(ordered.axes[0]), strict=True):
        np.testing.assert_array_equal(one, other)


def test_no_water_is_invented_across_a_gap():
    gappy = section()
    gappy["po2"] = gappy["po2"].where((gappy["depth"] <= 100) | (gappy["depth"] >= 400))  # 300 m, joined up to 200 m
    colours = figures.section_picture(gappy, title="Prawn").axes[0].collections[0]
    drawn = np.concatenate([path.vertices[:, 1] for path in colours.get_paths()])
    assert not ((drawn > 105) & (drawn < 395)).any()
    assert (drawn >= 395).any()


def test_no_water_is_invented_below_a_cast():
    shallow = section()
    shallow["po2"] = shallow["po2"].where((shallow["cast"] != "A2") | (shallow["depth"] <= 100))
    colours = figures.section_picture(shallow, title="Prawn").axes[0].collections[0]
    below = np.concatenate([path.vertices for path in colours.get_paths()])
    below = below[below[:, 1] > 105]
    assert len(below) == 0  # every interval touches the middle cast, which ends at 100 m


def test_station_names_are_thinned():
    many = section().isel(cast=[0] * 122)
    many = many.assign(distance=("cast", np.linspace(0, 5000, 122)))
    many = many.assign_coords(cast=[f"{i}-1" for i in range(122)])
    figure = figures.section_picture(many, title="Prawn")
    named = [text for text in texts(figure) if text.endswith("-1")]
    assert 4 <= len(named) <= 20
    assert drawn_beyond(figure) == []


@pytest.mark.parametrize("kept", [[0], [0, 1, 2]], ids=["one cast", "three casts"])
@pytest.mark.parametrize("missing", [False, True], ids=["sampled", "all missing"])
def test_poor_sections_are_drawn(tmp_path, kept, missing):
    poor = section(po2=np.full((3, 10), np.nan) if missing else None).isel(cast=kept)
    figure = figures.section_picture(poor, title="Prawn")
    figures.save(figure, tmp_path / "poor")
    assert ("too few valid samples" in texts(figure)) == missing
