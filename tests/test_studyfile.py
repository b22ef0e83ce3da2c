"""The study file: every key, every refusal with its text, and paths."""

import re
from pathlib import Path

import pytest

from habitat.errors import InputError, UnitError
from habitat.regions import EVERYWHERE
from habitat.scenario import Change, FieldFile, Percent
from habitat.studyfile import read_study

PRAWN = """
name = "Prawn"
reference_temperature = 10.0
body_mass = 2.0
[supply_capacity]
value = 1.1
unit = "umol/g/h/kPa"
activation_energy = 0.3
mass_exponent = -0.1
[resting_rate]
value = 2.4
unit = "umol/g/h"
activation_energy = 0.6
mass_exponent = -0.3
"""

POLYGONS = """{"type": "FeatureCollection", "features": [
  {"type": "Feature", "properties": {"name": "bay"},
   "geometry": {"type": "Polygon", "coordinates": [[[0, 0], [2, 0], [2, 2], [0, 0]]]}},
  {"type": "Feature", "properties": {},
   "geometry": {"type": "Polygon", "coordinates": [[[5, 0], [7, 0], [7, 2], [5, 0]]]}}]}"""

LEAST = """
title = "t"
[ocean]
files = ["casts/*.csv"]
[[species]]
file = "prawn.toml"
"""

FULL = """
title = "Prawn depths"
[ocean]
files = ["casts/*.csv", "{absolute}"]
temperature = "CTDTMP"
oxygen = "OXYGEN"
keep_flags = {ctd = [2], bottle = [2, 3]}
hydrostatic = false
[[species]]
file = "prawn.toml"
activity = [1, 2.5]
body_mass = 4.0
[[scenario]]
name = "number"
warming = 2
oxygen = "Keep Saturation"
[[scenario]]
name = "profile"
warming = [[0, 3.0], [500, 1.5]]
oxygen = {percent = -8}
[[scenario]]
name = "fields"
warming = {file = "../w.nc", variable = "dt"}
oxygen = {file = "w.nc", variable = "do"}
[[scenario]]
name = "amount"
oxygen = {change = "-0.2 ml/l"}
[[region]]
name = "box"
box = [170, -170, -10, 10]
[[region]]
name = "shapes"
polygon = "shapes.geojson"
[output]
folder = "../results"
figures = false
draws = 16
"""


@pytest.fixture
def write(tmp_path):
    """Write a study file beside a species file and polygons; give its path."""
    folder = tmp_path / "studies"
    folder.mkdir()
    (folder / "prawn.toml").write_text(PRAWN)
    (folder / "shapes.geojson").write_text(POLYGONS)

    def writer(text):
        (folder / "study.toml").write_text(text, encoding="utf-8")
        return folder / "study.toml"

    return writer


# --- what is read ------------------------------------------------------------------------------------------------


def test_every_key_is_read_and_paths_start_at_the_study(write, tmp_path):
    path = write(FULL.replace("{absolute}", str(tmp_path / "more.csv")))
    study = read_study(path)
    here = tmp_path / "studies"
    assert (study.title, study.file) == ("Prawn depths", path)
    assert study.ocean_files == (str(here / "casts" / "*.csv"), str(tmp_path / "more.csv"))
    assert study.choose == {"temperature": "CTDTMP", "oxygen": "OXYGEN"}
    assert study.keep_flags == {"ctd": [2], "bottle": [2, 3]}
    assert study.hydrostatic is False
    assert (study.folder, study.figures, study.draws) == (tmp_path / "results", False, 16)
    [animal] = study.animals
    assert (animal.file, animal.activities) == (here / "prawn.toml", (1.0, 2.5))
    assert animal.species.body_mass == 4.0
    assert animal.species.resting_rate.value == pytest.approx(2.4 * 2**-0.3)  # twice the mass, exponent -0.3
    number, profile, fields, amount = study.scenarios
    assert (number.warming, number.oxygen) == (2.0, "keep saturation")
    assert (profile.warming, profile.oxygen) == (((0.0, 3.0), (500.0, 1.5)), Percent(-8.0))
    assert fields.warming == FieldFile(tmp_path / "w.nc", "dt")
    assert fields.oxygen == FieldFile(here / "w.nc", "do")
    assert (amount.warming, amount.oxygen) == (0.0, Change(-0.2, "ml/l"))
    assert [region.name for region in study.regions] == ["box", "bay", "shapes 2"]
    assert study.regions[0].shape.bounds == (170, -10, 190, 10)


