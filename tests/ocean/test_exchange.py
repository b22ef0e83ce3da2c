"""WHP-Exchange: header, columns, flags, fill values, times; the real casts and section counted independently."""

import collections
import csv

import numpy as np
import pytest

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.ocean import open_ocean

CTD = """CTD,20240101TEST
# free comment with = signs, and a comma
NUMBER_HEADERS = 8
EXPOCODE = 99XX20240101
STNNBR = 12
CASTNO = 2
DATE = 20240105
TIME = 0706
LATITUDE = 10.5
LONGITUDE = -120.25
CTDPRS,CTDPRS_FLAG_W,CTDTMP,CTDTMP_FLAG_W,CTDSAL,CTDSAL_FLAG_W,CTDOXY,CTDOXY_FLAG_W,
DBAR,,ITS-90,,PSS-78,,UMOL/KG,,
   2.0,2, 20.0,2, 35.0,2, 220.0,2
   4.0,2, 19.9,6, 35.0,7, 219.0,3
   6.0,2, 19.8,2, 35.0,2, -999.000,9
END_DATA
anything may follow
"""
BOTTLE = """BOTTLE,20240101TEST
EXPOCODE,STNNBR,CASTNO,BTLNBR,BTLNBR_FLAG_W,DATE,TIME,LATITUDE,LONGITUDE,DEPTH,CTDPRS,CTDTMP,CTDSAL,CTDSAL_FLAG_W,SALNTY,SALNTY_FLAG_W,OXYGEN,OXYGEN_FLAG_W,CTDOXY,CTDOXY_FLAG_W
,,,,,,,,,,DBAR,ITS-90,PSS-78,,PSS-78,,UMOL/KG,,UMOL/KG,
CRUISE,1,1,2,2,20240105,0006,10,-120,500,100.0,15,34.9,2,34.91,2,150.0,2,151.0,2
CRUISE,1,1,1,2,20240105,0006,10,-120,500,5.0,20,34.8,3,34.81,2,220.0,4,221.0,2
CRUISE,1,1,3,4,20240105,0006,10,-120,500,50.0,18,34.7,4,34.71,2,200.0,2,201.0,3
CRUISE,2,1,1,2,20240106,1200,11,-121,-999,10.0,20,34.8,2,-999,9,210.0,6,-999,9
END_DATA
"""


def test_ctd_cast(write):
    columns = open_ocean([write(CTD)])
    assert columns["cast"].values.tolist() == ["12-2"]
    assert str(columns["time"].values[0])[:16] == "2024-01-05T07:06"
    assert float(columns["latitude"][0]) == 10.5
    assert float(columns["longitude"][0]) == -120.25
    assert columns["pressure"].values.tolist() == [[2, 4, 6]]
    assert columns["temperature"].values.tolist() == [[20, 19.9, 19.8]]
    assert columns["salinity"].values.tolist() == [[35, 35, 35]]
    np.testing.assert_array_equal(columns["oxygen"], [[220, np.nan, np.nan]])
    assert columns.attrs["discarded"] == {
        "oxygen: flag 3": 1,
        "oxygen: missing in the file (flag 9: not sampled)": 1,
    }
    assert columns.attrs["conversions"] == ["depth computed from pressure and latitude (TEOS-10)"]
    assert "seabed_depth" not in columns


def test_flags_to_keep_can_be_given(write):
    columns = open_ocean([write(CTD)], keep_flags={"ctd": [2, 3]})
    np.testing.assert_array_equal(columns["oxygen"], [[220, 219, np.nan]])
    np.testing.assert_array_equal(columns["temperature"], [[20, np.nan, 19.8]])
    assert columns.attrs["discarded"]["temperature: flag 6"] == 1
    with pytest.raises(InputError, match="'botle' is no kind of flag; did you mean 'bottle'"):
        open_ocean([write(CTD)], keep_flags={"botle": [2]})


