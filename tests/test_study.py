"""Whole studies: the files of the contract, the same bytes, and every number found again another way."""

import hashlib
import json
import math
import os
import re
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat import study
from habitat.errors import InputError, OutputError
from habitat.ocean import opening
from habitat.study import run_study

REPOSITORY = Path(__file__).resolve().parents[1]
TABLES = {"findings.csv", "findings.md", "findings.tex", "findings.xlsx", "methods.md", "run.json", "bands.csv"}
# The contract of the band table, which other people's scripts read.
BAND_COLUMNS = (
    "species", "activity", "scenario", "cast", "latitude", "longitude", "time", "band", "upper_m", "lower_m",
    "thickness_m", "upper_edge", "lower_edge", "upper_m_p05", "upper_m_p95", "lower_m_p05", "lower_m_p95",
    "upper_m_per_kpa", "lower_m_per_kpa", "least_po2_kpa", "flags",
)  # fmt: skip


def copy_example(folder, name):
    """Copy the example, with few draws and no pictures; give the path of the study file."""
    shutil.copytree(REPOSITORY / "examples", folder / "examples", ignore=shutil.ignore_patterns("out_*", "pictures"))
    shutil.copytree(REPOSITORY / "profiles" / "example", folder / "profiles" / "example")
    path = folder / "examples" / name
    path.write_text(path.read_text() + "figures = false\ndraws = 8\n")
    return path