def test_what_may_be_left_out(write, tmp_path):
    study = read_study(write(LEAST))
    assert study.animals[0].activities == (1.0,)
    assert study.scenarios == ()
    assert [region.name for region in study.regions] == [EVERYWHERE]
    assert (study.choose, study.keep_flags, study.hydrostatic) == ({}, {}, True)
    assert (study.folder, study.figures, study.draws) == (tmp_path / "studies" / "out", True, 128)


def test_a_study_is_found_from_any_working_directory(write, tmp_path, monkeypatch):
    write(LEAST)
    monkeypatch.chdir(tmp_path)
    study = read_study("studies/study.toml")
    assert study.ocean_files == (str(Path("studies") / "casts" / "*.csv"),)
    assert study.animals[0].file == Path("studies/prawn.toml")


def test_brackets_in_the_name_of_the_folder_are_no_pattern(write, tmp_path):
    write(LEAST)
    folder = (tmp_path / "studies").rename(tmp_path / "run[1]")
    (folder / "casts").mkdir()
    (folder / "casts" / "a.csv").write_text("depth [m]\n1\n")
    [pattern] = read_study(folder / "study.toml").ocean_files
    assert [path.name for path in Path("/").glob(pattern.lstrip("/"))] == ["a.csv"]


# --- what is refused ---------------------------------------------------------------------------------------------


def refused(write, text, message, kind=InputError):
    path = write(text)
    with pytest.raises(kind, match=message) as caught:
        read_study(path)
    assert "\n" not in str(caught.value)
    return str(caught.value)


def scenario(lines):
    return f'{LEAST}\n[[scenario]]\nname = "warm"\n{lines}\n'