def test_columns_without_flags_are_accepted(write):
    text = CTD.replace("CTDOXY,CTDOXY_FLAG_W,", "CTDOXY,").replace("UMOL/KG,,", "UMOL/KG,")
    columns = open_ocean(
        [write(text.replace(" 220.0,2", " 220.0").replace("219.0,3", "219.0").replace("000,9", "000"))]
    )
    np.testing.assert_array_equal(columns["oxygen"], [[220, 219, np.nan]])
    assert columns.attrs["discarded"] == {"oxygen: missing in the file": 1}


@pytest.mark.parametrize("scale", ["IPTS-68", "ITS-68"])
def test_old_temperature_scale(write, scale):
    columns = open_ocean([write(CTD.replace("ITS-90", scale))])
    np.testing.assert_allclose(
        columns["temperature"][0], np.array([20, 19.9, 19.8]) / 1.00024, rtol=1e-15
    )  # Saunders 1990
    assert "temperature: IPTS-68 to ITS-90 (divided by 1.00024)" in columns.attrs["conversions"]


def test_old_oxygen_unit(write):
    columns = open_ocean([write(CTD.replace("UMOL/KG", "ML/L").replace("220.0", "5.00").replace("219.0", "4.90"))])
    expected = seawater.concentration_from(5.0, 20.0, 35.0, 2.0, -120.25, 10.5, unit="ml/l")
    np.testing.assert_allclose(columns["oxygen"][0, 0], expected)


def test_bottles_take_the_best_value_sample_by_sample(write):
    columns = open_ocean([write(BOTTLE)])
    assert columns["cast"].values.tolist() == ["1-1", "2-1"]
    np.testing.assert_array_equal(columns["pressure"], [[5, 50, 100], [10, np.nan, np.nan]])
    # 5 dbar: CTDSAL questionable, titrated oxygen bad; 50 dbar: the bottle mistripped and the sensors are no good
    np.testing.assert_array_equal(columns["salinity"], [[34.81, np.nan, 34.9], [34.8, np.nan, np.nan]])
    np.testing.assert_array_equal(columns["oxygen"], [[221, np.nan, 150], [210, np.nan, np.nan]])
    np.testing.assert_array_equal(columns["seabed_depth"], [500, np.nan])
    assert columns.attrs["discarded"] == {
        "salinity: CTDSAL flag 4, SALNTY bottle flag 4": 1,
        "oxygen: OXYGEN bottle flag 4, CTDOXY flag 3": 1,
    }
    assert "salinity: where good, CTDSAL (2 samples), else SALNTY (1 samples)" in columns.attrs["conversions"]
    assert "oxygen: where good, OXYGEN (2 samples), else CTDOXY (1 samples)" in columns.attrs["conversions"]


def test_a_column_can_be_chosen(write):
    columns = open_ocean([write(BOTTLE)], choose={"oxygen": "CTDOXY"})
    np.testing.assert_array_equal(columns["oxygen"], [[221, np.nan, 151], [np.nan] * 3])
    with pytest.raises(InputError, match="no column 'OPTODE' for the oxygen; expected one of EXPOCODE"):
        open_ocean([write(BOTTLE)], choose={"oxygen": "OPTODE"})
    with pytest.raises(InputError, match="'LAT' chosen for the latitude, which has a fixed column"):
        open_ocean([write(BOTTLE)], choose={"latitude": "LAT"})


def test_columns_in_different_units_are_not_mixed(write):
    columns = open_ocean([write(BOTTLE.replace(",UMOL/KG,\n", ",ML/L,\n"))])
    np.testing.assert_array_equal(columns["oxygen"], [[np.nan, np.nan, 150], [210, np.nan, np.nan]])
    assert "oxygen: CTDOXY [ML/L] was not used beside OXYGEN [UMOL/KG]" in columns.attrs["suspicious"]


def test_casts_of_two_cruises_with_the_same_numbers(write):
    other = CTD.replace("99XX", "88YY").replace("220.0", "221.0")
    columns = open_ocean([write(CTD, "a.csv"), write(other, "b.csv")])
    assert columns["cast"].values.tolist() == ["99XX20240101:12-2", "88YY20240101:12-2"]