def bytes_of(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def checksum(path):
    return hashlib.sha256(Path(path).read_bytes()).hexdigest()


@pytest.fixture(scope="module")
def casts(tmp_path_factory):
    """The example of casts, run; path of the study and the folder of its results."""
    path = copy_example(tmp_path_factory.mktemp("casts"), "basin.toml")
    return path, run_study(path)


@pytest.fixture(scope="module")
def grid(tmp_path_factory):
    """The example grid, run; path of the study and the folder of its results."""
    path = copy_example(tmp_path_factory.mktemp("grid"), "basin_grid.toml")
    return path, run_study(path)


def weighted_median(values, weights):
    """Median of values that stand at the middle of their share of the weight, missing ones left out."""
    known = ~np.isnan(values)
    order = np.lexsort((weights[known], values[known]))
    values, weights = values[known][order], weights[known][order]
    return np.interp(0.5, (np.cumsum(weights) - weights / 2) / weights.sum(), values)


def by_column(bands):
    """Edges and thickness of each column from its bands; thickness 0 without a band."""
    data = bands[~bands["flags"].fillna("").str.contains("no-valid-sample")]
    keys = ["species", "activity", "scenario", "cast", "latitude", "time"]
    return data.groupby(keys, sort=False).agg(upper=("upper_m", "min"), lower=("lower_m", "max"),
                                              thickness=("thickness_m", "sum"), band=("band", "max"))  # fmt: skip


# --- what is there -----------------------------------------------------------------------------------------------


def test_a_study_of_casts_writes_the_files_of_the_contract(casts):
    path, folder = casts
    assert folder == path.parent / "out_casts"
    assert set(bytes_of(folder)) == TABLES
    bands = pd.read_csv(folder / "bands.csv")
    assert list(bands.columns) == list(BAND_COLUMNS)
    assert len(bands.groupby(["species", "activity", "scenario", "cast"])) == 2 * 2 * 3 * 8


def test_a_study_of_a_grid_has_a_grid_too(grid):
    _, folder = grid
    assert set(bytes_of(folder)) == TABLES | {"bands.nc"}
    assert list(pd.read_csv(folder / "bands.csv", nrows=1).columns) == list(BAND_COLUMNS)


def test_the_record_lists_every_output_with_its_checksum(grid):
    path, folder = grid
    record = json.loads((folder / "run.json").read_text(encoding="utf-8"))
    assert record["outputs"] == {name: checksum(folder / name) for name in (TABLES | {"bands.nc"}) - {"run.json"}}
    assert record["study"]["sha256"] == checksum(path)
    assert {Path(name).name: value for name, value in record["ocean"]["sources"].items()} == {
        "halvane_grid.nc": checksum(path.parents[1] / "profiles" / "example" / "halvane_grid.nc")
    }
    assert record["ocean"]["columns"] == 4 * 20 * 20
    assert [scenario["name"] for scenario in record["scenarios"]] == [
        "2 degC warmer, saturation kept",
        "end of the century",
    ]


def test_methods_name_every_input_and_each_scenario(casts):
    path, folder = casts
    text = (folder / "methods.md").read_text(encoding="utf-8")
    inputs = [path.with_name(f"{name}.toml") for name in ("veil_prawn", "copper_runner")]
    inputs += (path.parents[1] / "profiles" / "example").glob("*.csv")
    assert len(inputs) == 10
    for name in inputs:
        assert checksum(name) in text, name
    assert "- oxygen: missing in the file: 10\n" in text  # empty oxygen fields of H03 in the example
    assert "**The hydrostatic term was included**" in text
    for name in ("2 degC warmer, saturation kept", "warmer above than below, AOU kept"):
        assert f"### {name}\n" in text
    assert len(re.findall(r"^\| keep \w+ \| (?:used)? *\| [-+]\d", text, re.MULTILINE)) == 6
    assert text.count("| used |") == 2


def test_the_missing_oxygen_of_the_example_is_counted_right(casts):
    path, _ = casts
    missing = 0
    for name in (path.parents[1] / "profiles" / "example").glob("*.csv"):
        table = pd.read_csv(name, comment="#")
        oxygen = table[next(column for column in table if column.startswith("oxygen"))]
        missing += int(oxygen.isna().sum())
    assert missing == 10


def test_tables_to_paste_name_the_title_and_hold_all_rows(casts):
    _, folder = casts
    markdown = (folder / "findings.md").read_text(encoding="utf-8")
    assert markdown.startswith("# Halvane Basin: two animals, eight casts")
    assert len(re.findall(r"^\| (?:Veil prawn|Copper runner) ", markdown, re.MULTILINE)) == 2 * 2 * 3
    latex = (folder / "findings.tex").read_text(encoding="utf-8")
    assert latex.count(r"\\") == 2 * 2 * 3 + 1
    outside = latex[: latex.index(r"\begin{tabular}")].splitlines()
    assert all(line.startswith("%") for line in outside)


# --- the numbers, found again ------------------------------------------------------------------------------------


def test_findings_of_casts_follow_from_the_band_table(casts):
    _, folder = casts
    findings = pd.read_csv(folder / "findings.csv").set_index(["species", "activity", "scenario"])
    columns = by_column(pd.read_csv(folder / "bands.csv"))
    assert len(findings) == 12
    for key, group in columns.groupby(["species", "activity", "scenario"]):
        row, base = findings.loc[key], findings.loc[(*key[:2], "baseline")]
        assert row["columns"] == len(group) == 8
        assert row["thickness_m"] == pytest.approx(group["thickness"].median(), rel=1e-8)
        assert row["upper_m"] == pytest.approx(group["upper"].median(), rel=1e-8)
        assert row["lower_m"] == pytest.approx(group["lower"].median(), rel=1e-8)
        assert row["viable_share"] == (group["band"] > 0).mean()
        hazen = np.quantile(group["thickness"], [0.05, 0.95], method="hazen")
        assert row[["thickness_m_columns_p05", "thickness_m_columns_p95"]].tolist() == pytest.approx(hazen, rel=1e-8)
        assert row["thickness_change_m"] == pytest.approx(row["thickness_m"] - base["thickness_m"], abs=1e-6)
        percent = 100 * (row["thickness_m"] / base["thickness_m"] - 1)
        assert row["thickness_change_percent"] == pytest.approx(percent, abs=1e-6)
        assert row["thickness_m_physiology_p05"] <= row["thickness_m"] <= row["thickness_m_physiology_p95"]


def test_findings_of_a_grid_follow_from_the_band_table_and_the_sphere(grid):
    _, folder = grid
    findings = pd.read_csv(folder / "findings.csv").set_index(["species", "activity", "scenario", "region"])
    columns = by_column(pd.read_csv(folder / "bands.csv")).reset_index()
    # Cells of half a degree on a sphere of 6371 km: R^2 dlon (sin north - sin south)
    north, south = (np.sin(np.radians(columns["latitude"] + half)) for half in (0.25, -0.25))
    columns["area"] = 6371.0**2 * math.radians(0.5) * (north - south)
    groups = columns.groupby(["species", "activity", "scenario"])
    assert len(groups) == 12
    for key, group in groups:
        row = findings.loc[(*key, "whole basin")]
        assert row["columns"] == len(group)
        assert row["columns"] + row["columns_without_data"] == 4 * 400
        area, thickness = group["area"].to_numpy(), group["thickness"].to_numpy()
        assert row["viable_volume_km3"] == pytest.approx((area * thickness).sum() / 1000 / 4, rel=1e-8)
        assert row["viable_share"] == pytest.approx(area[group["band"] > 0].sum() / area.sum(), rel=1e-8)
        assert row["thickness_m"] == pytest.approx(weighted_median(thickness, area), rel=1e-6)
        assert row["upper_m"] == pytest.approx(weighted_median(group["upper"].to_numpy(), area), rel=1e-6, abs=1e-6)
        strip = findings.loc[(*key, "coastal strip")]
        assert 0 < strip["columns"] < row["columns"]
        assert 0 < strip["viable_volume_km3"] < row["viable_volume_km3"]


def test_the_grid_agrees_with_the_band_table_in_every_column(grid):
    _, folder = grid
    columns = by_column(pd.read_csv(folder / "bands.csv")).reset_index()
    with xr.open_dataset(folder / "bands.nc") as file:
        assert file.attrs["Conventions"] == "CF-1.11"
        assert list(file["thickness"].dims) == ["species", "scenario", "activity", "time", "latitude", "longitude"]
        places = columns["cast"].str.split(",", expand=True).astype(int)
        indexers = {
            name: xr.DataArray(places[i], dims="row") for i, name in enumerate(("time", "latitude", "longitude"))
        }
        values = file.isel(indexers)
        for name in ("species", "scenario", "activity"):
            index = pd.Index(file[name].values).get_indexer(columns[name])
            assert (index >= 0).all()
            values = values.isel({name: xr.DataArray(index, dims="row")})
        for name, tabled in (
            ("thickness", "thickness"),
            ("upper", "upper"),
            ("lower", "lower"),
            ("band_count", "band"),
        ):
            np.testing.assert_allclose(values[name], columns[tabled], rtol=1e-6, atol=1e-4, err_msg=name)
        assert int(np.isfinite(file["thickness"]).sum()) == len(columns)  # and nothing else is in the grid


# --- the same bytes ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("which", ["casts", "grid"])
def test_a_second_run_gives_the_same_bytes(which, request):
    path, folder = request.getfixturevalue(which)
    before = bytes_of(folder)
    run_study(path)
    after = bytes_of(folder)
    assert set(after) == set(before)
    assert [name for name in before if before[name] != after[name]] == []


def test_the_order_of_rows_in_the_input_changes_nothing(casts, tmp_path):
    _, folder = casts
    path = copy_example(tmp_path, "basin.toml")
    rng = np.random.default_rng(5)
    for name in (tmp_path / "profiles" / "example").glob("*.csv"):
        lines = name.read_text().splitlines()
        top = next(i for i, line in enumerate(lines) if not line.startswith("#")) + 1
        name.write_text("\n".join([*lines[:top], *rng.permutation(lines[top:])]) + "\n")
    shuffled = run_study(path)
    for name in ("bands.csv", "findings.csv"):
        assert (shuffled / name).read_bytes() == (folder / name).read_bytes()


def test_a_lazy_grid_gives_the_same_findings(grid, tmp_path, monkeypatch):
    _, folder = grid
    path = copy_example(tmp_path, "basin_grid.toml")
    monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
    monkeypatch.setattr(study, "LARGEST_BAND_TABLE", 100)
    lazy = run_study(path)
    assert (lazy / "findings.csv").read_bytes() == (folder / "findings.csv").read_bytes()
    assert not (lazy / "bands.csv").exists()  # 1600 columns are more than 100: the grid holds them
    with xr.open_dataset(lazy / "bands.nc") as a, xr.open_dataset(folder / "bands.nc") as b:
        xr.testing.assert_equal(a, b)


# --- other questions ---------------------------------------------------------------------------------------------


def small_study(folder, changes=(), name="basin.toml"):
    path = copy_example(folder, name)
    text = path.read_text()
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new)
    path.write_text(text)
    return path