FILE, SPECIES = 'file = "prawn.toml"', "[[species]]"


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('title = "t"', "", "study.toml: key 'title' is missing; add it"),
        ('title = "t"', 'title = ""', "title = ''; expected a text that is not empty"),
        ('title = "t"', "title = 3", 'title = 3; expected a text in double quotes'),
        ('title = "t"', 'titel = "t"', r"unknown key 'titel'; did you mean 'title'\? \(mistakes in this file: 2\)"),
        ('[ocean]\nfiles = ["casts/*.csv"]', "", "key 'ocean' is missing; add it"),
        ('files = ["casts/*.csv"]', "", "key 'ocean.files' is missing; add it"),
        ('["casts/*.csv"]', "[]", r"ocean.files = \[\]; expected .*at least 1 item"),
        ('["casts/*.csv"]', '"casts.csv"', r"ocean.files = 'casts.csv'; expected a list"),
        (SPECIES, "hydrostatic = 1\n" + SPECIES, "ocean.hydrostatic = 1; expected true or false"),
        (SPECIES, "keep_flags = {ctd = [2.5]}\n" + SPECIES, r"ocean.keep_flags.ctd\[1\] = 2.5; expected a whole"),
        (SPECIES, "keep_flags = {cdt = [2]}\n" + SPECIES, r"unknown key 'ocean.keep_flags.cdt'; did you mean 'ctd'"),
        (SPECIES, 'oxigen = "O"\n' + SPECIES, r"unknown key 'ocean.oxigen'; did you mean 'oxygen'"),
        ('[[species]]\nfile = "prawn.toml"', "", "key 'species' is missing"),
        ('file = "prawn.toml"', 'file = "prwan.toml"', r"prwan\.toml: file not found; did you mean prawn\.toml"),
        (FILE, FILE + '\nactivity = []', r"activity = \[\]; expected .*at least 1 item"),
        (FILE, FILE + '\nactivity = [1, -2]', r"\[1\].activity: found \[1.*, -2.*\]; expected"),
        (FILE, FILE + '\nactivity = [0]', "expected different numbers above 0"),
        (FILE, FILE + '\nactivity = [1, 1.0]', "expected different numbers above 0"),
        (FILE, FILE + '\nactivity = [nan]', r"activity\[1\] = nan; expected a finite number"),
        (FILE, FILE + '\nactivity = ["1"]', r"activity\[1\] = '1'; expected a number"),
        (FILE, FILE + '\nbody_mass = 0', r"body_mass = 0.*; expected more than 0"),
        (FILE, FILE + '\nactvity = [1]', r"'species\[1\].actvity'; did you mean 'activity'"),
    ],
)  # fmt: skip
def test_mistakes_in_title_ocean_and_species(write, old, new, message):
    assert LEAST.count(old) == 1
    assert refused(write, LEAST.replace(old, new), message).count(".toml") >= 1


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("warming = 2", r"key 'scenario\[1\].oxygen' is missing; add it"),
        ('oxygen = "keep saturtion"', r"scenario\[1\].oxygen: found 'keep saturtion'; did you mean 'keep saturation'"),
        ('oxygen = "double"', "found 'double'; known here: keep saturation, keep AOU, keep concentration"),
        ("oxygen = -8", r"oxygen: found -8; expected one of keep saturation, .*\{percent = -8\}"),
        ("oxygen = {percent = -101}", r"percent = -101.*; expected -100.0 or more"),
        ("oxygen = {percent = nan}", "percent = nan; expected a finite number"),
        ('oxygen = {percent = "8"}', "percent = '8'; expected a number"),
        ('oxygen = {percent = -8, change = "1 ml/l"}', "unknown key 'change'"),
        ("oxygen = {}", r"found \{\}; expected one of keep saturation"),
        ('oxygen = {file = "w.nc"}', "key 'variable' is missing"),
        ('oxygen = "keep AOU"\nwarming = true', r"scenario\[1\].warming: found True; expected a number of degC"),
        ('oxygen = "keep AOU"\nwarming = nan', "found nan; expected a number of degC"),
        ('oxygen = "keep AOU"\nwarming = -300', "found -300; expected a number of degC"),
        ('oxygen = "keep AOU"\nwarming = "2"', "found '2'; expected a number of degC"),
        ('oxygen = "keep AOU"\nwarming = {fil = "w.nc", variable = "x"}', "unknown key 'fil'; did you mean 'file'"),
        ('oxygen = "keep AOU"\nwarming = []', r"found \[\]; expected \[\[depth, degC\], \.\.\.\]"),
        ('oxygen = "keep AOU"\nwarming = [0, 2]', r"found \[0, 2\]; expected \[\[depth, degC\], \.\.\.\]"),
        ('oxygen = "keep AOU"\nwarming = [[500, 1], [0, 3]]', "with depths in m, from 0 or more, increasing"),
        ('oxygen = "keep AOU"\nwarming = [[0, 1], [0, 3]]', "with depths in m, from 0 or more, increasing"),
        ('oxygen = "keep AOU"\nwarming = [[-5, 1], [10, 3]]', "with depths in m, from 0 or more, increasing"),
        ('oxygen = "keep AOU"\nwarming = [[0, 1, 2]]', r"found \[\[0, 1, 2\]\]"),
        ('oxygen = "keep AOU"\nwarming = [[0, nan]]', r"found \[\[0, nan\]\]"),
        ('oxygen = "keep AOU"\nwarming = [[nan, 2]]', r"found \[\[nan, 2\]\]"),
        ('oxygen = "keep AOU"\nwarming = [["0", "2"]]', r"found \[\['0', '2'\]\]"),
        ('oxygen = "keep AOU"\nwarming = [[0, 290.0]]', r"found \[\[0, 290.0\]\]"),
        ('oxygen = "keep AOU"\nwarmth = 2', r"unknown key 'scenario\[1\].warmth'; did you mean 'warming'"),
    ],
)  # fmt: skip
def test_mistakes_in_a_scenario(write, lines, message):
    assert "study.toml" in refused(write, scenario(lines), message)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ("-10", r"study.toml, scenario 'warm': oxygen change '-10'; expected a number and a unit"),
        ("ten ml/l", r"scenario 'warm': oxygen change 'ten ml/l'; expected a number and a unit"),
        ("-10 furlongs", r"scenario 'warm': .*furlongs"),
        ("-10 m", r"scenario 'warm': .*'m'"),
    ],
)
def test_an_oxygen_change_needs_a_number_and_a_unit(write, change, message):
    refused(write, scenario(f'oxygen = {{change = "{change}"}}'), message, UnitError)


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("", r"region 'r' needs either box = \[west, east, south, north\] or polygon"),
        ('box = [0, 1, 0, 1]\npolygon = "shapes.geojson"', "region 'r' needs either box"),
        ("box = [0, 1, 0]", "region 'r': box has 3 numbers; expected"),
        ("box = [0, 1, 5, 5]", r"region 'r': latitudes 5.0 to 5.0; expected box = .* with -90"),
        ("box = [0, 1, -91, 5]", r"latitudes -91.0 to 5.0"),
        ("box = [3, 3, 0, 5]", "longitudes 3.0 to 3.0; expected two different meridians"),
        ("box = [0, inf, 0, 5]", r"region\[1\].box\[2\] = inf; expected a finite number"),
        ('polygon = "shapes.json"', r"shapes\.json: file not found; check polygon in region 'r'"),
        ('polygon = "prawn.toml"', r"prawn\.toml: not readable as GeoJSON"),
    ],
)  # fmt: skip
def test_mistakes_in_a_region(write, lines, message):
    refused(write, f'{LEAST}\n[[region]]\nname = "r"\n{lines}\n', message)


