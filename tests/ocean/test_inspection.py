"""The text that describes a file: what it holds, what becomes of it, and why it may be refused."""

import numpy as np
import pytest

from habitat.errors import InputError
from habitat.ocean import inspect

HEAD = "depth [m],temperature [degC],salinity,oxygen [ml/l],latitude,longitude,time,chlorophyll\n"
ROWS = "0,20,35,5,10,-120,2020-01-02,1\n50,15,34.8,-999,10,-120,2020-01-02,1\n"


def _row(text, part):
    """Cells of the table row of a part."""
    (line,) = [line for line in text.splitlines() if line.startswith(f"{part} ")][:1]
    return [cell.strip() for cell in line.split("  ") if cell.strip()]


def test_table(write):
    text = inspect(write(HEAD + ROWS))
    assert "CSV table: 1 cast, 2 samples" in text
    assert _row(text, "temperature") == [
        "temperature",
        "temperature [degC]",
        "degC, in situ",
        "15 to 20",
        "degC, in situ, ITS-90",
    ]
    assert _row(text, "oxygen") == ["oxygen", "oxygen [ml/l]", "ml/l", "5", "umol/kg"]
    assert "position  latitude 10, longitude -120" in text
    assert "time      2020-01-02 00:00" in text
    assert "depth     0 to 50 m" in text
    assert "  oxygen: ml/l to umol/kg with potential density at 0 dbar" in text
    assert "Values left out:\n  1 oxygen: fill value -999" in text
    assert "Not used: chlorophyll" in text
    assert "Cannot be used" not in text


def test_a_refused_table_is_described_too(write):
    path = write((HEAD + ROWS).replace("ml/l", "mol/m3").replace("salinity", "conductivity"))
    text = inspect(path)
    assert _row(text, "salinity") == ["salinity", "(not found)"]
    assert "Cannot be used:\n  no salinity (only temperature and oxygen) among depth [m]" in text
    assert "  Expected: a column headed 'salinity'" in text
    assert path not in text.split("Cannot be used:")[1]


def test_a_table_with_a_wrong_unit_shows_its_range_and_the_cause(write):
    text = inspect(write(HEAD.replace("ml/l", "umol/kg") + ROWS))
    assert _row(text, "oxygen")[2:4] == ["umol/kg", "5"]
    # 5 umol/kg of the 224.9 that sea water of 20 degC and salinity 35 holds (facts: 5.1656 ml/l, density 1.0248)
    assert "oxygen from 5 to 5 in 'umol/kg' would be 2.22 % of saturation near the surface" in text
    assert "What to do: the unit may be ml/l or mg/l" in text


def test_a_table_that_cannot_be_parsed(write):
    text = inspect(write(HEAD + ROWS.replace("34.8", "salty")))
    assert text.split("\n\n")[1].startswith("Cannot be used:\n  'salty' in line 3, column 'salinity', is not a number")


def test_missing_unit_is_shown(write):
    text = inspect(write((HEAD + ROWS).replace(" [ml/l]", "")))
    assert _row(text, "oxygen")[2] == "(none)"
    assert "  'oxygen': no unit given" in text


def test_choice(write):
    path = write(HEAD.replace("chlorophyll", "oxygen [mg/l]") + ROWS)
    assert "could each be the oxygen" in inspect(path)
    assert _row(inspect(path, choose={"oxygen": "oxygen [ml/l]"}), "oxygen")[1] == "oxygen [ml/l]"


def test_grid(write_grid, water):
    variables = water(chl=(water()["oxy"][0], {"units": "mg m-3"}))
    text = inspect(write_grid(variables))
    assert "netCDF grid: 2 latitudes x 3 longitudes, 3 depths" in text
    assert _row(text, "salinity") == ["salinity", "salt", "1, practical", "35 to 35.17", "practical salinity"]
    assert _row(text, "depth")[1:4] == ["depth", "m", "0 to 200"]
    assert "position  latitude -10 to 0, longitude 200 to 220" in text
    assert "Not used: chl" in text


def test_one_step_is_the_whole_grid(write_grid, water):
    variables = {name: (v[None], a) for name, (v, a) in water().items()}
    text = inspect(write_grid(variables, "x_o07_01.nc", time=([4614.0], {"units": "months since 1955-01-01"})))
    assert "usable values" in text
    assert "time      7" in text


def test_one_file_of_three(write_grid, water):
    text = inspect(write_grid({"oxy": water()["oxy"]}))
    assert _row(text, "oxygen")[1] == "oxy"
    assert "no temperature and no salinity (only oxygen)" in text
    assert "What to do: give the files that hold the others together with this one" in text


def test_large_grid_is_judged_by_a_sample(write_grid, water, monkeypatch):
    monkeypatch.setattr("habitat.ocean.columns.SAMPLE_CELLS", 9)
    variables = {name: (np.stack([v] * 2), a) for name, (v, a) in water().items()}
    text = inspect(write_grid(variables, time=([0.0, 31.0], {"units": "days since 2001-01-01"})))
    assert "netCDF grid: 2 times, 2 latitudes x 3 longitudes, 3 depths" in text
    assert "values in a sample" in text
    assert "time      2001-01-01 00:00 to 2001-02-01 00:00" in text


def test_real_section(data):
    text = inspect(data / "section" / "a03_hy1.csv")
    assert "WHP-Exchange bottle file: 124 casts, 2841 samples" in text
    assert _row(text, "temperature")[1:3] == ["CTDTMP", "IPTS-68, in situ"]
    assert "time      1993-09-23 22:22 to 1993-10-25 09:53" in text  # first and last data line of the file
    assert "Not used: SILCAT, NITRIT, NO2+NO3, PHSPHT" in text
    assert max(map(len, text.splitlines())) < 130


def test_real_cast_without_oxygen(data):
    text = inspect(data / "casts" / "a23_00043_00001_ct1.csv")
    assert _row(text, "oxygen")[3] == "(all missing)"
    assert "Cannot be used:\n  every oxygen value is missing: 1800" in text


def test_real_floats(data):
    for path in sorted((data / "floats").iterdir()):
        assert "\nnetCDF profiles\n\nCannot be used:\n  " in inspect(path)


def test_unreadable_files_raise(tmp_path):
    with pytest.raises(InputError, match="file not found"):
        inspect(tmp_path / "nothing.csv")
