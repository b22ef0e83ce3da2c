"""Water columns meet a species: a real cast, laws, uncertainty against sampling, tables and lazy grids."""

import csv
import tracemalloc

import dask.array as da
import gsw
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from independent import bands as slow_bands
from independent import pcrit as slow_pcrit
from independent import po2 as slow_po2

from habitat.bands import find_bands, gather, totals
from habitat.seawater import concentration_from, concentration_to
from habitat.species import Response, Species
from habitat.viability import (
    BAND_COLUMNS,
    DRAWN_QUANTITIES,
    QUANTITIES,
    UNCERTAIN_QUANTITIES,
    band_table,
    chance_of_viability,
    column_totals,
    drawn_totals,
    oxygen_pressure,
)

NAN = np.nan
CERTAIN = Species("Example prawn", 10.0, Response(1.10, 0.30), Response(2.40, 0.62))
COVARIANCE = ((0.004, 0.002, 0.0, 0.0), (0.002, 0.006, 0.0, 0.0), (0.0, 0.0, 0.0025, 0.0), (0.0, 0.0, 0.0, 0.0025))
PRAWN = Species("Example prawn", 10.0, Response(1.10, 0.30), Response(2.40, 0.62), covariance=COVARIANCE)
# Neither supply nor rate changes with temperature, so Pcrit is 4 kPa everywhere.
PLAIN = Species("plain", 10.0, Response(1.0, 0.0), Response(4.0, 0.0))


def casts(depth, oxygen, temperature=8.0, *, seabed=None, longitude=-122.0, latitude=30.0):
    """Columns of casts at S 34.5; rows are casts."""
    depth, oxygen = np.broadcast_arrays(np.atleast_2d(np.array(depth, float)), np.atleast_2d(np.array(oxygen, float)))
    full, number = ("cast", "level"), len(depth)
    columns = xr.Dataset(
        {
            "temperature": (full, np.broadcast_to(np.array(temperature, float), depth.shape).copy()),
            "salinity": (full, np.full(depth.shape, 34.5)),
            "oxygen": (full, oxygen.copy()),
            "depth": (full, depth.copy()),
            "pressure": (full, depth * 1.01),
        },
        coords={
            "cast": [f"c{i}" for i in range(number)],
            "longitude": ("cast", np.broadcast_to(np.array(longitude, float), number)),
            "latitude": ("cast", np.broadcast_to(np.array(latitude, float), number)),
        },
        attrs={"form": "casts"},
    )
    return columns if seabed is None else columns.assign(seabed_depth=("cast", np.array(seabed, float)))


def with_po2(depth, po2, **options):
    """Casts whose oxygen gives the partial pressures asked for [kPa]."""
    columns = casts(depth, po2, **options)  # the pressure of one umol/kg does not depend on how many there are
    return columns.assign(oxygen=columns["oxygen"] * columns["oxygen"] / oxygen_pressure(columns))


def grid(seed=1, shape=(2, 4, 5, 12)):
    """A grid with an oxygen minimum, missing samples, land, and a seabed."""
    rng = np.random.default_rng(seed)
    depth = np.linspace(0, 1100, shape[-1])
    dims = ("time", "latitude", "longitude", "level")
    temperature = 3 + 15 * np.exp(-depth / 250) + rng.normal(0, 0.5, shape)
    oxygen = 230 - 215 * np.exp(-(((depth - 500) / 250) ** 2)) + rng.normal(0, 15, shape)
    oxygen[rng.random(shape) < 0.1] = NAN
    oxygen[:, 0, 0] = NAN
    return xr.Dataset(
        {
            "temperature": (dims, temperature),
            "salinity": (dims, np.full(shape, 34.6)),
            "oxygen": (dims, oxygen.clip(1)),
            "depth": ("level", depth),
            "pressure": ("level", depth * 1.01),
            "seabed_depth": (("latitude", "longitude"), rng.uniform(900, 1300, shape[1:3])),
        },
        coords={
            "time": np.array(["2001-01-15", "2001-02-15"], "datetime64[ns]"),
            "latitude": np.linspace(10, 40, shape[1]),
            "longitude": np.linspace(-130, -110, shape[2]),
        },
        attrs={"form": "grid"},
    )


