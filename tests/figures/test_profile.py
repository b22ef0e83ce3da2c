"""Profile of one cast: bands, lines and flags lie where the tables say."""

import numpy as np
import pandas as pd
import pytest
import xarray as xr
from scenes import DEPTHS, LONG, PO2, PRAWN, drawn_beyond, empty_row, profile, rectangles, row, texts

from habitat import figures
from habitat.ocean import open_ocean
from habitat.viability import band_table, oxygen_pressure


def test_bars_and_shading_lie_at_the_edges_of_the_table():
    bands = pd.DataFrame(
        [
            row(upper=0.0, lower=284.25),
            row(band=2, upper=680.5, lower=990.0, lower_edge="deepest sample"),
            row(activity=2.5, lower=250.0),
            row(scenario="warmer", lower=270.0),
            empty_row(scenario="warmer", activity=2.5),
        ]
    )
    figure = figures.profile_picture(profile(DEPTHS, PO2, ("baseline", "warmer")), bands, title="Prawn, cast 7")
    water, bars = figure.axes
    assert rectangles(bars) == [(0, 250), (0, 270), (0, 284.25), (680.5, 990)]
    assert rectangles(water) == [(0, 250), (0, 284.25), (680.5, 990)]  # the baseline only
    assert {"none viable", "ends where the data end", "A", "B", "Prawn, cast 7"} <= set(texts(figure))


def test_depth_runs_downward_and_axes_carry_units():
    water, bars = figures.profile_picture(profile(DEPTHS, PO2), pd.DataFrame([row()]), title="Prawn").axes
    for axes in (water, bars):
        lower, upper = axes.get_ylim()
        assert (upper, lower) == (0, pytest.approx(1.02 * 990))
    assert water.get_ylabel() == "depth [m]"
    assert water.get_xlabel() == "oxygen partial pressure [kPa]"


def test_lines_hold_the_pressures_and_the_needs():
    water, _ = figures.profile_picture(profile(DEPTHS, PO2), pd.DataFrame([row()]), title="Prawn").axes
    lines = [line.get_xdata() for line in water.lines if len(line.get_xdata()) == len(DEPTHS)]
    np.testing.assert_array_equal(lines[0], PO2)
    for needed in (2.0, 5.0):  # 2 kPa at rest, 2.5 times as much at the higher activity
        assert sum(np.all(line == needed) for line in lines) == 2  # the line and its marks


def test_lines_differ_by_more_than_colour():
    bands = pd.DataFrame([row(), row(scenario="warmer")])
    figure = figures.profile_picture(profile(DEPTHS, PO2, ("baseline", "warmer")), bands, title="Prawn")
    styles = [(str(line.get_linestyle()), line.get_marker()) for line in figure.legends[0].get_lines()]
    assert len(styles) == len(set(styles)) == 4  # two scenarios, two activities


def test_the_5_to_95_percent_of_an_edge_is_drawn_over_its_bar():
    edges = {"upper_m_p05": 0.0, "upper_m_p95": 0.0, "lower_m_p05": 180.0, "lower_m_p95": 230.0}
    figure = figures.profile_picture(profile(DEPTHS, PO2), pd.DataFrame([row(**edges)]), title="Prawn")
    spans = [tuple(line.get_ydata()) for line in figure.axes[1].lines if len(line.get_ydata()) == 2]
    assert spans == [(180.0, 230.0)]  # the surface does not move
    assert "5–95 % of an edge" in texts(figure)
    assert any("5–95 % of the need" in text for text in texts(figure))


def test_without_uncertainty_nothing_speaks_of_it():
    certain = row(upper_m_per_kpa=0.0, lower_m_per_kpa=12.0)
    picture = figures.profile_picture(profile(DEPTHS, PO2, uncertainty=False), pd.DataFrame([certain]), title="Prawn")
    assert not any("5–95" in text for text in texts(picture))


