"""Depths and pressures of any unit and sign."""

import numpy as np
import pytest
import xarray as xr

from habitat.errors import InputError, UnitError
from habitat.ocean.vertical import downward


def _values(values, **attributes):
    return xr.DataArray(np.array(values, dtype=float), dims="level", attrs={"name": "z"} | attributes)


def test_plain_depths_are_left_alone():
    values, conversions, suspicious = downward(_values([0, 10], units="m"), "depth", "x")
    assert values.values.tolist() == [0, 10]
    assert values.attrs == {"units": "m", "unit_found": "m", "name": "z"}
    assert conversions == suspicious == []


@pytest.mark.parametrize(
    ("unit", "role", "factor"),
    [("cm", "depth", 0.01), ("km", "depth", 1000), ("Pa", "pressure", 1e-4), ("hPa", "pressure", 0.01)],
)
def test_units(unit, role, factor):
    values, conversions, _ = downward(_values([0, 3], units=unit), role, "x")
    np.testing.assert_allclose(values, [0, 3 * factor])
    assert conversions[0].startswith(f"{role}: {unit} to ")


def test_doing_it_twice_changes_nothing():
    once, *_ = downward(_values([-3, 0], units="cm"), "depth", "x")
    twice, conversions, _ = downward(once, "depth", "x")
    xr.testing.assert_identical(once, twice)
    assert conversions == []


def test_upward_claim_without_negative_values_is_doubted():
    values, _, suspicious = downward(_values([0, 10], units="m", positive="up"), "depth", "x")
    assert values.values.tolist() == [0, 10]
    assert suspicious == ["depth: the file says 'positive: up', but the values are not negative; taken as depths"]


def test_one_level_at_the_surface_and_missing_values():
    values, conversions, _ = downward(_values([-0.0, np.nan], units="m"), "depth", "x")
    np.testing.assert_array_equal(values, [0, np.nan])
    assert not np.signbit(values.values[0])
    assert conversions == []


def test_refusals():
    with pytest.raises(InputError, match="file, 'z': pressure has both signs, from -7 to 5 dbar"):
        downward(_values([-7, 5], units="dbar"), "pressure", "file, 'z'")
    with pytest.raises(UnitError, match="unit 'm' cannot be converted; expected a unit such as dbar"):
        downward(_values([1, 5], units="m"), "pressure", "file, 'z'")
