"""The command line: exit statuses, one clear line for every bad input, and nothing written when it fails."""

import json
import os
import shutil
import signal
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat.cli import main
from habitat.viability import BAND_COLUMNS

REPOSITORY = Path(__file__).resolve().parents[1]
PRAWN = REPOSITORY / "examples" / "veil_prawn.toml"
PROFILES = REPOSITORY / "profiles" / "example"
GRID = PROFILES / "halvane_grid.nc"
RUN = [sys.executable, "-c", "from habitat.cli import main; main()"]


@dataclass(frozen=True)
class Done:
    """What a command that has ended left: status and texts."""

    returncode: int
    stdout: str
    stderr: str


@pytest.fixture
def habitat(folder, monkeypatch, capsys):
    """Give a function that runs a command in `folder`, in this process, which saves the start of Python."""
    monkeypatch.chdir(folder)
    monkeypatch.setattr(signal, "signal", lambda *_: None)

    def runner(*arguments):
        monkeypatch.setattr(sys, "argv", ["habitat", *map(str, arguments)])
        capsys.readouterr()
        with pytest.raises(SystemExit, match=r"^\d*$") as ended:
            main()
        return Done(int(ended.value.code or 0), *capsys.readouterr())

    return runner


CAST = """# latitude: 20.5
# longitude: -112
depth [m],temperature [degC],salinity,oxygen [umol/kg]
5,20,35,220
100,14,35,120
400,8,34.6,15
900,5,34.5,60
"""

STUDY = """
title = "t"
[ocean]
files = ["cast.csv"]
[[species]]
file = "prawn.toml"
activity = [1.0, 2.5]
[[scenario]]
name = "warm"
warming = 2.0
oxygen = "keep AOU"
[output]
figures = false
draws = 8
"""


@pytest.fixture
def folder(tmp_path):
    """A study of one cast, and a species file."""
    (tmp_path / "cast.csv").write_text(CAST)
    (tmp_path / "prawn.toml").write_text(PRAWN.read_text())
    (tmp_path / "study.toml").write_text(STUDY)
    return tmp_path