def without_uncertainty(path):
    text = path.read_text()
    path.write_text(re.sub(r"(?s)\[uncertainty\].*?(?=\[provenance\])", "", text))


def test_an_animal_without_uncertainty_has_empty_physiology_columns(tmp_path):
    path = small_study(tmp_path, [("halvane_*.csv", "halvane_0[1-3].csv")])
    without_uncertainty(path.with_name("veil_prawn.toml"))
    folder = run_study(path, tmp_path / "elsewhere")
    assert folder == tmp_path / "elsewhere"
    assert not (path.parent / "out_casts").exists()
    findings = pd.read_csv(folder / "findings.csv").set_index("species")
    physiology = [name for name in findings if "physiology" in name and "volume" not in name]
    assert findings.loc["Veil prawn", physiology].isna().all(axis=None)
    assert findings.loc["Copper runner", physiology].notna().all(axis=None)
    bands = pd.read_csv(folder / "bands.csv").set_index("species")
    edges = [name for name in bands if name.endswith(("_p05", "_p95"))]
    assert bands.loc["Veil prawn", edges].isna().all(axis=None)
    assert bands.loc["Copper runner", edges].notna().any(axis=None)
    assert "**No uncertainty is given for this animal**" in (folder / "methods.md").read_text()


def test_a_grid_of_animals_that_differ_in_uncertainty_and_activity(tmp_path):
    runner = 'copper_runner.toml"\nactivity = '
    path = small_study(tmp_path, [(f"{runner}[1.0, 2.5]", f"{runner}[2.5, 4.0]")], "basin_grid.toml")
    without_uncertainty(path.with_name("veil_prawn.toml"))
    folder = run_study(path)
    with xr.open_dataset(folder / "bands.nc") as file:
        prawn, runner = file.sel(species="Veil prawn"), file.sel(species="Copper runner")
        assert file["activity"].values.tolist() == [1.0, 2.5, 4.0]
        assert np.isnan(prawn["thickness"].sel(activity=4.0)).all()
        assert np.isnan(runner["thickness"].sel(activity=1.0)).all()
        assert np.isnan(prawn["mean_thickness"]).all()
        shared = runner.sel(activity=2.5)
        assert (np.isnan(shared["mean_thickness"]) == np.isnan(shared["thickness"])).all()


