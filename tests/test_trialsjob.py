"""From trial files to a species file, a table and pictures, through the command line."""

import csv
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest

from habitat.errors import InputError, OutputError
from habitat.species import BOLTZMANN, read_species
from habitat.trialsjob import read_trials

ALPHA, SUPPLY_ENERGY, REST, RESTING_ENERGY = 1.1, 0.30, 2.4, 0.62


def habitat(*arguments):
    """Run the command line; give status, standard output and standard error."""
    command = [sys.executable, "-c", "from habitat.cli import main; main()", *map(str, arguments)]
    return subprocess.run(command, capture_output=True, text=True, check=False)


def rows(seed=5, individuals=3, temperatures=(6.0, 10.0, 14.0)):
    """Invented trials of animals that ask for rest and get at most alpha PO2, read by a probe that is off."""
    rng = np.random.default_rng(seed)
    for i in range(individuals):
        for temperature in temperatures:
            x = (1 / 283.15 - 1 / (temperature + 273.15)) / BOLTZMANN
            alpha, rest = ALPHA * np.exp(SUPPLY_ENERGY * x), REST * np.exp(RESTING_ENERGY * x)
            po2 = np.geomspace(20.0, 0.3, 60)
            rate = np.minimum(rest, alpha * po2) * rng.normal(1, 0.04, 60) + rng.normal(0, 0.02 * rest, 60)
            read = po2 - rng.normal(0, 0.12) + rng.normal(0, 0.02, 60)
            yield from ((f"a{i} {temperature:g}", f"a{i}", *pair, temperature) for pair in zip(read, rate, strict=True))


@pytest.fixture(scope="module")
def trials(tmp_path_factory):
    path = tmp_path_factory.mktemp("trials") / "trials.csv"
    with path.open("w", newline="") as stream:
        table = csv.writer(stream)
        table.writerow(["trial", "individual", "po2 [kPa]", "rate [umol/g/h]", "temperature [degC]"])
        table.writerows(rows())
    return path


@pytest.fixture(scope="module")
def done(trials, tmp_path_factory):
    folder = tmp_path_factory.mktemp("out")
    outputs = ["--out", folder / "s.toml", "--table", folder / "t.csv", "--pictures", folder / "pictures"]
    run = habitat("trials", trials, "--species-name", "Prawn", *outputs)
    assert (run.returncode, run.stdout) == (0, "")
    assert run.stderr == f"species in {folder / 's.toml'}: 9 trials; flags: none\n"
    return folder


def test_the_species_file_is_read_back_and_holds_the_truth(done, trials):
    species = read_species(done / "s.toml")
    assert species.name == "Prawn"
    assert species.temperature_range == (6.0, 14.0)
    deviation = np.sqrt(np.diag(species.covariance))
    truth = [np.log(ALPHA), np.log(REST), SUPPLY_ENERGY, RESTING_ENERGY]
    found = [
        *(np.log(species.supply_capacity.value), np.log(species.resting_rate.value)),
        *(species.supply_capacity.activation_energy, species.resting_rate.activation_energy),
    ]
    assert (np.abs(np.array(found) - truth) < 3 * deviation).all()
    assert species.pcrit(10.0) == pytest.approx(REST / ALPHA, rel=0.05)
    assert species.provenance["supply_estimator"] == "joint"
    assert list(species.provenance["files"]) == [str(trials)]
    assert species.provenance["made_by"].startswith("habitat ")


def test_the_table_has_one_row_a_trial(done):
    table = pd.read_csv(done / "t.csv", keep_default_na=False)
    assert len(table) == 9
    assert table["n"].eq(60).all()
    assert (table["critical_po2_p025"].astype(float) < table["critical_po2_kpa"].astype(float)).all()


def test_there_is_a_picture_of_each_trial_and_two_of_the_species(done):
    names = sorted(path.name for path in (done / "pictures").iterdir())
    assert len(names) == 2 * (9 + 2)
    assert {"species.png", "offsets.svg", "trial_a0-6.png"} <= set(names)


def test_a_species_file_from_trials_finds_bands(done):
    run = habitat("bands", "profiles/example/halvane_05.csv", "--species", done / "s.toml")
    assert run.returncode == 0
    assert run.stdout.count("Prawn,") >= 1


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["--supply", "best"], "--supply: estimator 'best'"),
        (["--window", "10 min"], "--window 10 min without --chambers"),
        (["--background-left", "2"], "background_sd 2"),
        (["--reference-temperature", "200"], "200"),
    ],
)
def test_what_cannot_be_served_is_one_line_and_writes_nothing(trials, tmp_path, arguments, said):
    run = habitat("trials", trials, "--species-name", "P", "--out", tmp_path / "s.toml", *arguments)
    assert run.returncode == 1
    assert said in run.stderr
    assert run.stderr.count("\n") == 1
    assert list(tmp_path.iterdir()) == []


def test_energies_are_two_numbers(trials, tmp_path):
    run = habitat("trials", trials, "--species-name", "P", "--out", tmp_path / "s.toml", "--supply-energy", "high")
    assert run.returncode == 2
    assert "'high': expected a value and its standard deviation" in run.stderr


def test_a_folder_with_pictures_is_not_overwritten(trials, tmp_path):
    (tmp_path / "pictures").mkdir()
    (tmp_path / "pictures" / "mine.png").touch()
    arguments = ("--out", tmp_path / "s.toml", "--pictures", tmp_path / "pictures")
    run = habitat("trials", trials, "--species-name", "P", *arguments)
    assert run.returncode == 1
    assert "pictures: exists and is not an empty folder" in run.stderr
    assert sorted(path.name for path in tmp_path.iterdir()) == ["pictures"]


def test_raw_traces_become_trials(tmp_path):
    """A closed chamber in which 0.5 umol/l/min is used: 30 umol/l/h times (1 l - 0.01 l) / 10 g."""
    hours = np.arange(0, 2, 1 / 120)
    trace = pd.DataFrame({"trial": "T", "time [h]": hours, "oxygen [umol/l]": 250 - 30 * hours})
    trace.assign(**{"temperature [degC]": 10.0, "salinity": 35.0}).to_csv(tmp_path / "trace.csv", index=False)
    pd.DataFrame({"trial": ["T"], "volume [l]": [1.0], "mass [g]": [10.0]}).to_csv(tmp_path / "c.csv", index=False)
    for window in ("10 min", "0.3 kPa", "600 s"):
        trials = read_trials(tmp_path / "trace.csv", tmp_path / "c.csv", window=window, settling_hours=0.0)
        np.testing.assert_allclose(trials[0].rate, 30 * 0.99 / 10, rtol=1e-6)
    with pytest.raises(InputError, match=r"--window: window '10 m/s'; expected a size such as"):
        read_trials(tmp_path / "trace.csv", tmp_path / "c.csv", window="10 m/s", settling_hours=0.0)


def test_an_output_folder_that_is_not_there_is_said_before_the_work(tmp_path, monkeypatch):
    from habitat import trialsjob

    monkeypatch.setattr(trialsjob, "analyse", lambda *_, **__: pytest.fail("the work began"))
    with pytest.raises(OutputError, match=r"absent: the folder does not exist"):
        trialsjob.write_trials(
            [], species_name="P", out=tmp_path / "absent" / "s.toml", table=None, pictures=None, sources=[],
            supply="joint", resting="joint", background_sd=0.01, reference_temperature=None, energies=None,
        )  # fmt: skip
