"""Findings: weighted quantiles, and regional values worked by hand."""

import itertools
import math

import numpy as np
import pytest
import xarray as xr
from columns_by_hand import casts, four_casts, grid, regional_findings, totals_of
from hypothesis import given
from hypothesis import strategies as st

from habitat.findings import FINDINGS_COLUMNS, weighted_quantiles
from habitat.regions import EVERYWHERE, Region, box

NAN = np.nan

numbers = st.floats(-1e6, 1e6, allow_subnormal=False)
some_numbers = st.lists(numbers, min_size=1, max_size=30)


# --- weighted quantiles ------------------------------------------------------------------------------------------


def slow_quantile(values, weights, quantile):
    """One quantile with loops, from the definition: each value at the middle of its share, straight lines between."""
    given = [(v, w) for v, w in zip(values, weights, strict=True) if not math.isnan(v)]
    pairs = sorted((v, sum(w for u, w in given if u == v) / sum(u == v for u, _ in given)) for v, _ in given)
    total, before, places = sum(w for _, w in pairs), 0.0, []
    for value, weight in pairs:
        places.append(((before + weight / 2) / total, value))
        before += weight
    if quantile <= places[0][0]:
        return places[0][1]
    for (p0, v0), (p1, v1) in itertools.pairwise(places):
        if quantile <= p1:
            return v0 + (v1 - v0) * (quantile - p0) / (p1 - p0)
    return places[-1][1]


@given(some_numbers)
def test_with_equal_weights_the_middle_is_the_usual_median(values):
    middle = weighted_quantiles(np.array(values), np.full(len(values), 3.0), [0.5])
    assert middle == pytest.approx(np.median(values), rel=1e-9, abs=1e-6)


@given(some_numbers)
def test_equal_weights_give_the_plotting_positions_of_hazen(values):
    wanted = np.quantile(values, [0.05, 0.3, 0.95], method="hazen")
    found = weighted_quantiles(np.array(values), np.ones(len(values)), [0.05, 0.3, 0.95])
    assert found == pytest.approx(wanted, rel=1e-9, abs=1e-6)


@given(st.lists(st.tuples(numbers, st.floats(0.01, 100)), min_size=1, max_size=20), st.floats(0, 1))
def test_weighted_quantiles_are_those_of_the_definition(pairs, quantile):
    values, weights = map(np.array, zip(*pairs, strict=True))
    found = weighted_quantiles(values, weights, [quantile]).item()
    assert found == pytest.approx(slow_quantile(values, weights, quantile), rel=1e-6, abs=1e-4)


@given(st.lists(st.tuples(st.integers(-99, 99), st.integers(1, 9)), min_size=1, max_size=12), st.randoms())
def test_the_order_of_values_does_not_matter(pairs, random):
    mixed = random.sample(pairs, len(pairs))
    quantiles = [0.05, 0.5, 0.95]
    first, second = (
        weighted_quantiles(np.array(v, dtype=float), np.array(w, dtype=float), quantiles)
        for v, w in (zip(*pairs, strict=True), zip(*mixed, strict=True))
    )
    np.testing.assert_allclose(first, second, atol=1e-9)


def test_weights_are_repetitions_when_each_value_is_many():
    rng = np.random.default_rng(1)
    values, weights = rng.normal(100, 20, 400), rng.integers(1, 6, 400)
    repeated = np.repeat(values, weights)
    found = weighted_quantiles(values, weights.astype(float), [0.05, 0.5, 0.95])
    # One of 400 values is worth 0.25 %; between neighbours near the 5 % tail lie about 0.5 m.
    np.testing.assert_allclose(found, np.quantile(repeated, [0.05, 0.5, 0.95], method="hazen"), atol=1.0)


def test_a_heavy_value_draws_the_median_to_itself():
    # Shares 0.1, 0.1, 0.8 have their middles at 0.05, 0.15, 0.6; 0.5 lies 0.35/0.45 of the way from 20 to 30.
    assert weighted_quantiles(np.array([10.0, 20.0, 30.0]), np.array([1.0, 1.0, 8.0]), [0.5]).item() == pytest.approx(
        20 + 10 * 0.35 / 0.45
    )


def test_missing_values_are_left_out_with_their_weight():
    values = np.array([[1.0, NAN, 3.0], [NAN, NAN, NAN]])
    found = weighted_quantiles(values, np.array([1.0, 1000.0, 1.0]), [0.5])
    np.testing.assert_array_equal(found, [[2.0, NAN]])


# --- findings by hand --------------------------------------------------------------------------------------------