def everything(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


@pytest.fixture
def refused(folder, habitat):
    """Give a function that runs a command which must fail with one line and change no file; it gives the line."""

    def runner(*arguments, status=1):
        before = everything(folder)
        done = habitat(*arguments)
        assert done.returncode == status, done.stderr
        assert done.stdout == ""
        assert everything(folder) == before
        if status == 1:
            assert done.stderr.count("\n") == 1, done.stderr
            assert done.stderr.startswith("habitat: ")
        return done.stderr

    return runner


# --- what works --------------------------------------------------------------------------------------------------


def test_a_study_ends_with_status_0_and_says_where_the_results_are(folder, habitat):
    done = habitat("study", "study.toml")
    assert (done.returncode, done.stdout) == (0, "")
    assert done.stderr == "results in out: start with findings.md and methods.md\n"
    assert json.loads((folder / "out" / "run.json").read_text())["title"] == "t"


def test_a_study_writes_where_it_is_told(folder, habitat):
    done = habitat("study", folder / "study.toml", "--out", "deep/er")
    assert done.returncode == 0
    assert (folder / "deep" / "er" / "run.json").is_file()
    assert not (folder / "out").exists()


def test_bands_in_a_pipe_are_csv_and_nothing_else(folder):
    command = [*RUN, "bands", "cast.csv", "--species", "prawn.toml", "--activity", "1,2.5"]
    done = subprocess.run(command, cwd=folder, capture_output=True, text=True, check=True)
    assert done.stderr == ""
    lines = done.stdout.splitlines()
    assert lines[0] == ",".join(BAND_COLUMNS)
    assert [line.split(",")[:4] for line in lines[1:]] == [
        ["Veil prawn", activity, "baseline", "cast"] for activity in ("1", "1", "2.5", "2.5")
    ]


def test_bands_are_written_as_table_and_as_grid(folder, habitat):
    assert habitat("bands", "cast.csv", "--species", "prawn.toml", "--out", "x.csv").returncode == 0
    assert list(pd.read_csv(folder / "x.csv").columns) == list(BAND_COLUMNS)
    done = habitat(
        "bands", GRID, "--species", "prawn.toml", "--out", "x.nc", "--uncertainty", "--chance", "--no-hydrostatic",
    )  # fmt: skip
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")
    with xr.open_dataset(folder / "x.nc") as file:
        assert {"thickness", "upper_p05", "mean_thickness", "chance"} <= set(file.data_vars)
        assert "without the hydrostatic term" in file.attrs["comment"]


def test_inspect_describes_a_file(habitat):
    done = habitat("inspect", "cast.csv")
    assert (done.returncode, done.stderr) == (0, "")
    for words in ("CSV table: 1 cast, 4 samples", "oxygen [umol/kg]", "220", "latitude 20.5"):
        assert words in done.stdout


def test_depths_negative_upward_are_taken_and_reported(folder, habitat):
    rows = [line if "," not in line or line[0] in "#d" else f"-{line}" for line in CAST.splitlines()]
    assert rows[-1].startswith("-900,")
    (folder / "upward.csv").write_text("\n".join(rows) + "\n")
    told = habitat("inspect", "upward.csv")
    assert told.returncode == 0
    assert "depth: values run upward (-900 to -5 m); the sign was turned" in told.stdout
    arguments = ("--species", "prawn.toml")
    upward, usual = (habitat("bands", name, *arguments) for name in ("upward.csv", "cast.csv"))
    assert upward.returncode == 0
    assert upward.stdout.replace("upward", "cast") == usual.stdout


def test_the_version_is_told(habitat):
    done = habitat("--version")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout.startswith("habitat 0.")


@pytest.mark.parametrize("arguments", [(), ("--help",)])
def test_help_lists_the_commands(habitat, arguments):
    done = habitat(*arguments)
    for command in ("study", "bands", "inspect"):
        assert f"\n  {command} " in done.stdout + done.stderr
    assert done.returncode == 0 or not arguments


def test_help_does_not_load_the_libraries():
    code = (
        "import sys, atexit\n"
        "heavy = ('numpy', 'xarray', 'pandas', 'matplotlib', 'scipy', 'dask', 'netCDF4')\n"
        "atexit.register(lambda: print('loaded:', [name for name in heavy if name in sys.modules]))\n"
        "from habitat.cli import main; main()"
    )
    done = subprocess.run([sys.executable, "-c", code, "bands", "--help"], capture_output=True, text=True, check=True)
    assert "loaded: []" in done.stdout


# --- wrong usage -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("text", ["abc", "", "0", "-1", "nan", "inf", "1,1", "1;2", "1,"])
def test_activity_factors_are_numbers(refused, text):
    told = refused("bands", "cast.csv", "--species", "prawn.toml", "--activity", text, status=2)
    words = " ".join(told.split())
    assert f"'{text}': expected different numbers above 0, separated by commas, for example 1,2.5" in words


@pytest.mark.parametrize(
    "arguments",
    [
        ("bands", "cast.csv"),
        ("bands", "--species", "prawn.toml"),
        ("study",),
        ("fly",),
        ("study", "study.toml", "--fast"),
    ],
    ids=["no species", "no ocean", "no study", "no such command", "no such option"],
)
def test_wrong_usage_ends_with_status_2(refused, arguments):
    assert "Usage: " in refused(*arguments, status=2)


# --- bad input ---------------------------------------------------------------------------------------------------


def replaced(old, new):
    assert CAST.count(old) >= 1
    return CAST.replace(old, new)


def without_column(index):
    lines = [
        line if line.startswith("#") else ",".join(np.delete(line.split(","), index)) for line in CAST.splitlines()
    ]
    return "\n".join(lines) + "\n"


BAD_CASTS = {
    "no oxygen": (without_column(3), "cast.csv: no oxygen (only temperature and salinity) among"),
    "no salinity": (without_column(2), "cast.csv: no salinity (only temperature and oxygen) among"),
    "no depth": (without_column(0), "no depth or pressure among"),
    "no position": (replaced("# latitude: 20.5\n# longitude: -112\n", ""), "no latitude and no longitude among"),
    "unknown unit": (replaced("umol/kg", "bushels"), "cast.csv, 'oxygen [bushels]': "),
    "unit of something else": (replaced("oxygen [umol/kg]", "oxygen [m]"), "cast.csv, 'oxygen [m]': "),
    "no unit": (replaced("oxygen [umol/kg]", "oxygen"), "'oxygen': no unit given; expected the unit of oxygen; write"),
    "millilitres labelled umol/kg": (
        replaced("220", "4.9").replace(",120", ",2.7").replace(",15", ",0.3").replace(",60", ",1.3"),
        "the unit may be ml/l",
    ),
    "umol/kg labelled ml/l": (replaced("[umol/kg]", "[ml/l]"), "the unit may be umol/kg"),
    "kelvin labelled degC": (
        replaced(",20,", ",293.15,").replace(",14,", ",287.15,").replace(",8,", ",281.15,").replace(",5,", ",278.15,"),
        "this looks like kelvin labelled 'degC'",
    ),
    "every oxygen missing": (
        replaced(",220", ",").replace(",120", ",").replace(",15", ",-999").replace(",60", ",nan"),
        "every oxygen value is missing: 3 missing in the file; 1 fill value -999",
    ),
    "latitude out of range": (replaced("20.5", "205"), "latitude 205; expected degrees between -90 and 90"),
    "a word among the numbers": (replaced("14", "cold"), "'cold' in line 5, column 'temperature [degC]', is"),
    "a field too few": (replaced("100,14,35,120", "100,14,35"), "line 5 has 3 fields; expected 4"),
    "empty": ("", "cast.csv: the file is empty"),
    "headings only": ("\n".join(CAST.splitlines()[:3]), "headings but no rows"),
    "binary": ("\x00\x01\x02" * 100, "cast.csv: this is a binary file of unknown kind"),
}  # fmt: skip


@pytest.mark.parametrize("name", BAD_CASTS)
def test_a_bad_cast_is_one_clear_line(folder, refused, name):
    content, message = BAD_CASTS[name]
    (folder / "cast.csv").write_text(content)
    assert message in refused("bands", "cast.csv", "--species", "prawn.toml", "--out", "t.csv")


def test_a_bad_cast_stops_a_study_before_it_writes(folder, refused):
    (folder / "cast.csv").write_text(BAD_CASTS["umol/kg labelled ml/l"][0])
    assert "the unit may be umol/kg" in refused("study", "study.toml")
    assert sorted(os.listdir(folder)) == ["cast.csv", "prawn.toml", "study.toml"]


def write_truncated(path):
    path.write_bytes(GRID.read_bytes()[:40_000])


def write_headless(path):
    path.write_bytes(GRID.read_bytes()[:100])


def write_without_oxygen(path):
    with xr.open_dataset(GRID) as grid:
        grid.drop_vars("oxygen").to_netcdf(path)


def write_without_unit(path):
    shutil.copy(GRID, path)
    with netCDF4.Dataset(path, "a") as file:
        file["oxygen"].delncattr("units")


def write_in_kelvin(path):
    shutil.copy(GRID, path)
    with netCDF4.Dataset(path, "a") as file:
        file["temperature"][:] = file["temperature"][:] + 273.15


def write_all_missing(path):
    shutil.copy(GRID, path)
    with netCDF4.Dataset(path, "a") as file:
        file["oxygen"][:] = np.ma.array(np.zeros(file["oxygen"].shape), mask=True)


@pytest.mark.parametrize(
    ("writer", "message"),
    [
        (write_truncated, "grid.nc: cannot be read as netCDF"),
        (write_headless, "grid.nc: cannot be read as netCDF"),
        (write_without_oxygen, "grid.nc: no oxygen (only temperature and salinity) among"),
        (write_without_unit, "grid.nc, 'oxygen': no unit given; expected the unit of oxygen"),
        (write_in_kelvin, "this looks like kelvin labelled"),
        (write_all_missing, "grid.nc: every oxygen value is missing"),
    ],
)
def test_a_bad_grid_is_one_clear_line(folder, refused, writer, message):
    writer(folder / "grid.nc")
    assert message in refused("bands", "grid.nc", "--species", "prawn.toml", "--out", "g.nc")


def test_inspect_tells_what_is_wrong_with_a_file(folder, habitat):
    (folder / "cast.csv").write_text(BAD_CASTS["no oxygen"][0])
    done = habitat("inspect", "cast.csv")
    assert "Cannot be used:" in done.stdout
    assert "(not found)" in done.stdout
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("value = 0.75", "value = -0.75", "prawn.toml: supply_capacity.value = -0.75; expected more than 0"),
        ("value = 0.75", "value = 0", "supply_capacity.value = 0; expected more than 0"),
        ("value = 0.75", "value = nan", "supply_capacity.value = nan; expected a finite number"),
        ("value = 0.75", 'value = "0.75"', "supply_capacity.value = '0.75'; expected a number"),
        ('unit = "umol/g/h/kPa"', "", "key 'supply_capacity.unit' is missing; add it"),
        (
            'unit = "umol/g/h/kPa"',
            'unit = "umol/g/h"',
            "[supply_capacity]: unit = 'umol/g/h' cannot be used",
        ),
        ("[0.0036,  0.00144", "[0.0036,  0.00155", "uncertainty.covariance: not symmetric: row 1, column 2"),
        ("[0.0036,  0.00144", "[-0.0036,  0.00144", "uncertainty.covariance: not positive semi-definite"),
        ("activation_energy = 0.22", "activation_energie = 0.22", "unknown key 'supply_capacity.activation_energie'"),
    ],
)
def test_a_bad_species_is_one_clear_line(folder, refused, old, new, message):
    text = (folder / "prawn.toml").read_text()
    assert text.count(old) == 1
    (folder / "prawn.toml").write_text(text.replace(old, new))
    assert message in refused("bands", "cast.csv", "--species", "prawn.toml", "--out", "t.csv")
    assert message in refused("study", "study.toml")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("activity", "activty", "study.toml: unknown key 'species[1].activty'; did you mean 'activity'?"),
        ('["cast.csv"]', '["absent.csv"]', "absent.csv: file not found"),
        ('["cast.csv"]', '["casts/*.csv"]', "casts/*.csv: no file matches this pattern; check folder and ending"),
        ('file = "prawn.toml"', 'file = "shrimp.toml"', "shrimp.toml: file not found"),
        ("warming = 2.0", 'warming = {file = "w.nc", variable = "x"}', "w.nc: file not found"),
        ("[ocean]", "[ocean", "study.toml: not valid TOML (Expected ']'"),
    ],
)
def test_a_bad_study_is_one_clear_line(folder, refused, old, new, message):
    (folder / "study.toml").write_text(STUDY.replace(old, new))
    assert message in refused("study", "study.toml")
    assert not (folder / "out").exists()


