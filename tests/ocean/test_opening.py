"""Names and patterns of files, mixtures, attributes."""

import hashlib

import pytest

from habitat.errors import InputError
from habitat.ocean import open_ocean

HEAD = "depth [m],temperature [degC],salinity,oxygen [umol/kg],latitude,longitude\n"
ROWS = "0,20,35,220,10,-120\n50,15,34.8,180,10,-120\n"
CTD = """CTD,20240101TEST
NUMBER_HEADERS = 6
STNNBR = 12
CASTNO = 2
DATE = 20240105
LATITUDE = 10.5
LONGITUDE = -120.25
CTDPRS,CTDTMP,CTDSAL,CTDOXY
DBAR,ITS-90,PSS-78,UMOL/KG
2.0,20.0,35.0,220.0
4.0,19.0,35.0,215.0
6.0,18.0,35.0,210.0
END_DATA
"""


def test_patterns_are_expanded_in_order_and_copies_dropped(write, tmp_path):
    for name in ("b.csv", "a.csv", "c.csv"):
        write(HEAD + ROWS, name)
    columns = open_ocean([f"{tmp_path}/c.csv", f"{tmp_path}/*.csv", f"{tmp_path}/../{tmp_path.name}/a.csv"])
    assert columns["cast"].values.tolist() == ["c", "a", "b"]
    assert list(columns.attrs["sources"]) == [f"{tmp_path}/{name}.csv" for name in "cab"]


def test_a_name_with_brackets_is_a_name_when_the_file_exists(write):
    path = write(HEAD + ROWS, "cast[1].csv")
    assert open_ocean([path])["cast"].values.tolist() == ["cast[1]"]


def test_pattern_that_matches_nothing(tmp_path):
    with pytest.raises(InputError, match=r"\*\.nc: no file matches this pattern"):
        open_ocean([f"{tmp_path}/*.nc"])
    with pytest.raises(InputError, match="no ocean file given"):
        open_ocean([])


def test_table_and_exchange_side_by_side(write):
    paths = [write(HEAD.replace("umol/kg", "ml/l") + "0,20,35,5,10,-120\n", "mine.csv"), write(CTD, "ctd.csv")]
    columns = open_ocean(paths)
    assert columns["cast"].values.tolist() == ["mine", "12-2"]
    assert dict(columns.sizes) == {"cast": 2, "level": 3}
    assert columns["oxygen"].isnull().values.tolist() == [[False, True, True], [False] * 3]
    assert columns["time"].isnull().values.tolist() == [True, False]
    assert columns["time"].dtype == "datetime64[ns]"
    for name in ("temperature", "salinity", "oxygen", "depth", "pressure"):
        assert columns[name].dtype == "float64"
        assert columns[name].dims == ("cast", "level")
    for name in columns.variables:
        assert "long_name" in columns[name].attrs, name
        assert "units" in columns[name].attrs or name in ("cast", "time"), name


def test_sources_carry_checksums(write):
    path = write(HEAD + ROWS)
    digest = hashlib.sha256((HEAD + ROWS).encode()).hexdigest()
    assert open_ocean([path]).attrs["sources"] == {path: digest}


def test_counts_of_several_files_are_added_and_remarks_carry_the_file(write):
    one = write(HEAD + ROWS + "60,15,34.8,-999,10,-120\n", "one.csv")
    two = write(HEAD + ROWS + "60,15,34.8,-999,10,-120\n60,14,34,100,10,-120\n", "two.csv")
    columns = open_ocean([one, two])
    assert columns.attrs["discarded"] == {"oxygen: fill value -999": 2}
    assert columns.attrs["suspicious"] == [f"{two}: depth: 1 levels lie at the same depth as the level above"]


def test_casts_of_the_same_label_in_two_files_take_the_file_s_name(write):
    paths = [write("cast," + HEAD + "1,0,20,35,220,10,-120\n", name) for name in ("a.csv", "b.csv")]
    assert open_ocean(paths)["cast"].values.tolist() == ["a:1", "b:1"]


def test_casts_beside_a_grid(write, write_grid, water):
    paths = [write_grid(water()), write(HEAD + ROWS)]
    with pytest.raises(InputError, match=r"cast\.csv and .*grid\.nc: casts and a grid are given together"):
        open_ocean(paths)