# --- a real cast -------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def real_cast(shared_data):
    """Pressure, temperature, salinity and oxygen of a cast of the section P02, 2004; flags 2, 6 and 7 are kept."""
    with (shared_data / "casts" / "p02_2004a_00175_00002_ct1.csv").open(encoding="utf-8") as stream:
        rows = list(csv.reader(stream))
    first = next(i for i, row in enumerate(rows) if row and row[0].strip() == "CTDPRS") + 2
    samples = []
    for row in rows[first:]:
        if row[0].strip() == "END_DATA":
            break
        values, flags = [float(text) for text in row[0:8:2]], [int(text) for text in row[1:8:2]]
        samples.append([value if flag in (2, 6, 7) else NAN for value, flag in zip(values, flags, strict=True)])
    return np.array(samples)


@pytest.mark.parametrize("activity", [1.0, 2.0, 3.0])
def test_bands_of_a_real_cast_agree_with_an_independent_computation(real_cast, activity):
    pressure, temperature, salinity, oxygen = real_cast.T
    latitude, longitude = 30.7738, -122.2725
    depth = -gsw.z_from_p(pressure, latitude)
    full = ("cast", "level")
    fields = {"temperature": temperature, "salinity": salinity, "oxygen": oxygen, "depth": depth, "pressure": pressure}
    columns = xr.Dataset(
        {name: (full, values[None]) for name, values in fields.items()},
        coords={"cast": ["175/2"], "latitude": ("cast", [latitude]), "longitude": ("cast", [longitude])},
        attrs={"form": "casts"},
    ).assign(seabed_depth=("cast", [4142.0]))  # DEPTH of the file's header

    samples = zip(oxygen, temperature, salinity, pressure, strict=True)
    slow_pressures = np.array([slow_po2(*sample) for sample in samples])
    np.testing.assert_allclose(oxygen_pressure(columns).squeeze(), slow_pressures, rtol=1e-9)
    needs = [activity * slow_pcrit(t, 1.10, 0.30, 2.40, 0.62, 10.0) for t in temperature]
    expected = slow_bands(depth.tolist(), (slow_pressures - needs).tolist(), 4142.0)

    table = band_table(columns, CERTAIN, [activity])
    assert len(expected) >= 2  # above and below the oxygen minimum
    for side in ("upper", "lower"):
        np.testing.assert_allclose(table[f"{side}_m"], [band[side] for band in expected], rtol=0, atol=0.05)
        assert table[f"{side}_edge"].tolist() == [band[f"{side}_kind"] for band in expected]
        steepness = [band[f"{side}_steepness"] for band in expected]
        np.testing.assert_allclose(table[f"{side}_m_per_kpa"], steepness, rtol=1e-6)
    np.testing.assert_allclose(table["least_po2_kpa"], slow_pressures.min(), rtol=1e-9)


# --- the table of bands ------------------------------------------------------------------------------------------