def test_the_same_cast_twice_is_refused(write):
    with pytest.raises(InputError, match=r"a\.csv and .*b\.csv: the cast '99XX20240101:12-2' is there more than once"):
        open_ocean([write(CTD, "a.csv"), write(CTD, "b.csv")])


def test_time_unknown(write):
    columns = open_ocean([write(CTD.replace("TIME = 0706\n", "").replace("HEADERS = 8", "HEADERS = 7"))])
    assert str(columns["time"].values[0])[:16] == "2024-01-05T00:00"
    assert any("no TIME on 3 rows" in sentence for sentence in columns.attrs["conversions"])
    columns = open_ocean([write(CTD.replace("20240105", "20241305"))])
    assert np.isnat(columns["time"].values[0])
    assert any("'202413050706' are no date" in sentence for sentence in columns.attrs["suspicious"])


# --- damaged files -----------------------------------------------------------------------------------------------


def test_file_without_its_end(write):
    columns = open_ocean([write(CTD[: CTD.index("END_DATA")])])
    assert columns.sizes["level"] == 3
    assert any("ends without END_DATA" in sentence for sentence in columns.attrs["suspicious"])


def test_last_line_cut_off_is_left_out_and_counted(write):
    columns = open_ocean([write(CTD[: CTD.index(" -999.000")] + " 21")])
    assert columns["pressure"].values.tolist() == [[2, 4]]
    assert columns.attrs["discarded"]["last line: cut off"] == 1


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("HEADERS = 8", "HEADERS = 7", "line 10 is 'LONGITUDE = -120.25' where the column names should be"),
        ("HEADERS = 8", "HEADERS = 9", "line 11 is 'CTDPRS,.*NUMBER_HEADERS = 9 makes it a header line"),
        ("NUMBER_HEADERS = 8\n", "", "no line NUMBER_HEADERS = n"),
        ("LATITUDE = 10.5", "LAT = 10.5", "no latitude"),
        ("LONGITUDE = -120.25", "LONGITUDE = -999", "1 of 1 casts have no longitude, the first is '12-2'"),
        ("STNNBR = 12", "STATION = 12", "no STNNBR"),
        ("219.0,3", "21x.0,3", "'21x.0' in line 14, column 'CTDOXY', is not a number"),
        (", 219.0,3", "", "line 14 has 6 fields; expected 8"),
        ("CTDOXY,CTDOXY_FLAG_W", "XMISS,XMISS_FLAG_W", r"no oxygen \(only temperature and salinity\)"),
        ("CTDTMP,", "WATTMP,", "no temperature"),
    ],
)
def test_damaged_headers_and_rows(write, old, new, message):
    with pytest.raises(InputError, match=message):
        open_ocean([write(CTD.replace(old, new, 1))])


def test_no_data_lines(write):
    start, end = CTD.index("   2.0"), CTD.index("END_DATA")
    with pytest.raises(InputError, match="column names but no data lines"):
        open_ocean([write(CTD[:start] + CTD[end:])])


def test_unit_missing(write):
    with pytest.raises(UnitError, match=r"'CTDOXY': no unit given.*line below the column names, for example umol/kg"):
        open_ocean([write(CTD.replace("UMOL/KG", ""))])


# --- real files --------------------------------------------------------------------------------------------------


def _bottle_rows(path):
    lines = [line for line in path.read_text().splitlines() if not line.startswith("#")]
    names = next(csv.reader([lines[1]]))
    return [dict(zip(names, map(str.strip, row), strict=True)) for row in csv.reader(lines[3:]) if len(row) > 5]


