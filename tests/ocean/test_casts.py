"""Rows arranged by cast, and casts set side by side."""

import numpy as np

from habitat.ocean.casts import Table, arrange


def test_rows_of_casts_in_any_order_keep_their_order_within_the_cast():
    table = Table("file", "reader", "unit", "part", ["x"], casts=[("o", "b"), ("o", "a"), ("o", "b"), ("o", "b")])
    table.add("depth", np.array([3.0, 1.0, 2.0, 5.0]), units="m", name="z")
    table.add("latitude", np.array([np.nan, 7.0, 8.0, 8.0]), units="", name="lat")
    raw = arrange(table)
    assert raw["cast"].values.tolist() == ["b", "a"]
    np.testing.assert_array_equal(raw["depth"], [[3, 2, 5], [1, np.nan, np.nan]])
    assert raw["latitude"].values.tolist() == [8, 7]  # the first that is not missing
    assert raw["depth"].attrs == {"units": "m", "name": "z"}


def test_the_same_label_of_two_cruises_makes_two_casts():
    table = Table("file", "reader", "unit", "part", ["x"], casts=[("o", "1"), ("p", "1")])
    table.add("depth", np.array([1.0, 2.0]), units="m", name="z")
    assert arrange(table).sizes["cast"] == 2


def test_discarded_values_add_up_and_nothing_is_not_counted():
    table = Table("file", "reader", "unit", "part", ["x"])
    table.discard("oxygen: flag 4", 2)
    table.discard("oxygen: flag 4", 3)
    table.discard("oxygen: flag 3", 0)
    assert table.discarded == {"oxygen: flag 4": 5}