def test_a_hand_computed_table():
    columns = with_po2([0, 100, 200, 300], [8, 2, 2, 6], seabed=[320], longitude=-122.5, latitude=30.5)
    table = band_table(columns, PLAIN, [1.0], scenario="warm")
    assert list(table.columns) == list(BAND_COLUMNS)
    # Margins 4, -2, -2, 2 kPa: zero at 100 x 4/6 m and at 250 m; |dz/dm| = 100/6 and 100/4 m/kPa.
    assert table["upper_m"].tolist() == pytest.approx([0.0, 250.0])
    assert table["lower_m"].tolist() == pytest.approx([200 / 3, 320.0])
    assert table["thickness_m"].tolist() == pytest.approx([200 / 3, 70.0])
    assert table["upper_m_per_kpa"].tolist() == pytest.approx([0.0, 25.0])
    assert table["lower_m_per_kpa"].tolist() == pytest.approx([100 / 6, 0.0])
    assert table["upper_edge"].tolist() == ["surface", "crossing"]
    assert table["lower_edge"].tolist() == ["crossing", "seabed"]
    assert table["band"].tolist() == [1, 2]
    assert table["least_po2_kpa"].tolist() == pytest.approx([2.0, 2.0])
    assert table["flags"].tolist() == ["", ""]
    assert table[["species", "scenario", "cast"]].drop_duplicates().to_numpy().tolist() == [["plain", "warm", "c0"]]
    assert table[["latitude", "longitude"]].drop_duplicates().to_numpy().tolist() == [[30.5, -122.5]]
    assert table[["upper_m_p05", "upper_m_p95", "lower_m_p05", "lower_m_p95"]].isna().all(axis=None)


def test_no_column_is_lost():
    columns = with_po2([0, 100], [[NAN, NAN], [3, 3], [5, 5]])
    table = band_table(columns, PLAIN, [1.0, 2.0])
    assert table["activity"].tolist() == [1.0] * 3 + [2.0] * 3
    assert table["cast"].tolist() == ["c0", "c1", "c2"] * 2
    assert table["band"].tolist() == [0, 0, 1, 0, 0, 0]
    assert table["flags"].tolist() == ["no-valid-sample", "", "", "no-valid-sample", "", ""]
    empty = table[table["band"] == 0]
    assert empty[["upper_m", "lower_m", "thickness_m", "upper_edge", "lower_edge"]].isna().all(axis=None)
    np.testing.assert_allclose(table["least_po2_kpa"], [NAN, 3, 5] * 2)


def test_joins_are_flagged():
    table = band_table(with_po2([0, 50, 100, 150, 200], [5, NAN, 5, NAN, 5]), PLAIN, [1.0])
    assert table["flags"].tolist() == ["joined:2"]


def test_water_outside_the_measured_temperatures_is_flagged():
    animal = Species("x", 10.0, Response(1.0, 0.0), Response(4.0, 0.0), temperature_range=(4.0, 16.0))
    columns = with_po2([0, 100, 200, 300], [8, 2, 2, 8], temperature=[[20.0, 10.0, 3.0, 5.0]])
    assert band_table(columns, animal, [1.0])["flags"].tolist() == ["outside-temperature-range", ""]
    assert column_totals(columns, animal, [1.0, 9.0])["outside_temperature_range"].values.tolist() == [[1], [0]]


def test_places_on_a_grid_are_named():
    columns = grid()
    table = band_table(columns, CERTAIN, [2.0]).set_index("cast")
    assert len(table.index.unique()) == 2 * 4 * 5
    row = table.loc[["1,2,3"]].iloc[0]
    assert row["latitude"] == columns["latitude"].values[2]
    assert row["longitude"] == columns["longitude"].values[3]
    assert row["time"] == columns["time"].values[1]


def test_the_table_sums_to_the_totals():
    columns = grid()
    table = band_table(columns, CERTAIN, [1.5, 3.0])
    found = column_totals(columns, CERTAIN, [1.5, 3.0])
    by_column = table.groupby(["activity", "cast"], sort=False)
    valid = np.isfinite(found["thickness"].values.ravel())
    np.testing.assert_allclose(by_column["thickness_m"].sum()[valid], found["thickness"].values.ravel()[valid])
    np.testing.assert_allclose(by_column["upper_m"].min(), found["upper"].values.ravel())
    np.testing.assert_allclose(by_column["lower_m"].max(), found["lower"].values.ravel())
    np.testing.assert_allclose(by_column["band"].max()[valid], found["band_count"].values.ravel()[valid])
    np.testing.assert_allclose(by_column["least_po2_kpa"].first(), found["least_po2"].values.ravel())
    assert (by_column["band"].max()[~valid] == 0).all()


