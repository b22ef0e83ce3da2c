"""The record of a run for machines, and the methods for a paper."""

import hashlib
import json
import re
from importlib.metadata import version

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat import report
from habitat.ocean import open_ocean
from habitat.scenario import Percent, Scenario, apply, rule_effects
from habitat.studyfile import read_study

CAST = """depth [m],temperature [degC],salinity,oxygen [ml/l]
5,20,35,4.9
50,18,35,
100,14,35,2.5
400,8,34.6,0.4
"""

KNOWN = """
name = "Veil prawn"
reference_temperature = 10.0
temperature_range = [4.0, 18.0]
body_mass = 1.2
[supply_capacity]
value = 0.75
unit = "umol/g/h/kPa"
activation_energy = 0.22
[resting_rate]
value = 1.2
unit = "umol/g/h"
activation_energy = 0.62
[uncertainty]
order = ["ln_supply_capacity", "ln_resting_rate", "supply_energy", "resting_energy"]
covariance = [[0.004, 0, 0, 0], [0, 0.006, 0, 0], [0, 0, 0.0025, 0], [0, 0, 0, 0.0025]]
[provenance]
trials = 14
date = 2024-05-27
"""

UNKNOWN = re.sub(r"(?s)body_mass.*?\n|temperature_range.*?\n|\[uncertainty\].*", "", KNOWN).replace("Veil", "Bare")

