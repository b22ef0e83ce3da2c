"""Bands of one species, written as table or grid, or on standard output."""

import io
import os
import re
from pathlib import Path

import netCDF4
import numpy as np
import pandas as pd
import pytest
import xarray as xr

from habitat.bandfile import write_bands
from habitat.errors import InputError, OutputError
from habitat.ocean import open_ocean, opening
from habitat.species import read_species
from habitat.viability import BAND_COLUMNS, band_table, chance_of_viability, column_totals

REPOSITORY = Path(__file__).resolve().parents[1]
PRAWN = REPOSITORY / "examples" / "veil_prawn.toml"
CASTS = sorted((REPOSITORY / "profiles" / "example").glob("halvane_0*.csv"))
GRID = REPOSITORY / "profiles" / "example" / "halvane_grid.nc"


def write(ocean, out=None, activities=(1.0, 2.5), species=PRAWN, **options):
    defaults = {"choose": {}, "hydrostatic": True, "uncertainty": False, "chance": False}
    write_bands(ocean, species, activities, out, **(defaults | options))


# --- tables ------------------------------------------------------------------------------------------------------


def test_a_table_holds_the_bands(tmp_path):
    write(CASTS[:2], tmp_path / "t.csv")
    read = pd.read_csv(tmp_path / "t.csv")
    wanted = band_table(open_ocean(CASTS[:2]), read_species(PRAWN), (1.0, 2.5))
    assert list(read.columns) == list(BAND_COLUMNS)
    numbers = ["activity", "upper_m", "lower_m", "thickness_m", "lower_m_p05", "upper_m_per_kpa", "least_po2_kpa"]
    np.testing.assert_allclose(read[numbers], wanted[numbers].astype(float), rtol=1e-9)
    assert read["cast"].tolist() == wanted["cast"].tolist()
    assert read["time"][0] == "2001-05-03T06:20:00"


def test_standard_output_in_a_pipe_is_the_same_table(tmp_path, capsys):
    write(CASTS[:2], tmp_path / "t.csv")
    write(CASTS[:2])
    assert capsys.readouterr().out == (tmp_path / "t.csv").read_text()


def test_a_terminal_gets_edges_with_their_quantiles_and_kinds(monkeypatch):
    terminal = io.StringIO()
    terminal.isatty = lambda: True
    monkeypatch.setattr("sys.stdout", terminal)
    write(CASTS[5:6], activities=[2.5])
    lines = terminal.getvalue().splitlines()
    heads = re.split(r"\s{2,}", lines[0].strip())
    assert heads == ["cast", "activity", "band", "upper m", "lower m", "thickness m", "least PO2 kPa", "flags"]
    wanted = band_table(open_ocean(CASTS[5:6]), read_species(PRAWN), [2.5]).iloc[0]
    lower = f"{wanted['lower_m']:.0f} ({wanted['lower_m_p05']:.0f}-{wanted['lower_m_p95']:.0f}) crossing"
    assert lower in lines[2]


def test_without_the_hydrostatic_term_po2_is_less(tmp_path):
    write(CASTS[:1], tmp_path / "with.csv")
    write(CASTS[:1], tmp_path / "without.csv", hydrostatic=False)
    with_term, without = (pd.read_csv(tmp_path / f"{name}.csv")["least_po2_kpa"][0] for name in ("with", "without"))
    assert 0.9 < without / with_term < 0.999  # exp(V p / (R T)) at 300 to 1500 dbar: 1.04 to 1.22 at most


# --- grids -------------------------------------------------------------------------------------------------------


def test_a_grid_holds_column_totals(tmp_path):
    write([GRID], tmp_path / "g.nc")
    totals = column_totals(open_ocean([GRID]), read_species(PRAWN), (1.0, 2.5))
    with xr.open_dataset(tmp_path / "g.nc") as read:
        assert set(read.data_vars) == set(totals.data_vars)
        assert {"thickness", "upper", "lower", "band_count", "least_po2", "least_po2_depth"} <= set(read.data_vars)
        for name in totals:
            np.testing.assert_allclose(read[name], totals[name], rtol=1e-6, err_msg=name)
        assert read["activity"].values.tolist() == [1.0, 2.5]
        assert read.attrs["title"] == "viable bands of Veil prawn"
        assert "with the hydrostatic term" in read.attrs["comment"]