# --- totals ------------------------------------------------------------------------------------------------------


def test_totals_of_a_hand_computed_column():
    columns = with_po2([[0, 100, 200, 300], [0, 100, 200, 300]], [[8, 2, 2, 6], [NAN] * 4], seabed=[320, 320])
    found = column_totals(columns, PLAIN, [1.0, 3.0])
    assert list(found) == list(QUANTITIES)
    assert found["thickness"].dims == ("activity", "cast")
    np.testing.assert_allclose(found["thickness"], [[200 / 3 + 70, NAN], [0, NAN]])
    np.testing.assert_allclose(found["upper"], [[0, NAN], [NAN, NAN]])
    np.testing.assert_allclose(found["lower"], [[320, NAN], [NAN, NAN]])
    np.testing.assert_allclose(found["band_count"], [[2, NAN], [0, NAN]])
    np.testing.assert_allclose(found["least_po2"], [[2, NAN], [2, NAN]])
    np.testing.assert_allclose(found["joins"], [[0, NAN], [0, NAN]])
    assert all({"units", "long_name"} <= set(found[name].attrs) for name in found)


def test_the_hydrostatic_term_can_be_left_out():
    columns = casts([1000], [50.0])
    ratio = oxygen_pressure(columns) / oxygen_pressure(columns, hydrostatic=False)
    # exp(0.317 x 1010 / (8.314 x 281.15)), SCOR WG 142
    assert float(ratio.squeeze()) == pytest.approx(1.14680, abs=1e-5)
    deep = casts([900, 1000], [50.0, 50.0])
    po2 = float(oxygen_pressure(deep, hydrostatic=False).max())
    animal = Species("x", 10.0, Response(1.0, 0.0), Response(po2 * 1.01, 0.0))
    assert column_totals(deep, animal, [1.0])["band_count"].item() == 1
    assert column_totals(deep, animal, [1.0], hydrostatic=False)["band_count"].item() == 0
    assert band_table(deep, animal, [1.0], hydrostatic=False)["band"].tolist() == [0]
    assert chance_of_viability(deep, animal, [1.0], hydrostatic=False).max() == 0
    assert drawn_totals(deep, animal, [1.0], count=2, hydrostatic=False)["thickness"].max() == 0


def test_blocks_of_columns_do_not_show(monkeypatch):
    columns = grid()
    whole = column_totals(columns, PRAWN, [2.0], uncertainty=True)
    monkeypatch.setattr("habitat.viability.COLUMNS_PER_BLOCK", 7)
    xr.testing.assert_identical(column_totals(columns, PRAWN, [2.0], uncertainty=True), whole)


# --- laws --------------------------------------------------------------------------------------------------------

OXYGENS = st.lists(st.one_of(st.just(NAN), st.floats(0, 300)), min_size=6, max_size=6)
SEEDS = st.integers(0, 10**6)


@given(oxygen=OXYGENS, order=st.permutations(range(6)), turns=st.sampled_from([-360.0, 360.0]))
def test_order_of_levels_and_longitude_convention_do_not_matter(oxygen, order, turns):
    columns = casts([3, 40, 120, 350, 700, 1500], oxygen, [[18, 14, 11, 8, 6, 3]], seabed=[1530])
    before = band_table(columns, PRAWN, [1.5])
    shuffled = columns.isel(level=list(order))
    turned = shuffled.assign_coords(longitude=shuffled["longitude"] + turns)
    after = band_table(turned, PRAWN, [1.5])
    assert before.drop(columns="longitude").equals(after.drop(columns="longitude"))