def test_a_region_without_columns_is_reported_not_refused(tmp_path):
    path = small_study(tmp_path, [("[-120.0, -110.0, 18.0, 28.0]", "[0.0, 10.0, 18.0, 28.0]")])
    findings = pd.read_csv(run_study(path) / "findings.csv")
    assert findings["columns"].tolist() == [0] * 12
    assert findings["thickness_m"].isna().all()


def test_without_the_hydrostatic_term_every_output_says_so(casts, tmp_path):
    path = small_study(tmp_path, [("[ocean]", "[ocean]\nhydrostatic = false")])
    folder = run_study(path)
    assert "**The hydrostatic term was left out**" in (folder / "methods.md").read_text()
    for name in ("findings.md", "findings.tex"):
        assert "PO2 without the hydrostatic term" in (folder / name).read_text()
    assert json.loads((folder / "run.json").read_text())["hydrostatic"] is False
    # exp(V p / (R T)) is more than 1 at every depth, so that without it all is less.
    bands, findings = (
        [pd.read_csv(results / f"{name}.csv") for results in (folder, casts[1])] for name in ("bands", "findings")
    )
    least = [table.groupby("cast")["least_po2_kpa"].first() for table in bands]
    assert (least[0] < 0.999 * least[1]).all()
    assert (findings[0]["thickness_m"] < findings[1]["thickness_m"]).all()


def test_a_title_of_two_lines_stays_a_comment_in_latex(tmp_path):
    path = small_study(tmp_path, [('title = "', 'title = "First\\nsecond '), ("halvane_*.csv", "halvane_08.csv")])
    lines = (run_study(path) / "findings.tex").read_text().splitlines()
    assert lines[0].startswith("% First second Halvane")
    assert lines[2].startswith(r"\begin{tabular}")


# --- failures ----------------------------------------------------------------------------------------------------


def test_a_failure_leaves_the_earlier_results(tmp_path):
    path = small_study(tmp_path, [("keep saturation", "keep AOU")])
    folder = run_study(path)
    before = bytes_of(folder)
    path.write_text(path.read_text().replace("warming = 2.0", 'warming = {file = "absent.nc", variable = "x"}'))
    with pytest.raises(InputError, match=r"absent\.nc: file not found"):
        run_study(path)
    assert bytes_of(folder) == before
    assert {entry.name for entry in path.parent.iterdir() if entry.name.startswith(".")} == set()