@pytest.mark.parametrize(
    "arguments",
    [
        ("study", "no.toml"),
        ("bands", "no.csv", "--species", "prawn.toml"),
        ("bands", "cast.csv", "--species", "no.toml"),
        ("inspect", "no.csv"),
    ],
)
def test_a_file_that_is_not_there(refused, arguments):
    assert ": file not found; " in refused(*arguments)


def test_an_output_that_cannot_be_written(refused):
    message = refused("study", "study.toml", "--out", "cast.csv/out")
    assert "cast.csv is a file; expected a folder; choose another with --out" in message
    message = refused("study", "study.toml", "--out", ".")
    assert "the folder holds other files (cast.csv, prawn.toml, study.toml) and no earlier results" in message
    message = refused("bands", "cast.csv", "--species", "prawn.toml", "--out", "cast.csv/t.csv")
    assert "cast.csv: the folder does not exist" in message
    message = refused("bands", "cast.csv", "--species", "prawn.toml", "--out", "c.nc")
    assert "c.nc: casts have any number of bands each; expected a .csv file for casts" in message
    message = refused("bands", "cast.csv", "--species", "prawn.toml", "--chance", "--out", "t.csv")
    assert "--uncertainty and --chance add to a netCDF grid only" in message


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="this system has no /dev/full")
@pytest.mark.parametrize("arguments", [("bands", "cast.csv", "--species", "prawn.toml"), ("inspect", "cast.csv")])
def test_standard_output_on_a_full_disk(folder, arguments):
    buffered = {name: value for name, value in os.environ.items() if name != "PYTHONUNBUFFERED"}
    with Path("/dev/full").open("w") as full:
        done = subprocess.run(
            [*RUN, *arguments], stdout=full, stderr=subprocess.PIPE, text=True, cwd=folder, env=buffered, check=False
        )
    assert done.returncode == 1
    assert done.stderr == "habitat: standard output: the disk is full; free some space\n"