def test_casts_by_hand():
    found = regional_findings(casts(), {"baseline": four_casts()}, None, [Region(EVERYWHERE)], "prawn")
    assert list(found.columns) == list(FINDINGS_COLUMNS)
    row = found.iloc[0]
    assert (row["species"], row["activity"], row["scenario"], row["region"]) == ("prawn", 1.0, "baseline", EVERYWHERE)
    assert (row["columns"], row["columns_without_data"]) == (3, 1)
    assert row["viable_share"] == pytest.approx(2 / 3)
    assert row["upper_m"] == 5.0  # of 0 and 10
    assert row["lower_m"] == 155.0  # of 100 and 210
    assert row["thickness_m"] == 60.0  # of 100, 60 and 0: no viable water counts as 0 m
    assert row["thickness_m_columns_p05"] == 0.0  # below the middle of the first third
    assert row["thickness_m_columns_p95"] == 100.0
    assert row["thickness_change_m"] == 0.0
    physiology = [name for name in found if "physiology" in name]
    assert len(physiology) == 12
    assert row[physiology].isna().all()
    assert math.isnan(row["viable_volume_km3"])  # casts have no area


def test_a_grid_is_weighed_by_area_and_its_volume_is_that_of_the_cells():
    # Cells of 1 degree around 0.5 and 59.5 N: R^2 dlon (sin 1 - sin 0) and R^2 dlon (sin 60 - sin 59), R = 6371 km.
    equator = 6371.0**2 * math.radians(1) * math.sin(math.radians(1))
    north = 6371.0**2 * math.radians(1) * (math.sin(math.radians(60)) - math.sin(math.radians(59)))
    columns = grid([0.5, 1.5], [0.5, 1.5])
    totals = totals_of([[0, NAN], [NAN, NAN]], [[50, NAN], [NAN, NAN]], [[50, 0], [NAN, 0]], ["latitude", "longitude"])
    row = regional_findings(columns, {"baseline": totals}, None, [box("south", 0, 2, 0, 1)], "prawn").iloc[0]
    assert row["viable_volume_km3"] == pytest.approx(equator * 0.050, rel=1e-9)
    assert row["viable_share"] == pytest.approx(0.5)
    columns = grid([0.5, 30.0, 59.5], [0.5, 1.5])  # cells half-way: 0.5 reaches to 15.25, 59.5 from 44.75
    limits = [math.sin(math.radians(x)) for x in (-14.25, 15.25, 44.75, 74.25)]
    low, _, high = (b - a for a, b in itertools.pairwise(limits))
    thickness = [[10.0, 10.0], [NAN, NAN], [NAN, 0.0]]
    edges = [[1.0, 1.0], [NAN, NAN], [NAN, NAN]]
    totals = totals_of(edges, edges, thickness, ["latitude", "longitude"])
    row = regional_findings(columns, {"baseline": totals}, None, [Region(EVERYWHERE)], "prawn").iloc[0]
    assert row["viable_share"] == pytest.approx(2 * low / (2 * low + high), rel=1e-9)
    assert (row["columns"], row["columns_without_data"]) == (3, 3)
    assert north < equator  # the premise: a cell in the north is smaller


def test_volume_is_the_mean_over_times_and_dimensions_may_come_in_any_order():
    columns = grid([0.5, 1.5], [0.5, 1.5])
    one = np.array([[40.0, 0.0], [0.0, 0.0]])
    both = totals_of(
        np.stack([one, 3 * one]), np.stack([one, 3 * one]), np.stack([one, 3 * one]), ["time", "latitude", "longitude"]
    )
    single = totals_of(2 * one, 2 * one, 2 * one, ["latitude", "longitude"])
    findings = [
        regional_findings(columns, {"baseline": totals}, None, [Region(EVERYWHERE)], "prawn").iloc[0]
        for totals in (both, both.transpose("activity", "longitude", "time", "latitude"), single)
    ]
    volumes = [row["viable_volume_km3"] for row in findings]
    assert volumes[0] == pytest.approx(volumes[2], rel=1e-12)
    assert volumes[1] == pytest.approx(volumes[2], rel=1e-12)
    assert [row["columns"] for row in findings] == [8, 8, 4]


def test_a_region_across_the_date_line_takes_both_sides():
    columns = casts(latitude=[0, 0, 0, 0], longitude=[179.0, -179.0, 181.0, 0.0])
    totals = totals_of([0, 0, 0, 0], [10, 20, 30, 999], [10, 20, 30, 999], ["cast"])
    row = regional_findings(columns, {"baseline": totals}, None, [box("line", 170, -170, -5, 5)], "prawn").iloc[0]
    assert (row["columns"], row["thickness_m"]) == (3, 20.0)