def test_a_folder_of_other_files_is_refused_before_the_work(tmp_path, monkeypatch):
    path = small_study(tmp_path)
    (tmp_path / "mine").mkdir()
    (tmp_path / "mine" / "thesis.txt").write_text("mine")
    monkeypatch.setattr(study, "_run", lambda *_: pytest.fail("the work began"))
    with pytest.raises(OutputError, match=r"mine: the folder holds other files \(thesis\.txt\)"):
        run_study(path, tmp_path / "mine")


def test_a_grid_damaged_in_a_later_step_is_told_and_nothing_is_written(tmp_path, damaged_grid):
    path = small_study(tmp_path, name="basin_grid.toml")
    source = tmp_path / "profiles" / "example" / "halvane_grid.nc"
    damaged_grid(source)
    with pytest.raises(InputError, match=r"halvane_grid\.nc: cannot be read as netCDF .*the file may be damaged"):
        run_study(path)
    assert not (path.parent / "out_grid").exists()
    assert [name for name in os.listdir(path.parent) if name.startswith(".")] == []


# --- real measurements -------------------------------------------------------------------------------------------


STUDY_OF_REAL_DATA = """
title = "Real water"
[ocean]
files = ["{file}"]
[[species]]
file = "{species}"
activity = [1.0, 2.5]
[[scenario]]
name = "warmer"
warming = 1.5
oxygen = "keep AOU"
[output]
figures = false
draws = 8
"""


def study_of(file, folder):
    path = folder / "study.toml"
    species = REPOSITORY / "examples" / "veil_prawn.toml"
    path.write_text(STUDY_OF_REAL_DATA.format(file=file, species=species))
    return run_study(path)


def test_a_real_cast(shared_data, tmp_path):
    folder = study_of(shared_data / "casts" / "p02_2004a_00175_00002_ct1.csv", tmp_path)
    bands = pd.read_csv(folder / "bands.csv")
    assert set(zip(bands["activity"], bands["scenario"], strict=True)) == {
        (activity, name) for activity in (1.0, 2.5) for name in ("baseline", "warmer")
    }
    # 30.8 N, 122.3 W: surface to an oxygen minimum that no animal active at 2.5 times its rest can stand
    active = bands[(bands["activity"] == 2.5) & (bands["scenario"] == "baseline")]
    assert active["upper_edge"].iloc[0] == "surface"
    assert 200 < active["lower_m"].iloc[0] < 700
    assert (bands["least_po2_kpa"] < 1.5).all()


def test_a_real_section(shared_data, tmp_path):
    source = shared_data / "section" / "a03_hy1.csv"
    folder = study_of(source, tmp_path)
    rows = [line.split(",") for line in source.read_text().splitlines() if line.count(",") > 20]
    table = pd.DataFrame(rows[2:], columns=[heading.strip() for heading in rows[0]])
    casts = {(station.strip(), cast.strip()) for station, cast in zip(table["STNNBR"], table["CASTNO"], strict=True)}
    bands = pd.read_csv(folder / "bands.csv")
    baseline = bands[(bands["scenario"] == "baseline") & (bands["activity"] == 1.0)]
    assert baseline["cast"].nunique() == len(casts) > 100
    findings = pd.read_csv(folder / "findings.csv")
    assert (findings["columns"] + findings["columns_without_data"]).tolist() == [len(casts)] * 4
    record = json.loads((folder / "run.json").read_text())
    methods = (folder / "methods.md").read_text()
    # WOCE quality flags: 2 good (bottle and water), 6 mean of replicates (water); every oxygen not used is counted
    bottle, water = (table[name].str.strip() for name in ("BTLNBR_FLAG_W", "OXYGEN_FLAG_W"))
    unused = int((~bottle.isin(["2"]) | ~water.isin(["2", "6"]) | (table["OXYGEN"].astype(float) < -900)).sum())
    counted = {reason: count for reason, count in record["ocean"]["discarded"].items() if reason.startswith("oxygen")}
    assert sum(counted.values()) == unused
    for reason, count in record["ocean"]["discarded"].items():
        assert f"- {reason}: {count}\n" in methods
    assert "IPTS-68 to ITS-90" in methods