STUDY = """
title = "Where {x} & <y> live"
[ocean]
files = ["cast.csv"]
[[species]]
file = "known.toml"
activity = [1, 2.5]
[[species]]
file = "unknown.toml"
[[region]]
name = "bay"
box = [-10, 10, -10, 10]
[output]
draws = 16
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("report")
    (folder / "cast.csv").write_text("# latitude: 1\n# longitude: 2\n" + CAST)
    (folder / "known.toml").write_text(KNOWN)
    (folder / "unknown.toml").write_text(UNKNOWN)
    return folder


def record_of(folder, text=STUDY, scenarios=()):
    (folder / "study.toml").write_text(text)
    study = read_study(folder / "study.toml")
    columns = open_ocean(study.ocean_files)
    records = [
        report.scenario_record(scenario, apply(columns, scenario), rule_effects(columns, scenario))
        for scenario in scenarios
    ]
    return report.run_record(study, columns, records)


def methods_of(record, folder):
    report.write_methods(record, folder / "methods.md")
    return (folder / "methods.md").read_text(encoding="utf-8")


def checksum(path):
    return hashlib.sha256(path.read_bytes()).hexdigest()


# --- the record --------------------------------------------------------------------------------------------------


def test_the_record_tells_inputs_with_checksums(folder):
    record = record_of(folder)
    assert record["study"] == {"file": str(folder / "study.toml"), "sha256": checksum(folder / "study.toml")}
    assert record["ocean"]["sources"] == {str(folder / "cast.csv"): checksum(folder / "cast.csv")}
    assert [animal["sha256"] for animal in record["animals"]] == [
        checksum(folder / name) for name in ("known.toml", "unknown.toml")
    ]
    assert record["ocean"]["discarded"] == {"oxygen: missing in the file": 1}
    assert (record["ocean"]["columns"], record["ocean"]["levels"], record["ocean"]["form"]) == (1, 4, "casts")
    assert (record["hydrostatic"], record["draws"]) == (True, 16)
    assert record["program"] == {"name": "habitat", "version": version("habitat")}
    assert record["libraries"]["numpy"] == np.__version__
    assert record["regions"][0].startswith("bay: POLYGON")


def test_the_constants_are_those_of_the_published_formula(folder):
    # SCOR WG 142 (doi:10.13155/45915); CODATA 2018
    assert record_of(folder)["constants"] == {
        "oxygen_mole_fraction": 0.20946,
        "standard_atmosphere_kpa": 101.325,
        "partial_molar_volume_m3_mol_pa_dbar": 0.317,
        "gas_constant_j_mol_k": 8.314,
        "boltzmann_ev_k": 8.617333262e-5,
    }


def test_run_json_lists_every_other_file_with_its_checksum(folder, tmp_path):
    (tmp_path / "figures").mkdir()
    (tmp_path / "figures" / "a.png").write_bytes(b"picture")
    (tmp_path / "findings.csv").write_text("a\n1\n")
    record = record_of(folder, scenarios=[Scenario("warm", 2.0, "keep AOU")])
    report.write_record(record, tmp_path)
    read = json.loads((tmp_path / "run.json").read_text(encoding="utf-8"))
    assert read["outputs"] == {
        "figures/a.png": checksum(tmp_path / "figures" / "a.png"),
        "findings.csv": checksum(tmp_path / "findings.csv"),
    }
    assert read["animals"][0]["provenance"] == {"trials": 14, "date": "2024-05-27"}
    assert read["animals"][0]["covariance"][1] == [0, 0.006, 0, 0]
    assert read["animals"][1]["covariance"] is None
    assert read["scenarios"][0]["effects"][0]["chosen"] is True


def test_counts_and_numbers_of_numpy_become_plain_numbers(tmp_path):
    report.write_record({"count": np.int64(3), "share": np.float32(0.5), "path": tmp_path}, tmp_path)
    read = json.loads((tmp_path / "run.json").read_text())
    assert read == {"count": 3, "share": 0.5, "path": str(tmp_path), "outputs": {}}


def test_a_scenario_tells_what_it_did(folder):
    columns = open_ocean([folder / "cast.csv"])
    scenario = Scenario("poor", 2.0, Percent(-8.0))
    changed = apply(columns, scenario).assign(clipped_samples=xr.DataArray(3), lost_samples=xr.DataArray(2))
    record = report.scenario_record(scenario, changed.assign_attrs(notes=["a note"]), pd.DataFrame({"rule": ["r"]}))
    assert record == {
        "name": "poor",
        "warming": "temperature changed by +2 degC",
        "oxygen": "concentration changed by -8 %",
        "clipped_samples": 3,
        "lost_samples": 2,
        "notes": ["a note"],
        "effects": [{"rule": "r"}],
    }


# --- the methods -------------------------------------------------------------------------------------------------


def test_methods_name_formulas_inputs_and_what_was_discarded(folder, tmp_path):
    text = methods_of(record_of(folder), tmp_path)
    assert text.startswith("# Methods: Where {x} & <y> live\n")
    for name in ("cast.csv", "known.toml", "unknown.toml"):
        assert f"`{folder / name}`, SHA-256 {checksum(folder / name)}" in text
    assert "- oxygen: missing in the file: 1\n" in text
    assert "- oxygen: ml/l to umol/kg with potential density at 0 dbar\n" in text
    for source in ("doi:10.13155/45915", "Mar. Chem. 8:347", "37:1307", "69:389", "doi:10.1242/jeb.242210"):
        assert source in text
    assert "came from 16\nquasi-random (Sobol) draws" in text
    assert "1 water columns (casts) with up to 4 levels" in text
    assert "Activity factors: 1.0, 2.5." in text
    assert "Measured at 4.0 to 18.0 degC" in text
    assert "Provenance: trials: 14; date: 2024-05-27" in text
    assert "- bay: POLYGON" in text


def test_methods_say_that_no_uncertainty_is_given(folder, tmp_path):
    text = methods_of(record_of(folder), tmp_path)
    bare = text[text.index("**Bare prawn**") : text.index("## Ocean")]
    assert "**No uncertainty is given for this animal**" in bare
    assert "range of temperatures measured is not stated" in bare
    known = text[text.index("**Veil prawn**") : text.index("**Bare prawn**")]
    assert "No uncertainty" not in known
    assert "Covariance of (ln alpha, ln rate, E_alpha, E_rate): [[0.004" in known


def test_methods_say_whether_the_hydrostatic_term_is_in(folder, tmp_path):
    with_term = methods_of(record_of(folder), tmp_path)
    assert "exp(V p / (R T))" in with_term
    assert "**The hydrostatic term was included**" in with_term
    without = methods_of(
        record_of(folder, STUDY.replace("[[species]]", "hydrostatic = false\n[[species]]", 1)), tmp_path
    )
    assert "exp(V p" not in without
    assert "**The hydrostatic term was left out**" in without
    assert "Enns" not in without


def test_methods_show_what_each_rule_does_to_po2(folder, tmp_path):
    scenarios = [Scenario("warm", 2.0, "keep saturation"), Scenario("poor", 0.0, Percent(-8.0))]
    text = methods_of(record_of(folder, scenarios=scenarios), tmp_path)
    warm, poor = re.split(r"### (?:warm|poor)\n", text)[1:]
    rows = re.findall(r"\| (keep \w+|concentration changed by -8 %) \| (used)? *\| ([-+][\d.]+) ", warm + poor)
    assert [(rule, used) for rule, used, _ in rows] == [
        ("keep saturation", "used"),
        ("keep AOU", ""),
        ("keep concentration", ""),
        ("concentration changed by -8 %", "used"),
        ("keep saturation", ""),
        ("keep AOU", ""),
        ("keep concentration", ""),
    ]
    changes = [float(change) for *_, change in rows]
    assert changes[2] > 0 > changes[1]  # warming raises PO2 at a fixed concentration, lowers it at a fixed AOU
    assert abs(changes[0]) < 0.1
    assert changes[4:] == [0.0, 0.0, 0.0]  # without warming the rules do nothing
    assert "Temperature changed by +2 degC; keep saturation." in warm
    assert "Warming alone does not say what becomes of the oxygen" in text


def test_methods_without_scenarios_say_so(folder, tmp_path):
    text = methods_of(record_of(folder), tmp_path)
    assert "None: the ocean as given (baseline) only." in text
    assert "Warming alone" not in text


def test_methods_name_lost_samples_notes_and_suspicions(folder, tmp_path):
    record = record_of(folder, scenarios=[Scenario("warm", 2.0, "keep AOU")])
    record["scenarios"][0] |= {"clipped_samples": 31, "lost_samples": 7, "notes": ["the field ends at 100 m"]}
    record["ocean"] |= {"suspicious": ["one odd thing"], "discarded": {}, "conversions": []}
    record["ocean"]["sources"] = {"huge.nc": None}
    text = methods_of(record, tmp_path)
    assert "set to 0 in 31 samples; 7 samples were lost because the field gives no change there." in text
    assert "The field ends at 100 m." in text
    assert "Suspicious, kept:\n\n- one odd thing\n" in text
    assert "Discarded:\n\n- nothing\n" in text
    assert "Conversions made:\n\n- none\n" in text
    assert "- `huge.nc`, SHA-256 not taken (file larger than 1 GiB)\n" in text