@given(oxygen=OXYGENS, unit=st.sampled_from(["ml/l", "mg/l", "mol m-3", "umol/l", "kPa", "mmHg", "% saturation"]))
def test_the_unit_of_oxygen_does_not_matter(oxygen, unit):
    columns = casts([3, 40, 120, 350, 700, 1500], oxygen, [[18, 14, 11, 8, 6, 3]])
    place = [columns[name] for name in ("temperature", "salinity", "pressure", "longitude", "latitude")]
    there = concentration_to(columns["oxygen"], *place, unit=unit)
    back = columns.assign(oxygen=concentration_from(there, *place, unit=unit))
    before, after = (column_totals(each, PRAWN, [1.5]) for each in (columns, back))
    # A margin within rounding of zero may fall to the other side; then an edge lies within rounding of the sample.
    margin = oxygen_pressure(columns) - 1.5 * PRAWN.pcrit(columns["temperature"])
    if not (abs(margin) < 1e-9).any():
        xr.testing.assert_allclose(before, after, rtol=1e-9)


@given(seed=SEEDS, low=st.floats(0.5, 6), more=st.floats(0, 3))
def test_higher_activity_never_widens_viable_water(seed, low, more):
    columns = grid(seed, (2, 2, 3, 12))
    found = column_totals(columns, CERTAIN, [low, low + more])
    at_low, at_high = found.isel(activity=0), found.isel(activity=1)
    assert not (at_high["thickness"] > at_low["thickness"] + 1e-9).any()
    assert not (at_high["upper"] < at_low["upper"] - 1e-9).any()
    assert not (at_high["lower"] > at_low["lower"] + 1e-9).any()


@given(seed=SEEDS, activity=st.floats(0.5, 6))
def test_quantile_edges_are_nested(seed, activity):
    table = band_table(grid(seed, (2, 2, 3, 12)), PRAWN, [activity])
    for side in ("upper", "lower"):
        assert not (table[f"{side}_m_p05"] > table[f"{side}_m"] + 1e-9).any()
        assert not (table[f"{side}_m_p95"] < table[f"{side}_m"] - 1e-9).any()
    found = column_totals(grid(seed, (2, 2, 3, 12)), PRAWN, [activity], uncertainty=True)
    for side in ("upper", "lower"):
        assert not (found[f"{side}_p05"] > found[side] + 1e-9).any()
        assert not (found[f"{side}_p95"] < found[side] - 1e-9).any()


@given(seed=SEEDS, chunks=st.tuples(st.integers(1, 2), st.integers(1, 2), st.integers(2, 3), st.sampled_from([7, 12])))
def test_chunks_do_not_matter(seed, chunks):
    columns = grid(seed, (2, 2, 3, 12))
    lazy = columns.chunk(dict(zip(("time", "latitude", "longitude", "level"), chunks, strict=True)))
    eager = column_totals(columns, PRAWN, [2.5], uncertainty=True)
    computed = column_totals(lazy, PRAWN, [2.5], uncertainty=True).compute(scheduler="synchronous")
    xr.testing.assert_identical(computed, eager)


# --- lazy grids --------------------------------------------------------------------------------------------------


def test_lazy_columns_stay_lazy(no_compute):
    columns = grid()
    lazy = columns.chunk({"time": 1, "latitude": 2})
    works = {
        "totals": lambda water: column_totals(water, PRAWN, [1.0, 2.0], uncertainty=True),
        "drawn": lambda water: drawn_totals(water, PRAWN, [1.0, 2.0], count=4),
        "chance": lambda water: chance_of_viability(water, PRAWN, [1.0, 2.0]),
        "po2": oxygen_pressure,
    }
    with no_compute():
        results = {name: work(lazy) for name, work in works.items()}
    for name, result in results.items():
        assert result.chunks
        xr.testing.assert_identical(result.compute(), works[name](columns))