def test_uncertainty_and_chance_are_added_on_request(tmp_path):
    write([GRID], tmp_path / "g.nc", uncertainty=True, chance=True, hydrostatic=False)
    columns = open_ocean([GRID])
    chance = chance_of_viability(columns, read_species(PRAWN), (1.0, 2.5), hydrostatic=False)
    with xr.open_dataset(tmp_path / "g.nc") as read:
        assert {"upper_p05", "upper_p95", "lower_p05", "lower_p95", "mean_thickness"} <= set(read.data_vars)
        np.testing.assert_allclose(read["chance"].transpose(*chance.dims), chance, rtol=1e-6, atol=1e-30)
        np.testing.assert_allclose(read["depth"], columns["depth"])
        assert read["depth"].attrs["positive"] == "down"
        assert "without the hydrostatic term" in read.attrs["comment"]
    with netCDF4.Dataset(tmp_path / "g.nc") as file:
        for name, variable in file.variables.items():
            assert variable.long_name, name
            assert name == "scenario" or variable.units, name


def test_the_same_grid_gives_the_same_bytes_lazy_or_not(tmp_path, monkeypatch):
    write([GRID], tmp_path / "a.nc", uncertainty=True)
    write([GRID], tmp_path / "b.nc", uncertainty=True)
    assert (tmp_path / "a.nc").read_bytes() == (tmp_path / "b.nc").read_bytes()
    monkeypatch.setattr(opening, "LAZY_LIMIT", 0)
    write([GRID], tmp_path / "c.nc", uncertainty=True)
    with xr.open_dataset(tmp_path / "a.nc") as eager, xr.open_dataset(tmp_path / "c.nc") as lazy:
        xr.testing.assert_equal(eager, lazy)


def test_a_grid_may_be_asked_for_as_a_table(tmp_path):
    write([GRID], tmp_path / "g.csv", activities=[1.0])
    table = pd.read_csv(tmp_path / "g.csv")
    assert table["cast"].nunique() == 4 * 20 * 20
    assert table["cast"][0] == "0,0,0"


# --- refusals ----------------------------------------------------------------------------------------------------


def test_casts_have_no_grid(tmp_path):
    with pytest.raises(
        InputError, match=r"c\.nc: casts have any number of bands each; expected a \.csv file for casts"
    ):
        write(CASTS[:1], tmp_path / "c.nc")
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("option", ["uncertainty", "chance"])
@pytest.mark.parametrize("name", [None, "t.csv"])
def test_what_only_a_grid_holds_is_not_silently_left_out(tmp_path, option, name):
    out = None if name is None else tmp_path / name
    with pytest.raises(InputError, match=r"--uncertainty and --chance add to a netCDF grid only; add --out FILE\.nc"):
        write([GRID], out, **{option: True})
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize("name", ["absent/t.csv", "absent/g.nc"])
def test_a_missing_folder_is_told_before_the_work(tmp_path, name):
    with pytest.raises(OutputError, match=r"absent: the folder does not exist; create it, or choose another"):
        write([tmp_path / "no ocean either"], tmp_path / name)


@pytest.mark.parametrize("name", ["t.csv", "g.nc"])
def test_a_folder_is_no_file_to_write(tmp_path, name):
    (tmp_path / name).mkdir()
    with pytest.raises(
        OutputError, match=r"cannot be written \(Is a directory\); that is a folder: give the name of a"
    ):
        write([GRID], tmp_path / name)
    assert os.listdir(tmp_path) == [name]


@pytest.mark.parametrize("name", ["t.csv", "g.nc"])
def test_a_grid_damaged_in_a_later_step_is_told(tmp_path, damaged_grid, name):
    source = tmp_path / "grid.nc"
    damaged_grid(source)
    with pytest.raises(InputError, match=re.escape(f"{source}: cannot be read as netCDF")):
        write([source], tmp_path / name)
    assert os.listdir(tmp_path) == ["grid.nc"]


def test_the_variable_can_be_chosen(tmp_path):
    table = tmp_path / "cast.csv"
    table.write_text(
        "# latitude: 1\n# longitude: 2\ndepth [m],temperature [degC],salinity,oxygen [umol/kg],O2 [umol/kg]\n"
        "5,20,35,220,210\n500,8,35,20,60\n"
    )
    with pytest.raises(InputError, match="oxygen"):
        write([table], tmp_path / "t.csv")
    least = []
    for name in ("oxygen [umol/kg]", "O2 [umol/kg]"):
        write([table], tmp_path / "t.csv", choose={"oxygen": name})
        least.append(pd.read_csv(tmp_path / "t.csv")["least_po2_kpa"][0])
    assert least[1] == pytest.approx(3 * least[0], rel=1e-6)  # 60 and 20 umol/kg in the same water
