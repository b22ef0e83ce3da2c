"""Which pictures a study draws: their number, the data they are given, and the names of their files."""

import re

import numpy as np
import pytest
import xarray as xr
from matplotlib.figure import Figure

from habitat import figures, pictures, viability
from habitat.ocean import open_ocean
from habitat.pictures import Results, count_pictures, draw
from habitat.scenario import apply
from habitat.studyfile import read_study

PRAWN = """
name = "{name}"
reference_temperature = 10.0
[supply_capacity]
value = 0.75
unit = "umol/g/h/kPa"
activation_energy = 0.22
[resting_rate]
value = 1.2
unit = "umol/g/h"
activation_energy = 0.62
"""

UNCERTAIN = """
[uncertainty]
order = ["ln_supply_capacity", "ln_resting_rate", "supply_energy", "resting_energy"]
covariance = [[0.004, 0, 0, 0], [0, 0.006, 0, 0], [0, 0, 0.0025, 0], [0, 0, 0, 0.0025]]
"""

STUDY = """
title = "t"
[ocean]
files = ["ocean*"]
[[species]]
file = "a.toml"
activity = [1.0, 2.5]
[[species]]
file = "b.toml"
[[scenario]]
name = "warm"
warming = 2.0
oxygen = "keep AOU"
"""


def write_casts(folder, places, labels=None):
    labels = labels or [f"c{i}" for i in range(len(places))]
    lines = ["cast,latitude,longitude,seabed_depth [m],depth [m],temperature [degC],salinity,oxygen [umol/kg]"]
    for label, (latitude, longitude) in zip(labels, places, strict=True):
        for depth, temperature, oxygen in ((5, 20, 220), (100, 14, 120), (300, 9, 15), (900, 5, 60)):
            lines.append(f'"{label}",{latitude},{longitude},1000,{depth},{temperature},35,{oxygen}')
    (folder / "ocean.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")


@pytest.fixture
def prepare(tmp_path):
    """Give a function that computes what `draw` needs from casts at these places."""
    (tmp_path / "figures").mkdir()

    def preparer(places=((0, 0), (0, 1), (0, 2)), labels=None, names=("Veil prawn", "Bare prawn"), text=STUDY):
        write_casts(tmp_path, places, labels)
        for file, name, more in zip("ab", names, (UNCERTAIN, ""), strict=True):
            (tmp_path / f"{file}.toml").write_text(PRAWN.format(name=name) + more, encoding="utf-8")
        (tmp_path / "study.toml").write_text(text, encoding="utf-8")
        study = read_study(tmp_path / "study.toml")
        columns = open_ocean(study.ocean_files)
        oceans = {"baseline": columns} | {change.name: apply(columns, change) for change in study.scenarios}
        return study, oceans, [results_of(animal, oceans) for animal in study.animals], tmp_path / "figures"

    return preparer


def results_of(animal, oceans):
    arguments = animal.species, animal.activities
    totals = {name: viability.column_totals(columns, *arguments) for name, columns in oceans.items()}
    return Results(animal, totals, viability.band_table(oceans["baseline"], *arguments))


@pytest.fixture
def drawn(monkeypatch):
    """Put stand-ins in the place of the drawing functions; gather what they are given."""
    calls = []

    def stand_in(name):
        def draws(*data, **options):
            calls.append((name, data, options))
            return Figure()

        monkeypatch.setattr(figures, name, draws)

    for name in ("profile_picture", "section_picture", "station_map", "thickness_map"):
        stand_in(name)
    monkeypatch.setattr(figures, "save", lambda _figure, stem: stem.with_name(f"{stem.name}.png").touch())
    return calls


# --- how many ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("places", "number"),
    [
        # 2 animals x casts, then 2 oceans x (2 + 1) activities; a section for 2 animals x 2 oceans from three places on
        ([(0, 0)], 2 * 1 + 6),
        ([(0, 0), (0, 1)], 2 * 2 + 6),
        ([(0, 0), (0, 1), (0, 0)], 2 * 3 + 6),
        ([(0, 0), (0, 1), (0, 2)], 2 * 3 + 6 + 4),
    ],
)
def test_as_many_pictures_as_were_counted_and_each_in_a_file_of_its_own(prepare, drawn, places, number):
    study, oceans, results, folder = prepare(places)
    assert count_pictures(study, oceans["baseline"]) == number
    titles = list(draw(study, oceans, results, folder))
    assert len(titles) == len(drawn) == len(list(folder.iterdir())) == number
    assert [options["title"] for _, _, options in drawn] == titles


def test_a_grid_has_maps_only(prepare, drawn):
    study, _, _, folder = prepare()
    columns = grid_of_two_times()
    oceans = {"baseline": columns, "warm": apply(columns, study.scenarios[0])}
    results = [results_of(animal, oceans) for animal in study.animals]
    titles = list(draw(study, oceans, results, folder))
    assert len(titles) == count_pictures(study, columns) == 2 * (2 + 1) == len(list(folder.iterdir()))
    assert {name for name, *_ in drawn} == {"thickness_map"}
    for _, (shown, before), options in drawn:
        assert set(shown.dims) == set() or set(shown["thickness"].dims) == {"latitude", "longitude"}  # mean over time
        assert (before is None) == ("baseline" in options["title"])
    mean = results[0].totals["warm"]["thickness"].isel(activity=1).mean("time")
    np.testing.assert_array_equal(drawn[3][1][0]["thickness"], mean)