def test_a_large_grid_costs_no_memory_before_it_is_computed(no_compute):
    """Depths and a seabed that many columns share must not be repeated for each of them."""
    shape, dims = (24, 180, 360, 57), ("time", "latitude", "longitude", "level")
    depth = np.linspace(0, 1500, shape[-1])
    water = {"temperature": 8.0, "salinity": 34.7, "oxygen": 100.0}
    columns = xr.Dataset(
        {name: (dims, da.full(shape, value, chunks=(1, -1, -1, -1))) for name, value in water.items()}
        | {"depth": ("level", depth), "pressure": ("level", depth * 1.01)}
        | {"seabed_depth": (("latitude", "longitude"), np.full(shape[1:3], 2000.0))},
        coords={"latitude": np.arange(-89.5, 90), "longitude": np.arange(0.5, 360)},
    )
    tracemalloc.start()
    with no_compute():
        column_totals(columns, PRAWN, [1.0], uncertainty=True)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 100e6  # bytes; one field of this grid as float64 has 709e6


# --- uncertainty -------------------------------------------------------------------------------------------------

DRAWS = 20_000
SMOOTH_DEPTH = np.linspace(0, 400, 41)
# From 18 kPa at the surface to 0.2 kPa at 400 m, 18 to 6 degC: one crossing.
SMOOTH = with_po2(
    SMOOTH_DEPTH, 0.2 + 17.8 * np.exp(-SMOOTH_DEPTH / 120), temperature=6 + 12 * np.exp(-SMOOTH_DEPTH / 150)
)


@pytest.fixture(scope="module")
def sampled():
    """Need [kPa] at each level of the smooth cast for draws from the 4-D Gaussian; lower edge and thickness."""
    rng = np.random.default_rng(7)
    means = [np.log(1.10), np.log(2.40), 0.30, 0.62]
    ln_capacity, ln_rate, capacity_energy, rate_energy = rng.multivariate_normal(means, np.array(COVARIANCE), DRAWS).T
    temperature = SMOOTH["temperature"].values[0]
    x = (1 / 283.15 - 1 / (temperature + 273.15)) / 8.617333262e-5
    need = 2.0 * np.exp((ln_rate - ln_capacity)[:, None] + (rate_energy - capacity_energy)[:, None] * x)
    po2 = oxygen_pressure(SMOOTH).values[0]
    rows = [np.broadcast_to(values, need.shape) for values in (SMOOTH_DEPTH, po2, temperature)]
    samples = gather(*rows, np.full(DRAWS, NAN))
    _, lower, thickness, _ = totals(find_bands(samples, samples.po2 - need.ravel()), DRAWS)
    return need, lower, thickness


def test_the_chance_of_each_cell_is_that_of_samples(sampled):
    chance = chance_of_viability(SMOOTH, PRAWN, [2.0])
    assert chance.dims == ("activity", "cast", "level")
    share = (oxygen_pressure(SMOOTH).values[0] >= sampled[0]).mean(axis=0)
    chance = chance.values[0, 0]
    assert ((chance > 0.05) & (chance < 0.95)).sum() >= 3
    # Standard error of a share: sqrt(p (1 - p) / n); 4 of them, and one draw where p is all but 0 or 1.
    np.testing.assert_array_less(abs(share - chance), 4 * np.sqrt(chance * (1 - chance) / DRAWS) + 1 / DRAWS)


def edge_at(quantile):
    """Depth [m] of the only crossing when Pcrit has the given quantile everywhere."""
    samples = gather(*(SMOOTH[name].values for name in ("depth", "oxygen", "temperature")), np.array([NAN]))
    margin = oxygen_pressure(SMOOTH).values[0] - 2.0 * PRAWN.pcrit(samples.temperature, quantile)
    return find_bands(samples, margin).lower.item()


@pytest.mark.parametrize(("column", "quantile"), [("lower_m_p05", 0.05), ("lower_m", 0.5), ("lower_m_p95", 0.95)])
def test_quantile_edges_are_those_of_samples(sampled, column, quantile):
    edge = band_table(SMOOTH, PRAWN, [2.0])[column].item()
    # Standard error of a quantile: sqrt(q (1 - q) / n) / density, the density from edges 0.01 apart; 4 of them.
    density = 0.02 / abs(edge_at(1 - quantile - 0.01) - edge_at(1 - quantile + 0.01))
    error = np.sqrt(quantile * (1 - quantile) / DRAWS) / density
    assert error < 1.0  # m, else the test would not tell
    assert np.quantile(sampled[1], quantile) == pytest.approx(edge, abs=4 * error)
    name = column.replace("_m", "")
    assert column_totals(SMOOTH, PRAWN, [2.0], uncertainty=True)[name].item() == edge


