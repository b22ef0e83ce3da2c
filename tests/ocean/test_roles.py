"""Names and CF standard names."""

import pytest

from habitat.errors import InputError
from habitat.ocean import roles


@pytest.mark.parametrize("name", ["dissolved_oxygen", "O2", "Oxygen", "o_an"])
def test_names_in_any_case(name):
    assert roles.by_name("oxygen", ["x", name]) == [name]


def test_no_name_plays_two_parts():
    names = [name for known in roles.NAMES.values() for name in known]
    assert len(names) == len(set(names))


def test_standard_name_goes_before_name():
    variables = {
        "oxygen": {"standard_name": "temperature_of_sensor_for_oxygen_in_sea_water"},
        "x": {"standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water"},
    }
    assert roles.by_attributes("oxygen", variables) == ["x"]


def test_a_known_name_with_another_standard_name_is_no_candidate():
    # mole_concentration_..._at_saturation is what the water could hold, not what it holds (CF table v82)
    standard = "mole_concentration_of_dissolved_molecular_oxygen_in_sea_water_at_saturation"
    assert roles.by_attributes("oxygen", {"o2": {"standard_name": standard}}) == []
    assert roles.by_attributes("oxygen", {"o2": {}}) == ["o2"]


def test_saturation_counts_only_without_a_concentration():
    saturation = {"a": {"standard_name": "fractional_saturation_of_oxygen_in_sea_water"}}
    concentration = {"b": {"standard_name": "moles_of_oxygen_per_unit_mass_in_sea_water"}}
    assert roles.by_attributes("oxygen", saturation) == ["a"]
    assert roles.by_attributes("oxygen", saturation | concentration) == ["b"]


def test_flags_and_errors_are_no_data():
    standard = {"standard_name": "sea_water_temperature"}
    variables = {"t": standard, "t_qc": standard, "t_error": standard, "flags": standard | {"flag_values": [1, 2]}}
    assert roles.by_attributes("temperature", variables) == ["t"]


@pytest.mark.parametrize(
    ("name", "standard", "kind"),
    [
        ("temperature", "", "in situ"),
        ("thetao", "", "potential"),
        ("Potential_Temperature", "", "potential"),
        ("thetao", "sea_water_conservative_temperature", "conservative"),
        ("bigthetao", "", "conservative"),
        ("theta", "sea_water_temperature", "in situ"),
    ],
)
def test_kind_of_temperature(name, standard, kind):
    assert roles.kind_of_temperature(name, standard) == kind


def test_single():
    assert roles.single("oxygen", [], "file") is None
    assert roles.single("oxygen", ["a"], "file") == "a"
    with pytest.raises(InputError, match="file: 'a' and 'b' could each be the oxygen; expected one; choose one"):
        roles.single("oxygen", ["a", "b"], "file")