def test_a_reader_that_goes_away_is_no_error():
    command = [*RUN, "bands", str(GRID), "--species", str(PRAWN)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        assert process.stdout.readline().startswith("species,")
        process.stdout.close()
        assert process.stderr.read() == ""


# --- a run that is stopped ---------------------------------------------------------------------------------------

SLOW = "import time, habitat.tables as t; t.write_csv = lambda *_: (print('ready', flush=True), time.sleep(60)); "


@pytest.mark.parametrize(
    ("number", "status"),
    [(signal.SIGTERM, 143), (signal.SIGINT, 130), (signal.SIGKILL, -signal.SIGKILL)],
    ids=["terminated", "interrupted", "killed"],
)
def test_a_study_that_is_stopped_leaves_no_half_result(folder, habitat, number, status):
    assert habitat("study", "study.toml").returncode == 0
    before = everything(folder / "out")
    command = [sys.executable, "-c", SLOW + RUN[-1], "study", "study.toml"]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        assert process.stdout.readline() == "ready\n"
        process.send_signal(number)
        told = process.communicate(timeout=20)[1]
    assert process.returncode == status
    assert told == ("" if number == signal.SIGKILL else "habitat: stopped before the end\n")
    assert everything(folder / "out") == before
    left = [name for name in os.listdir(folder) if name.startswith(".")]
    assert len(left) == (number == signal.SIGKILL)
    assert habitat("study", "study.toml").returncode == 0
    assert [name for name in os.listdir(folder) if name.startswith(".")] == []