def test_mean_thickness_is_that_of_samples(sampled):
    found = column_totals(SMOOTH, PRAWN, [2.0], uncertainty=True)
    assert list(found) == [*QUANTITIES, *UNCERTAIN_QUANTITIES]
    error = sampled[2].std() / np.sqrt(DRAWS)
    assert found["mean_thickness"].item() == pytest.approx(sampled[2].mean(), abs=4 * error)


def test_drawn_thickness_has_the_quantiles_of_samples(sampled):
    drawn = drawn_totals(SMOOTH, PRAWN, [2.0], count=256)
    assert list(drawn) == list(DRAWN_QUANTITIES)
    assert drawn["thickness"].dims == ("activity", "draw", "cast")
    for quantile in (0.05, 0.5, 0.95):
        # Quasi-random points must beat 256 random ones, whose rank has the standard error sqrt(q (1 - q) / n).
        error = np.sqrt(quantile * (1 - quantile) / 256)
        low, high = np.quantile(sampled[2], [max(quantile - error, 0), min(quantile + error, 1)])
        assert low <= float(drawn["thickness"].quantile(quantile)) <= high


def test_one_draw_holds_for_all_columns():
    columns = xr.concat([SMOOTH, SMOOTH], "cast")
    drawn = drawn_totals(columns, PRAWN, [1.0, 2.0], count=16)
    xr.testing.assert_equal(drawn.isel(cast=0, drop=True), drawn.isel(cast=1, drop=True))
    alone = find_bands_of_draw(PRAWN.draws(16)[5])
    np.testing.assert_allclose(drawn["lower"].isel(activity=1, draw=5, cast=0), alone)


def find_bands_of_draw(draw):
    samples = gather(*(SMOOTH[name].values for name in ("depth", "oxygen", "temperature")), np.array([NAN]))
    margin = oxygen_pressure(SMOOTH).values[0] - 2.0 * PRAWN.pcrit_of_draw(samples.temperature, draw)
    return find_bands(samples, margin).lower.item()


def mean_by_quantiles(columns, species, activity, count=4000):
    """Mean thickness [m] from many equally likely quantiles of Pcrit."""
    seabed = columns["seabed_depth"] if "seabed_depth" in columns else xr.full_like(columns["latitude"], NAN)
    fields = (columns["depth"], oxygen_pressure(columns), columns["temperature"], seabed)
    samples = gather(*(field.values for field in fields))
    total = np.zeros(samples.columns)
    for quantile in (np.arange(count) + 0.5) / count:
        need = activity * species.pcrit(samples.temperature, quantile)
        total += totals(find_bands(samples, samples.po2 - need), samples.columns)[2]
    return total / count


def test_mean_thickness_of_columns_that_change_in_steps():
    """A lone sample, a uniform layer and a layer cut in half by an edge become viable at once or bit by bit."""
    depth = [[5, NAN, NAN, NAN], [5, 105, 205, 305], [0, 100, 200, 300], [20, 320, 500, 520]]
    po2 = [[4.3, NAN, NAN, NAN], [4.4, 4.4, 4.4, 4.4], [9, 4.5, 4.4, 2], [2, 4.3, 4.6, 9]]
    columns = with_po2(depth, po2, temperature=10.0, seabed=[50, 340, 300, NAN])
    found = column_totals(columns, PRAWN, [2.0], uncertainty=True)["mean_thickness"].values[0]
    # The reference is off by at most half its step, 300 m / 8000; the closed form by less than 0.1 %.
    np.testing.assert_allclose(found, mean_by_quantiles(columns, PRAWN, 2.0), atol=0.04, rtol=1e-3)
    chance = chance_of_viability(columns, PRAWN, [2.0]).values[0]
    assert found[0] == pytest.approx(50 * chance[0, 0])
    assert found[1] == pytest.approx(340 * chance[1, 0])