def test_section_is_read_whole_and_sorted(data):
    path = data / "section" / "a03_hy1.csv"
    rows = _bottle_rows(path)
    columns = open_ocean([path])
    stations = collections.Counter((row["STNNBR"], row["CASTNO"]) for row in rows)
    assert columns.sizes["cast"] == len(stations) == 124
    assert int(columns["depth"].notnull().sum()) == len(rows) == 2841
    per_cast = columns["depth"].notnull().sum("level").to_series().to_dict()
    assert per_cast == {f"{station}-{cast}": count for (station, cast), count in stations.items()}
    steps = np.diff(columns["depth"].values, axis=1)
    assert np.nanmin(steps) >= 0
    surface = columns.sel(cast="3-1")
    np.testing.assert_allclose(surface["temperature"][0], 16.5035 / 1.00024)  # first data line of the file
    assert float(surface["oxygen"][0]) == 253.0
    assert float(surface["seabed_depth"]) == 202
    assert str(surface["time"].values)[:16] == "1993-09-23T22:22"


def test_section_accounts_for_every_oxygen_value(data):
    path = data / "section" / "a03_hy1.csv"
    expected = collections.Counter()
    for row in _bottle_rows(path):
        flag, bottle = row["OXYGEN_FLAG_W"], row["BTLNBR_FLAG_W"]
        if float(row["OXYGEN"]) == -999:
            meaning = {"4": "bad", "5": "not reported"}[flag]
            expected[f"oxygen: missing in the file (flag {flag}: {meaning})"] += 1
        elif flag not in "26":
            expected[f"oxygen: flag {flag}"] += 1
        elif bottle != "2":
            expected[f"oxygen: bottle flag {bottle}"] += 1
    columns = open_ocean([path])
    discarded = {reason: n for reason, n in columns.attrs["discarded"].items() if reason.startswith("oxygen")}
    assert discarded == dict(expected)
    assert int(columns["oxygen"].notnull().sum()) == 2841 - sum(expected.values())


def test_section_takes_bottle_salinity_where_the_sensor_s_is_not_good(data):
    path = data / "section" / "a03_hy1.csv"
    rows = _bottle_rows(path)
    sensor = [row["CTDSAL_FLAG_W"] in "267" for row in rows]
    titrated = [row["SALNTY_FLAG_W"] in "26" and row["BTLNBR_FLAG_W"] == "2" for row in rows]
    rescued = sum(t and not s for s, t in zip(sensor, titrated, strict=True))
    columns = open_ocean([path])
    assert int(columns["salinity"].notnull().sum()) == sum(sensor) + rescued
    sentence = f"salinity: where good, CTDSAL ({sum(sensor)} samples), else SALNTY ({rescued} samples)"
    assert sentence in columns.attrs["conversions"]


def test_cast_whose_oxygen_starts_at_8_dbar(data):
    columns = open_ocean([data / "casts" / "18HU20130507_00235_00001_ct1.csv"]).isel(cast=0)
    valid = columns["oxygen"].notnull().values
    assert float(columns["pressure"][valid][0]) == 8.0
    assert columns["pressure"][:3].values.tolist() == [5, 6, 7]  # the levels above stay, without oxygen
    assert not valid[:3].any()
    np.testing.assert_allclose(columns["temperature"][0], 9.8494 / 1.00024)
    assert columns.attrs["discarded"]["oxygen: missing in the file (flag 9: not sampled)"] == 4
    assert float(columns["seabed_depth"]) == 1070
    assert "seabed_depth: 1 casts have samples below the sea floor given" in columns.attrs["suspicious"]


@pytest.mark.parametrize(
    ("name", "levels", "deepest"),
    [("a22_00025_00001_ct1.csv", 2267, 4535.0), ("p02_2004a_00175_00002_ct1.csv", 2095, 4188.0)],
)
def test_good_casts_lose_nothing(data, name, levels, deepest):
    columns = open_ocean([data / "casts" / name])
    assert int(columns["oxygen"].notnull().sum()) == levels
    assert columns.attrs["discarded"] == {}
    assert float(columns["pressure"][0, -1]) == deepest


def test_cast_without_any_oxygen_is_refused(data):
    message = r"every oxygen value is missing: 1800 missing in the file \(flag 5: not reported\).*leave the file out"
    with pytest.raises(InputError, match=message):
        open_ocean([data / "casts" / "a23_00043_00001_ct1.csv"])