def test_a_region_without_columns_has_a_row_that_says_so():
    found = regional_findings(casts(), {"baseline": four_casts()}, None, [box("far", 100, 110, 40, 50)], "prawn")
    assert (found["columns"].item(), found["columns_without_data"].item()) == (0, 0)
    assert found[["viable_share", "upper_m", "thickness_m", "thickness_change_m"]].isna().to_numpy().all()


def test_changes_are_against_the_first_ocean_at_the_same_activity():
    baseline = xr.concat([four_casts(), four_casts()], "activity").assign_coords(activity=[1.0, 2.0])
    baseline["thickness"] = baseline["thickness"] * xr.DataArray([1.0, 0.5], dims="activity")
    warmer = baseline.assign(thickness=baseline["thickness"] * 0.75)
    totals = {"baseline": baseline, "warmer": warmer}
    found = regional_findings(casts(), totals, None, [Region(EVERYWHERE), box("two", 9.5, 11.5, -1, 1)], "prawn")
    order = list(zip(found["activity"], found["scenario"], found["region"], strict=True))
    assert order[:4] == [(1.0, s, r) for r in (EVERYWHERE, "two") for s in ("baseline", "warmer")]
    assert {activity for activity, *_ in order[4:]} == {2.0}
    everywhere = found[(found["region"] == EVERYWHERE) & (found["scenario"] == "warmer")]
    assert everywhere["thickness_change_m"].tolist() == [-15.0, -7.5]  # a quarter of the medians 60 and 30
    assert everywhere["thickness_change_percent"].tolist() == [-25.0, -25.0]
    two = found[(found["region"] == "two") & (found["scenario"] == "warmer")]
    assert two["thickness_change_m"].tolist() == [-20.0, -10.0]  # a quarter of the medians 80 and 40


def test_there_is_no_percentage_of_nothing():
    nothing = totals_of([NAN] * 4, [NAN] * 4, [0.0] * 4, ["cast"])
    found = regional_findings(casts(), {"baseline": nothing, "better": four_casts()}, None, [Region("all")], "prawn")
    better = found.iloc[1]
    assert better["thickness_change_m"] == 60.0
    assert math.isnan(better["thickness_change_percent"])
    assert found.iloc[0]["viable_share"] == 0.0


def test_physiology_quantiles_are_taken_over_draws_of_the_regional_value():
    """Draw k gives the two casts k and k + 10 m, so the median over casts is k + 5; then quantiles over k = 0..20."""
    draws = np.arange(21.0)
    thickness = np.stack([draws, draws + 10], axis=-1)
    upper = np.where(draws[:, None] < 7, NAN, np.full_like(thickness, 5.0))  # in a third of the draws nothing is viable

    def drawn(factor):
        arrays = {"upper": upper, "lower": thickness * factor, "thickness": thickness * factor}
        data = {name: (("activity", "draw", "cast"), values[None]) for name, values in arrays.items()}
        return xr.Dataset(data, coords={"activity": [1.0]})

    columns = casts(latitude=[0.0, 0.0], longitude=[10.0, 11.0])
    centre = totals_of([0, 0], [10, 20], [10, 20], ["cast"])
    found = regional_findings(
        columns,
        {"baseline": centre, "half": centre},
        {"baseline": drawn(1.0), "half": drawn(0.5)},
        [Region("all")],
        "p",
    )
    baseline, half = found.iloc[0], found.iloc[1]
    assert baseline["thickness_m_physiology_p05"] == pytest.approx(6.0)  # 5 % and 95 % of 0..20 are 1 and 19
    assert baseline["thickness_m_physiology_p95"] == pytest.approx(24.0)
    assert (baseline["viable_share_physiology_p05"], baseline["viable_share_physiology_p95"]) == (0.0, 1.0)
    # Draws without an edge are left out.
    assert (baseline["upper_m_physiology_p05"], baseline["upper_m_physiology_p95"]) == (5.0, 5.0)
    assert (baseline["thickness_change_m_physiology_p05"], baseline["thickness_change_m_physiology_p95"]) == (0.0, 0.0)
    # Half of k + 5 less, draw by draw: between -(24)/2 and -(6)/2. The quantiles of the two values do not give this.
    assert half["thickness_change_m_physiology_p05"] == pytest.approx(-12.0)
    assert half["thickness_change_m_physiology_p95"] == pytest.approx(-3.0)