@pytest.mark.parametrize(
    ("lines", "message"),
    [
        ("draws = 48", "output.draws: found 48; expected a power of 2, such as 64"),
        ("draws = 4", "output.draws = 4; expected 8 or more"),
        ("draws = 8192", "output.draws = 8192; expected 4096 or less"),
        ("draws = 64.0", "output.draws = 64.0; expected a whole number"),
        ('figures = "no"', "output.figures = 'no'; expected true or false"),
        ('folders = "x"', "unknown key 'output.folders'; did you mean 'folder'"),
    ],
)
def test_mistakes_in_the_output(write, lines, message):
    refused(write, f"{LEAST}\n[output]\n{lines}\n", message)


def test_names_must_differ(write):
    refused(
        write, f'{LEAST}\n[[species]]\nfile = "prawn.toml"\n', "two entries of species are called 'Prawn'; rename one"
    )
    one = '\n[[scenario]]\nname = "warm"\noxygen = "keep AOU"\n'
    refused(write, LEAST + one + one, "two entries of scenario are called 'warm'; rename one")
    refused(
        write,
        LEAST + one.replace("warm", "baseline"),
        "two entries of scenario are called 'baseline'; 'baseline' is the ocean as given; choose another name",
    )
    region = '\n[[region]]\nname = "bay"\nbox = [0, 1, 0, 1]\n[[region]]\nname = "s"\npolygon = "shapes.geojson"\n'
    refused(write, LEAST + region, "two entries of region are called 'bay'; rename one")


def test_a_body_mass_needs_exponents_in_the_species_file(write, tmp_path):
    path = write(LEAST + "body_mass = 3.0\n")
    species = tmp_path / "studies" / "prawn.toml"
    species.write_text(re.sub("mass_exponent.*", "", species.read_text()))
    with pytest.raises(InputError, match=r"Prawn: a body mass of 3\.0 g is asked for, but the species file does"):
        read_study(path)


def test_a_file_that_is_not_toml_is_told_with_its_line(write):
    refused(write, 'title = "t"\n[ocean\nfiles = 3\n', r"study\.toml: not valid TOML \(.*line 2")


def test_one_animal_may_be_asked_for_at_several_masses(write):
    """Pcrit = rate / alpha ~ mass^(-0.3 + 0.1): at 32 times the mass it is half."""
    study = read_study(write(LEAST + '[[species]]\nfile = "prawn.toml"\nbody_mass = 64.0\n'))
    as_measured, larger = (animal.species for animal in study.animals)
    assert (as_measured.name, larger.name) == ("Prawn", "Prawn, 64 g")
    assert larger.pcrit(10.0) == pytest.approx(as_measured.pcrit(10.0) / 2)
