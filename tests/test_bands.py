"""Edges, kinds, joins and steepness of viable bands: rules on hand-computed columns, and laws against a slow loop."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from independent import bands as slow_bands

from habitat.bands import EDGE_KINDS, find_bands, gather, least_po2, totals

NAN = np.nan


def samples_of(depth, margin, seabed=NAN):
    """One column whose PO2 is the margin itself; a missing margin is a missing sample."""
    rows = [np.array([values], dtype=float) for values in (depth, margin, np.full(len(depth), 8.0))]
    return gather(*rows, np.array([seabed]))


def bands_of(depth, margin, seabed=NAN):
    """Bands of one column as tuples: upper edge, its kind, lower edge, its kind."""
    samples = samples_of(depth, margin, seabed)
    bands = find_bands(samples, samples.po2)
    kinds = [(EDGE_KINDS[u], EDGE_KINDS[w]) for u, w in zip(bands.upper_kind, bands.lower_kind, strict=True)]
    return [(u, kind[0], w, kind[1]) for u, w, kind in zip(bands.upper, bands.lower, kinds, strict=True)]


# --- edges inside the water --------------------------------------------------------------------------------------


def test_an_edge_lies_where_the_linear_margin_is_zero():
    # 20 -> 40 m, margin -1 -> 3 kPa: zero a quarter of the way. 40 -> 80 m, margin 3 -> -1: three quarters of the way.
    assert bands_of([20, 40, 80], [-1, 3, -1]) == [(25.0, "crossing", 70.0, "crossing")]


def test_steepness_is_metres_per_kilopascal():
    samples = samples_of([0, 20, 40, 80, 100], [5, -1, 3, -1, 2])
    bands = find_bands(samples, samples.po2)
    # |dz/dm| = 20/6, 20/4, 40/4, 20/3 m/kPa at the four crossings; the surface does not move with the margin;
    # beyond the deepest sample nothing is known.
    np.testing.assert_allclose(bands.upper_steepness, [0.0, 5.0, 20 / 3])
    np.testing.assert_allclose(bands.lower_steepness, [20 / 6, 10.0, NAN])


def test_the_seabed_does_not_move_with_the_margin():
    samples = samples_of([5, 100], [1, 1], seabed=120)
    assert find_bands(samples, samples.po2).lower_steepness.tolist() == [0.0]


def test_three_bands_in_one_column():
    found = bands_of([5, 50, 100, 150, 200, 250], [1, -1, 1, -1, 1, 1])
    assert found == [
        (0.0, "surface", 27.5, "crossing"),  # 5 + 45/2
        (75.0, "crossing", 125.0, "crossing"),
        (175.0, "crossing", 250.0, "deepest sample"),
    ]


def test_a_margin_of_exactly_zero_is_viable():
    assert bands_of([20, 50, 80], [-1, 0, -2]) == [(50.0, "crossing", 50.0, "crossing")]
    assert bands_of([20, 50, 80], [3, 0, -2])[0][2:] == (50.0, "crossing")


def test_a_viable_column_reaches_from_surface_to_seabed():
    assert bands_of([2, 50, 100], [3, 2, 1], seabed=110) == [(0.0, "surface", 110.0, "seabed")]


def test_a_column_without_viable_water_has_no_band():
    assert bands_of([2, 50, 100], [-3, -2, -1], seabed=110) == []


# --- where the data end ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("first", "edge"), [(0.0, (0.0, "surface")), (10.0, (0.0, "surface")), (10.1, (10.1, "shallowest sample"))]
)
def test_a_shallowest_sample_at_10_m_or_above_stands_for_the_surface(first, edge):
    assert bands_of([first, 50], [1, -1])[0][:2] == edge


def test_the_shallowest_valid_sample_counts_not_the_shallowest_level():
    assert bands_of([5, 30, 50], [NAN, 1, -1])[0][:2] == (30.0, "shallowest sample")


@pytest.mark.parametrize(
    ("seabed", "edge"),
    [
        (NAN, (100.0, "deepest sample")),
        (100.0, (100.0, "seabed")),
        (150.0, (150.0, "seabed")),  # 50 m below
        (150.1, (100.0, "deepest sample")),
        (96.0, (96.0, "seabed")),  # the cell reaches from 95 to 105 m: half-way to 90 m, and as far downward
        (94.9, (100.0, "deepest sample")),
    ],
)
def test_a_band_ends_at_the_seabed_when_it_is_near(seabed, edge):
    assert bands_of([5, 90, 100], [1, 1, 1], seabed)[0][2:] == edge


@pytest.mark.parametrize(("seabed", "edge"), [(1350.0, (1350.0, "seabed")), (1351.0, (1000.0, "deepest sample"))])
def test_a_thick_cell_reaches_half_way_to_the_next_level_of_the_input(seabed, edge):
    # Levels at 1000 and 1700 m, the deeper one missing: the cell of the upper one ends at 1350 m.
    assert bands_of([5, 300, 1000, 1700], [1, 1, 1, NAN], seabed)[0][2:] == edge


def test_the_cell_ignores_levels_at_the_same_depth():
    depth, margin = [5, 300, 1000, 1000, 1700], [1, 1, 1, NAN, NAN]
    assert bands_of(depth, margin, 1300)[0][2:] == (1300.0, "seabed")
    assert bands_of(depth[::-1], margin[::-1], 1300)[0][2:] == (1300.0, "seabed")


def test_a_sample_beneath_the_seabed_stands_at_the_seabed():
    # The seabed at 80 m cuts the cell (75 to 125 m). Margin 1 at 50 m and -1 at 80 m: zero at 65 m, not at 75 m.
    assert bands_of([5, 50, 100], [2, 1, -1], seabed=80)[0][2:] == (65.0, "crossing")
    assert bands_of([5, 50, 100], [-2, -1, 1], seabed=80) == [(65.0, "crossing", 80.0, "seabed")]


def test_the_seabed_ends_only_the_deepest_band():
    assert bands_of([5, 50, 100], [1, -1, -1], seabed=101)[0][2:] == (27.5, "crossing")


def test_one_sample():
    assert bands_of([7], [1]) == [(0.0, "surface", 7.0, "deepest sample")]
    assert bands_of([70], [1], seabed=90) == [(70.0, "shallowest sample", 90.0, "seabed")]
    assert bands_of([70], [1], seabed=69) == [(70.0, "shallowest sample", 70.0, "deepest sample")]  # no cell above
    assert bands_of([70], [-1]) == []


def test_two_samples():
    assert bands_of([20, 60], [1, 1]) == [(20.0, "shallowest sample", 60.0, "deepest sample")]
    assert bands_of([20, 60], [1, -3]) == [(20.0, "shallowest sample", 30.0, "crossing")]


@pytest.mark.parametrize("levels", [0, 1, 3])
def test_no_valid_sample(levels):
    samples = samples_of([10.0 * i for i in range(levels)], [NAN] * levels, seabed=50)
    bands = find_bands(samples, samples.po2)
    upper, lower, thickness, count = totals(bands, samples.columns)
    assert (thickness[0], count[0]) == (0, 0)
    assert np.isnan([upper[0], lower[0], *(values[0] for values in least_po2(samples))]).all()


# --- missing samples ---------------------------------------------------------------------------------------------


def test_missing_samples_up_to_200_m_are_passed_over_and_counted():
    samples = samples_of([5, 100, 200, 205, 300], [1, NAN, NAN, 1, 1])
    bands = find_bands(samples, samples.po2)
    assert bands_of([5, 100, 200, 205, 300], [1, NAN, NAN, 1, 1]) == [(0.0, "surface", 300.0, "deepest sample")]
    assert bands.joins.tolist() == [1]


def test_missing_samples_over_more_than_200_m_are_a_gap():
    assert bands_of([5, 100, 206, 300], [1, NAN, 1, 1]) == [
        (0.0, "surface", 5.0, "gap"),
        (206.0, "gap", 300.0, "deepest sample"),
    ]


def test_consecutive_levels_are_joined_however_far_apart():
    samples = samples_of([5, 600, 1500], [1, 1, -2])
    bands = find_bands(samples, samples.po2)
    assert bands_of([5, 600, 1500], [1, 1, -2]) == [(0.0, "surface", 900.0, "crossing")]
    assert bands.joins.tolist() == [0]


def test_a_join_across_an_edge_counts_for_the_band():
    samples = samples_of([5, 50, 100, 150, 200], [1, NAN, -1, NAN, 1])
    assert find_bands(samples, samples.po2).joins.tolist() == [1, 1]


def test_no_band_beside_a_gap_when_the_water_beyond_is_not_viable():
    # Below the gap the margin is negative, but where it turns is unknown: the band stops at its own sample.
    assert bands_of([5, 100, 400], [1, NAN, -1]) == [(0.0, "surface", 5.0, "gap")]


def test_a_level_without_depth_is_no_hole():
    samples = samples_of([5, NAN, 600], [1, 1, 1])
    bands = find_bands(samples, samples.po2)
    assert (len(bands.column), bands.joins.tolist()) == (1, [0])


# --- order and repeated depths -----------------------------------------------------------------------------------


def test_levels_in_any_order():
    assert bands_of([80, 20, NAN, 40], [-1, -1, 9, 3]) == [(25.0, "crossing", 70.0, "crossing")]


def test_samples_at_one_depth_are_averaged():
    samples = samples_of([20, 40, 40, 40, 80], [-1, 5, 2, 2, -1])  # the mean of 5, 2 and 2 is 3
    assert samples.po2.tolist() == [-1, 3, -1]
    assert bands_of([20, 40, 40, 40, 80], [-1, 5, 2, 2, -1]) == [(25.0, "crossing", 70.0, "crossing")]


@pytest.mark.parametrize("margin", [[1, 1, NAN, 1], [1, NAN, 1, 1]])
def test_a_missing_sample_beside_a_valid_one_at_the_same_depth_is_no_hole(margin):
    samples = samples_of([5, 500, 500, 900], margin)
    bands = find_bands(samples, samples.po2)
    assert (len(bands.column), bands.joins.tolist()) == (1, [0])


def test_least_po2_is_the_shallower_of_equals():
    least, depth = least_po2(samples_of([5, 50, 100, 150], [3, 1, NAN, 1]))
    assert (least[0], depth[0]) == (1.0, 50.0)


# --- laws --------------------------------------------------------------------------------------------------------

DEPTHS = st.one_of(st.sampled_from([0.0, 5.0, 10.0, 100.0, 300.0]), st.floats(0, 1500), st.just(NAN))
MARGINS = st.one_of(st.sampled_from([0.0, NAN, -1.0, 1.0]), st.floats(-8, 8).map(lambda m: round(m, 3)))
COLUMNS = st.lists(st.tuples(DEPTHS, MARGINS), min_size=1, max_size=14)
SEABEDS = st.one_of(st.just(NAN), st.floats(1, 1600))


@given(columns=st.lists(st.tuples(COLUMNS, SEABEDS), min_size=1, max_size=4))
def test_the_kernel_agrees_with_a_loop_over_samples(columns):
    levels = max(len(column) for column, _ in columns)
    table = np.full((2, len(columns), levels), NAN)
    for row, (column, _) in enumerate(columns):
        table[:, row, : len(column)] = np.array(column).T
    samples = gather(table[0], table[1], np.full(table[0].shape, 8.0), np.array([seabed for _, seabed in columns]))
    bands = find_bands(samples, samples.po2)
    for row, (column, seabed) in enumerate(columns):
        expected = slow_bands(*zip(*column, strict=True), seabed)
        mine = bands.column == row
        assert mine.sum() == len(expected)
        for side in ("upper", "lower"):
            kinds = [EDGE_KINDS[kind] for kind in getattr(bands, f"{side}_kind")[mine]]
            assert kinds == [band[f"{side}_kind"] for band in expected]
            for name, tolerance in ((side, 1e-6), (f"{side}_steepness", 1e-9)):  # m; the loop divides twice
                want = [band[name] for band in expected]
                np.testing.assert_allclose(getattr(bands, name)[mine], want, rtol=1e-9, atol=tolerance)
        assert bands.joins[mine].tolist() == [band["joins"] for band in expected]


@given(column=COLUMNS, seabed=SEABEDS, data=st.data())
def test_order_of_levels_does_not_matter(column, seabed, data):
    shuffled = data.draw(st.permutations(column))
    before, after = (bands_of(*zip(*levels, strict=True), seabed) for levels in (column, shuffled))
    assert [band[1::2] for band in before] == [band[1::2] for band in after]
    # The mean of repeated depths is summed in another order; margins are at least 1e-3 kPa or 0 apart from zero.
    np.testing.assert_allclose([band[::2] for band in before], [band[::2] for band in after], rtol=1e-9, atol=1e-6)


@given(column=COLUMNS, seabed=SEABEDS, less=st.floats(0, 5))
def test_a_smaller_margin_never_widens_viable_water(column, seabed, less):
    depth, margin = (np.array(values) for values in zip(*column, strict=True))
    samples = samples_of(depth, margin, seabed)
    wide, narrow = find_bands(samples, samples.po2), find_bands(samples, samples.po2 - less)
    assert (narrow.lower >= narrow.upper).all()
    for upper, lower in zip(narrow.upper, narrow.lower, strict=True):
        around = (wide.upper <= upper + 1e-9) & (wide.lower >= lower - 1e-9)
        assert around.sum() >= 1  # every narrow band lies inside a wide one
    assert totals(narrow, 1)[2][0] <= totals(wide, 1)[2][0] + 1e-9


@given(column=COLUMNS, data=st.data())
def test_missing_levels_within_200_m_change_no_edge(column, data):
    valid = sorted({(z, m) for z, m in column if np.isfinite(z) and np.isfinite(m)})
    added = []
    for (upper, _), (lower, _) in itertools.pairwise(valid):
        if 0 < lower - upper <= 200:
            share = data.draw(st.floats(0.1, 0.9))
            added.append((upper + share * (lower - upper), NAN))
    assert bands_of(*zip(*(column + added), strict=True)) == bands_of(*zip(*column, strict=True))


def test_many_columns_at_once():
    rng = np.random.default_rng(11)
    columns, levels = 200_000, 20
    depth = np.sort(rng.uniform(0, 1000, (columns, levels)), axis=1)
    margin = rng.normal(0, 2, (columns, levels))
    margin[rng.random((columns, levels)) < 0.1] = NAN
    samples = gather(depth, margin, np.full_like(depth, 8.0), np.full(columns, NAN))
    upper, lower, thickness, count = totals(find_bands(samples, samples.po2), columns)
    for row in rng.integers(0, columns, 50):
        expected = slow_bands(depth[row].tolist(), margin[row].tolist())
        assert count[row] == len(expected)
        if expected:
            assert upper[row] == pytest.approx(expected[0]["upper"])
            assert lower[row] == pytest.approx(expected[-1]["lower"])
            assert thickness[row] == pytest.approx(sum(band["lower"] - band["upper"] for band in expected))