def grid_of_two_times():
    rng = np.random.default_rng(3)
    dims = ("time", "latitude", "longitude", "level")
    fall = np.array([1.0, 0.5, 0.05])
    columns = xr.Dataset(
        {
            "temperature": (dims, 20 * fall + rng.uniform(0, 1, (2, 2, 3, 3))),
            "salinity": (dims, np.full((2, 2, 3, 3), 35.0)),
            "oxygen": (dims, 220 * fall + rng.uniform(0, 9, (2, 2, 3, 3))),
            "depth": ("level", [0.0, 100.0, 400.0]),
            "pressure": ("level", [0.0, 101.0, 403.0]),
        },
        coords={"latitude": [0.0, 1.0], "longitude": [0.0, 1.0, 2.0], "time": [1, 2]},
    )
    return columns.assign_attrs(form="grid")


# --- with which data ---------------------------------------------------------------------------------------------


def test_a_profile_is_given_its_own_cast_and_bands(prepare, drawn):
    study, oceans, results, folder = prepare()
    list(draw(study, oceans, results, folder))
    profiles = [(data, options) for name, data, options in drawn if name == "profile_picture"]
    (profile, bands), options = profiles[1]
    assert options["title"] == "Veil prawn, cast c1"
    assert set(bands["cast"]) == {"c1"}
    assert profile["scenario"].values.tolist() == ["baseline", "warm"]
    po2 = viability.oxygen_pressure(oceans["warm"]).isel(cast=1)
    np.testing.assert_allclose(profile["po2"].sel(scenario="warm"), po2)
    species = study.animals[0].species
    wanted = 2.5 * species.pcrit(oceans["warm"]["temperature"].isel(cast=1))
    np.testing.assert_allclose(profile["needed"].sel(scenario="warm", activity=2.5), wanted)
    assert (profile["needed_p05"] < profile["needed"]).all()
    assert (profile["needed_p95"] > profile["needed"]).all()
    (bare, _), options = profiles[3]
    assert options["title"] == "Bare prawn, cast c0"
    assert "needed_p05" not in bare  # nothing is known, so nothing is drawn


def test_a_section_knows_distance_and_seabed(prepare, drawn):
    study, oceans, results, folder = prepare()
    list(draw(study, oceans, results, folder))
    section = next(data[0] for name, data, _ in drawn if name == "section_picture")
    # a degree of longitude at the equator of a sphere of 6371 km: 111.195 km
    np.testing.assert_allclose(section["distance"], [0.0, 111.195, 222.390], atol=0.001)
    assert section["seabed_depth"].values.tolist() == [1000.0] * 3
    assert section["margin"].sizes["activity"] == 2


def test_a_map_of_casts_shows_the_change_from_the_baseline(prepare, drawn):
    study, oceans, results, folder = prepare()
    list(draw(study, oceans, results, folder))
    maps = {options["title"]: data[0] for name, data, options in drawn if name == "station_map"}
    before, after = maps["Veil prawn, activity 2.5, baseline"], maps["Veil prawn, activity 2.5, warm"]
    assert "change_m" not in before
    np.testing.assert_allclose(after["change_m"], after["thickness_m"] - before["thickness_m"])
    assert (after["change_m"] < 0).all()  # warmer at the same oxygen debt: less room


# --- names of files ----------------------------------------------------------------------------------------------


def names_of(folder):
    return [path.name for path in folder.iterdir()]


@pytest.mark.usefixtures("drawn")
def test_names_are_plain_and_tell_what_is_shown(prepare):
    study, oceans, results, folder = prepare([(0, 0)])
    list(draw(study, oceans, results, folder))
    assert {"profile_veil-prawn_c0.png", "map_veil-prawn_activity-2.5_warm.png"} <= set(names_of(folder))


@pytest.mark.usefixtures("drawn")
def test_different_names_never_share_a_file(prepare):
    labels = ["a/b", "a-b", "A B", "../../a b", "Ö1", "Ä1", "1"]
    study, oceans, results, folder = prepare([(0, i) for i in range(7)], labels, names=("Крилль", "Кальмар"))
    list(draw(study, oceans, results, folder))
    assert len(names_of(folder)) == count_pictures(study, oceans["baseline"])
    assert all(re.fullmatch(r"[a-z0-9][\w.-]*\.png", name, re.ASCII) for name in names_of(folder))
    assert {entry.name for entry in folder.parent.iterdir()} == {
        "figures",
        "ocean.csv",
        "a.toml",
        "b.toml",
        "study.toml",
    }


@pytest.mark.usefixtures("drawn")
def test_very_long_names_fit_every_file_system(prepare):
    labels = ["x" * 400 + end for end in "12"]
    study, oceans, results, folder = prepare([(0, 0), (0, 1)], labels, names=("n" * 400, "n" * 399 + "m"))
    list(draw(study, oceans, results, folder))
    assert len(names_of(folder)) == count_pictures(study, oceans["baseline"])
    assert max(map(len, names_of(folder))) < 140  # some encrypted folders allow 143 characters


def test_a_name_of_only_odd_characters_still_gets_a_file(tmp_path):
    assert pictures._stem(tmp_path, "profile", "///", "???") == tmp_path / "profile"


# --- really drawn ------------------------------------------------------------------------------------------------


def test_pictures_of_a_small_study_are_written(prepare):
    text = STUDY.replace('[[species]]\nfile = "b.toml"\n', "")
    study, oceans, results, folder = prepare([(0, 0)], text=text)
    list(draw(study, oceans, results[:1], folder))
    written = names_of(folder)
    assert {f"profile_veil-prawn_c0.{kind}" for kind in ("png", "svg")} <= set(written)
    assert len(written) == 2 * count_pictures(study, oceans["baseline"])
    assert (folder / "profile_veil-prawn_c0.png").read_bytes().startswith(b"\x89PNG")