def test_mean_thickness_without_uncertainty_is_the_thickness():
    found = column_totals(grid(), CERTAIN, [2.0], uncertainty=True)
    np.testing.assert_allclose(found["mean_thickness"], found["thickness"])
    np.testing.assert_array_equal(found["upper_p05"], found["upper"])
    np.testing.assert_array_equal(found["lower_p95"], found["lower"])


# --- quantile edges that do not exist ----------------------------------------------------------------------------

# ln Pcrit has the standard deviation 0.1 at every temperature: needs of 3.39, 4 and 4.72 kPa at 5, 50 and 95 %.
TENTH = ((0.0, 0.0, 0.0, 0.0), (0.0, 0.01, 0.0, 0.0), (0.0, 0.0, 0.0, 0.0), (0.0, 0.0, 0.0, 0.0))
UNSURE = Species("unsure", 10.0, Response(1.0, 0.0), Response(4.0, 0.0), covariance=TENTH)


def test_quantile_edges_of_a_hand_computed_band():
    table = band_table(with_po2([0, 100, 200], [6, 2, 2]), UNSURE, [1.0])
    needs = 4 * np.exp(0.1 * np.array([-1.6448536, 0.0, 1.6448536]))  # 5, 50 and 95 % of the normal distribution
    deep, middle, shallow = 100 * (6 - needs) / 4
    row = table.iloc[0]
    assert [row["lower_m_p05"], row["lower_m"], row["lower_m_p95"]] == pytest.approx([shallow, middle, deep])
    assert [row["upper_m_p05"], row["upper_m_p95"]] == [0.0, 0.0]
    assert row["flags"] == ""


def test_a_band_that_vanishes():
    row = band_table(with_po2([0, 100], [4.5, 2]), UNSURE, [1.0]).iloc[0]
    assert row["flags"] == "vanishes-at-p95"
    assert np.isnan([row["upper_m_p95"], row["lower_m_p05"]]).all()
    assert np.isfinite([row["upper_m_p05"], row["lower_m_p95"]]).all()


def test_bands_that_merge():
    table = band_table(with_po2([0, 100, 200], [6, 3.7, 6]), UNSURE, [1.0])
    assert table["flags"].tolist() == ["merges-at-p05"] * 2
    np.testing.assert_array_equal(table["upper_m_p05"], [0.0, NAN])
    np.testing.assert_array_equal(table["lower_m_p95"], [NAN, 200.0])
    assert np.isfinite(table[["upper_m_p95", "lower_m_p05"]]).all(axis=None)


def test_a_band_that_splits():
    row = band_table(with_po2([0, 100, 200], [6, 4.5, 6]), UNSURE, [1.0]).iloc[0]
    assert row["flags"] == "splits-at-p95"
    # Outer edges of the parts: the surface and the deepest sample.
    assert [row["upper_m_p05"], row["upper_m_p95"], row["lower_m_p05"], row["lower_m_p95"]] == [0.0, 0.0, 200.0, 200.0]


def test_a_band_that_exists_only_at_the_favourable_quantile_has_a_chance():
    columns = with_po2([0, 100], [3.8, 2])
    assert band_table(columns, UNSURE, [1.0])["band"].tolist() == [0]
    found = column_totals(columns, UNSURE, [1.0], uncertainty=True)
    assert found["thickness"].item() == 0
    assert found["lower_p95"].item() == pytest.approx(100 * (3.8 - 4 * np.exp(-0.16448536)) / 1.8)
    assert np.isnan(found["lower_p05"].item())
    assert found["mean_thickness"].item() > 0
