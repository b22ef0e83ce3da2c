"""Completion of raw columns: samples of grids, order, missing levels, attributes left as they were."""

import numpy as np
import pytest
import xarray as xr

from habitat.ocean import columns, open_ocean
from habitat.ocean.csv_casts import read_csv_casts
from habitat.ocean.gridded import read_grid

HEAD = "depth [m],temperature [degC],salinity,oxygen [umol/kg],latitude,longitude\n"


def test_sample_takes_the_first_step_every_level_and_evenly_spread_columns(write_grid, water, monkeypatch):
    variables = {name: (np.stack([v, v + 100]), a) for name, (v, a) in water().items()}
    raw = read_grid(write_grid(variables, time=([0.0, 31.0], {"units": "days since 2001-01-01"})), {})
    whole = columns.sample(raw)
    assert dict(whole.sizes) == {"latitude": 2, "longitude": 3, "level": 3}
    assert float(whole["oxygen"].max()) < 300
    monkeypatch.setattr(columns, "SAMPLE_CELLS", 36)  # four columns of three variables on three levels
    part = columns.sample(raw)
    assert dict(part.sizes) == {"latitude": 1, "longitude": 2, "level": 3}
    assert part["longitude"].values.tolist() == [200, 220]
    assert not part.chunks


def test_casts_are_their_own_sample(write):
    raw = read_csv_casts(write(HEAD + "0,20,35,220,10,-120\n"), {})
    assert columns.sample(raw) is raw


def test_raw_columns_are_left_as_they_were(write):
    raw = read_csv_casts(write(HEAD + "50,15,34,180,10,-120\n0,20,35,220,10,-120\n"), {})
    before = raw.copy(deep=True)
    columns.complete(raw)
    xr.testing.assert_identical(raw, before)


def test_order_of_the_rows_does_not_matter(write):
    rows = [f"{depth},{20 - depth / 50},{35 - depth / 1000},{220 - depth / 5},10,-120\n" for depth in range(0, 500, 25)]
    plain = open_ocean([write(HEAD + "".join(rows))])
    mixed = open_ocean([write(HEAD + "".join(np.random.default_rng(1).permutation(rows)))])
    xr.testing.assert_identical(mixed.drop_attrs(), plain.drop_attrs())


def test_levels_without_any_value_stay_when_they_have_a_depth(write):
    text = HEAD + "0,20,35,220,10,-120\n50,,,,10,-120\n100,15,34,180,10,-120\n"
    oxygen = open_ocean([write(text)])["oxygen"]
    np.testing.assert_array_equal(oxygen, [[220, np.nan, 180]])


def test_rows_without_depth_come_last(write):
    text = HEAD + ",9,35,10,10,-120\n100,15,34,180,10,-120\n0,20,35,220,10,-120\n"
    opened = open_ocean([write(text)])
    np.testing.assert_array_equal(opened["depth"], [[0, 100, np.nan]])
    np.testing.assert_array_equal(opened["oxygen"], [[220, 180, 10]])
    assert opened.attrs["discarded"] == {"depth: missing in the file": 1}


def test_same_depth_twice_keeps_both_in_the_order_of_the_file(write):
    text = HEAD + "50,15,34,180,10,-120\n50,15,34,170,10,-120\n0,20,35,220,10,-120\n"
    opened = open_ocean([write(text)])
    assert opened["oxygen"].values.tolist() == [[220, 180, 170]]
    assert opened.attrs["suspicious"] == ["depth: 1 levels lie at the same depth as the level above"]


@pytest.mark.parametrize("name", ["temperature", "salinity", "oxygen", "depth", "pressure", "latitude", "longitude"])
def test_every_quantity_carries_unit_and_names(write, name):
    attributes = open_ocean([write(HEAD + "0,20,35,220,10,-120\n")])[name].attrs
    assert set(attributes) >= {"units", "long_name", "standard_name"}