def test_a_deep_cast_is_cut_below_its_crossings_and_says_so():
    depth = np.arange(0.0, 4150.0, 50.0)
    po2 = np.interp(depth, [0, 700, 4100], [20.0, 1.0, 14.0])
    bands = pd.DataFrame([row(lower=650.0), row(band=2, upper=960.0, lower=4142.0, lower_edge="seabed")])
    water, bars = figures.profile_picture(profile(depth, po2), bands, title="Prawn").axes
    assert water.get_ylim() == (1250, 0)  # 1.3 times the deepest crossing, rounded up to 50 m
    assert water.get_ylabel() == "depth [m] (cut: the cast continues to 4142 m)"
    assert (960, 4142) in rectangles(bars)  # the bar itself is not shortened


def test_flags_are_shown():
    flags = "joined:1;outside-temperature-range;vanishes-at-p95"
    found = texts(figures.profile_picture(profile(DEPTHS, PO2), pd.DataFrame([row(flags=flags)]), title="Prawn"))
    assert "*?" in found
    assert {"* beyond measured temperatures", "? may not exist (chance above 5 %)"} <= set(found)


def test_lone_samples_between_missing_ones_are_dots():
    po2 = [20.0, np.nan, 15.0, np.nan, 10.0, 9.0]
    water, _ = figures.profile_picture(profile(range(0, 60, 10), po2), pd.DataFrame([row()]), title="Prawn").axes
    dots = [line for line in water.lines if line.get_marker() == "." and len(line.get_ydata())]
    assert [list(line.get_ydata()) for line in dots] == [[0, 20]]


@pytest.mark.parametrize(
    ("depth", "po2", "bands", "said"),
    [
        ([110.0], [12.0], [row(upper=110.0, lower=110.0, upper_edge="shallowest sample")], "ends where the data end"),
        ([110.0], [np.nan], [empty_row(flags="no-valid-sample")], "no valid sample"),
        ([], [], [empty_row(flags="no-valid-sample")], "no valid sample"),
        ([0.0, 50.0], [1.0, 1.0], [empty_row()], "none viable"),
    ],
    ids=["one sample", "all missing", "no level", "no band"],
)
def test_poor_casts_are_drawn(tmp_path, depth, po2, bands, said):
    figure = figures.profile_picture(profile(depth, po2), pd.DataFrame(bands), title="Prawn")
    figures.save(figure, tmp_path / "poor")
    assert said in texts(figure)


def test_long_names_and_many_lines_stay_on_the_page():
    scenarios, activities = ("baseline", LONG, "W" * 80, "cooler"), (1.0, 2.0, 3.5)
    bands = pd.DataFrame([row(scenario=s, activity=a) for s in scenarios for a in activities])
    figure = figures.profile_picture(profile(DEPTHS, PO2, scenarios, activities), bands, title=f"{LONG} {LONG}")
    assert drawn_beyond(figure) == []
    assert any("$warming$" in text for text in texts(figure))
    assert len(rectangles(figure.axes[1])) == 12


def test_a_real_deep_cast(shared_data, tmp_path):
    """WOCE line P02, station 175: 4142 m deep, with an oxygen minimum between two viable bands."""
    columns = open_ocean([shared_data / "casts" / "p02_2004a_00175_00002_ct1.csv"])
    bands = band_table(columns, PRAWN, [1.0, 2.5])
    need = xr.concat(
        [a * PRAWN.pcrit(columns["temperature"]) for a in (1.0, 2.5)], pd.Index([1.0, 2.5], name="activity")
    )
    cast = xr.Dataset({"po2": oxygen_pressure(columns), "needed": need}).isel(cast=0).expand_dims(scenario=["baseline"])
    cast["depth"] = columns["depth"].isel(cast=0)
    figure = figures.profile_picture(cast, bands, title="Example prawn, cast 175-2")
    figures.save(figure, tmp_path / "p02")
    edges = bands[["upper_m", "lower_m"]].astype(float).sort_values(["upper_m", "lower_m"])
    assert len(edges) == 4
    np.testing.assert_allclose(rectangles(figure.axes[1]), edges.to_numpy())
    assert "continues to 4142 m" in figure.axes[0].get_ylabel()
