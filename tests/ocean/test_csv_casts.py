"""CSV tables of casts: headings, separators, missing values, positions, labels, and what is refused."""

import numpy as np
import pytest
import xarray as xr

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.ocean import open_ocean

HEAD = "depth [m],temperature [degC],salinity,oxygen [umol/kg],latitude,longitude\n"
ROWS = "0,20,35,220,10,-120\n50,15,34.8,180,10,-120\n300,9,34.6,20,10,-120\n"
POSITION = "# latitude: 10\n# longitude = -120\n"


def test_plain_table(write):
    columns = open_ocean([write(HEAD + ROWS, "north station.csv")])
    assert dict(columns.sizes) == {"cast": 1, "level": 3}
    assert columns["cast"].values.tolist() == ["north station"]
    assert columns["depth"].values.tolist() == [[0, 50, 300]]
    assert columns["temperature"].values.tolist() == [[20, 15, 9]]
    assert columns["salinity"].values.tolist() == [[35, 34.8, 34.6]]
    assert columns["oxygen"].values.tolist() == [[220, 180, 20]]
    np.testing.assert_allclose(columns["pressure"][0], seawater.pressure_from_depth([0, 50, 300.0], 10.0))
    assert columns.attrs["conversions"] == ["pressure computed from depth and latitude (TEOS-10)"]
    assert columns.attrs["discarded"] == {}
    assert columns.attrs["suspicious"] == []
    assert "time" not in columns.coords
    assert "seabed_depth" not in columns


@pytest.mark.parametrize("separator", [";", "\t"])
@pytest.mark.parametrize("mark", ["", "\ufeff"])
def test_separators_and_byte_order_mark(write, separator, mark):
    plain = open_ocean([write(HEAD + ROWS)])
    other = open_ocean([write(mark + (HEAD + ROWS).replace(",", separator))])
    xr.testing.assert_identical(other.drop_attrs(), plain.drop_attrs())


def test_position_and_time_given_once_in_comments(write):
    head, rows = HEAD.replace(",latitude,longitude", ""), ROWS.replace(",10,-120", "")
    text = f"# a cruise\n# time: 2024-05-27T08:41Z\n# cast: 7b\n# bottom depth: 400\n{POSITION}{head}{rows}"
    columns = open_ocean([write(text)])
    assert float(columns["latitude"][0]) == 10
    assert float(columns["longitude"][0]) == -120
    assert str(columns["time"].values[0])[:16] == "2024-05-27T08:41"
    assert columns["cast"].values.tolist() == ["7b"]
    assert columns["seabed_depth"].values.tolist() == [400]


def test_headings_in_other_words_and_order(write):
    head = "Station,Lon,Lat,Dissolved Oxygen [ml/l],Practical-Salinity [psu],Temp [°C],Pressure [dbar],chlorophyll\n"
    text = head + "A1,240,10,5,35,20,0,0.4\nA1,240,10,4,34.8,15,50,\n"
    columns = open_ocean([write(text)])
    assert columns["cast"].values.tolist() == ["A1"]
    assert float(columns["longitude"][0]) == 240
    expected = seawater.concentration_from(5.0, 20.0, 35.0, 0.0, 240.0, 10.0, unit="ml/l")
    np.testing.assert_allclose(columns["oxygen"][0, 0], expected)
    np.testing.assert_allclose(columns["depth"][0, 1], seawater.depth_from_pressure(50.0, 10.0))
    assert "oxygen: ml/l to umol/kg with potential density at 0 dbar" in columns.attrs["conversions"]


@pytest.mark.parametrize(
    ("unit", "conversion"),
    [
        ("umol/l", "with potential density at 0 dbar"),
        ("mmol/m3", "with potential density at 0 dbar"),
        ("mg/l", "with potential density at 0 dbar"),
        ("% saturation", "with the solubility at potential temperature"),
        ("kPa", "with the solubility at in-situ temperature and the hydrostatic term"),
    ],
)
def test_oxygen_unit_does_not_matter(write, unit, conversion):
    plain = open_ocean([write(HEAD + ROWS)])
    place = [plain[name][0].values for name in ("temperature", "salinity", "pressure")]
    values = seawater.concentration_to(plain["oxygen"][0].values, *place, -120.0, 10.0, unit=unit)
    pairs = zip(ROWS.split(), values, strict=True)
    lines = [",".join([*row.split(",")[:3], repr(float(value)), "10,-120"]) for row, value in pairs]
    columns = open_ocean([write(HEAD.replace("umol/kg", unit) + "\n".join(lines))])
    np.testing.assert_allclose(columns["oxygen"], plain["oxygen"], rtol=1e-12)
    assert f"oxygen: {unit} to umol/kg {conversion}" in columns.attrs["conversions"]


def test_longitude_convention_does_not_matter(write):
    west = open_ocean([write(HEAD + ROWS)])
    east = open_ocean([write(HEAD + ROWS.replace("-120", "240"))])
    xr.testing.assert_allclose(east.drop_vars("longitude"), west.drop_vars("longitude"))
    assert float(east["longitude"][0]) == 240


@pytest.mark.parametrize(
    ("heading", "convert"),
    [
        ("potential temperature [degC]", seawater.temperature_from_potential),
        ("conservative temperature [degC]", seawater.temperature_from_conservative),
    ],
)
def test_temperature_kinds(write, heading, convert):
    columns = open_ocean([write((HEAD + ROWS).replace("temperature [degC]", heading))])
    place = [columns[name][0].values for name in ("salinity", "pressure")]
    expected = convert(np.array([20.0, 15.0, 9.0]), *place, -120.0, 10.0)
    np.testing.assert_allclose(columns["temperature"][0], expected)
    assert abs(float(columns["temperature"][0, 2]) - 9) > 1e-3


def test_kelvin_and_absolute_salinity(write):
    text = (HEAD + ROWS).replace("degC", "K").replace(",20,", ",293.15,", 1).replace(",15,", ",288.15,")
    text = text.replace(",9,", ",282.15,").replace("salinity", "absolute salinity [g/kg]")
    columns = open_ocean([write(text)])
    np.testing.assert_allclose(columns["temperature"][0], [20, 15, 9])
    pressure = columns["pressure"][0].values
    expected = seawater.practical_salinity_from_absolute(np.array([35, 34.8, 34.6]), pressure, -120.0, 10.0)
    np.testing.assert_allclose(columns["salinity"][0], expected)


def test_several_casts_unsorted(write):
    head = "cast," + HEAD.replace("\n", ",time,seabed depth [m]\n")
    rows = [
        "b,300,9,34.6,20,11,-121,2020-01-02,",
        "a,50,15,34.8,180,10,-120,2020-01-01 12:30,900",
        "b,0,20,35,220,11,-121,2020-01-02,",
        "a,0,20,35,221,10,-120,2020-01-01 12:30,900",
        "b,50,15,34.8,180,11,-121,2020-01-02,",
    ]
    columns = open_ocean([write(head + "\n".join(rows))])
    assert columns["cast"].values.tolist() == ["b", "a"]
    np.testing.assert_array_equal(columns["depth"], [[0, 50, 300], [0, 50, np.nan]])
    np.testing.assert_array_equal(columns["oxygen"], [[220, 180, 20], [221, 180, np.nan]])
    np.testing.assert_array_equal(columns["seabed_depth"], [np.nan, 900])
    assert columns["latitude"].values.tolist() == [11, 10]
    assert columns["time"].values.astype("datetime64[m]").astype(str).tolist() == [
        "2020-01-02T00:00",
        "2020-01-01T12:30",
    ]
    assert "levels put in order of increasing depth in 2 casts" in columns.attrs["conversions"]


def test_missing_and_fill_values_are_counted_and_the_levels_stay(write):
    rows = "0,20,35,220,10,-120\n50,15,34.8,-999,10,-120\n60,-99.9,,nan,10,-120\n"
    rows += "70,NA,34.8,-9999,10,-120\n,9,35,1,10,-120\n"
    columns = open_ocean([write(HEAD + rows)])
    np.testing.assert_array_equal(columns["depth"][0], [0, 50, 60, 70, np.nan])
    np.testing.assert_array_equal(columns["oxygen"][0], [220, np.nan, np.nan, np.nan, 1])
    assert columns.attrs["discarded"] == {
        "temperature: missing in the file": 1,
        "temperature: fill value -99.9": 1,
        "salinity: missing in the file": 1,
        "oxygen: missing in the file": 1,
        "oxygen: fill value -9999": 1,
        "oxygen: fill value -999": 1,
        "depth: missing in the file": 1,
    }


def test_depth_and_pressure_fill_each_other(write):
    head = HEAD.replace("depth [m]", "depth [m],pressure [dbar]")
    columns = open_ocean([write(head + "0,,20,35,220,10,-120\n,50,15,34.8,180,10,-120\n")])
    np.testing.assert_allclose(columns["depth"][0], [0, seawater.depth_from_pressure(50.0, 10.0)])
    np.testing.assert_allclose(columns["pressure"][0], [0, 50])


def test_depths_written_as_heights(write):
    text = HEAD + ROWS.replace("50,15", "-50,15").replace("300,9", "-300,9")
    columns = open_ocean([write(text)])
    assert columns["depth"].values.tolist() == [[0, 50, 300]]
    assert "depth: values run upward (-300 to 0 m); the sign was turned" in columns.attrs["conversions"]


def test_feet(write):
    columns = open_ocean([write((HEAD + ROWS).replace("depth [m]", "depth [ft]"))])
    np.testing.assert_allclose(columns["depth"][0], np.array([0, 50, 300]) * 0.3048)


def test_blank_lines_and_trailing_separators(write):
    text = HEAD.replace("\n", ",,\n") + ROWS.replace("\n", ",,\n\n,,,,,,,\n")
    assert open_ocean([write(text)])["oxygen"].values.tolist() == [[220, 180, 20]]


def test_choice_between_columns(write):
    head = HEAD.replace("oxygen [umol/kg]", "oxygen [umol/kg],oxygen [ml/l]")
    path = write(head + "0,20,35,220,5.1,10,-120\n")
    with pytest.raises(InputError, match=r"'oxygen \[umol/kg\]' and 'oxygen \[ml/l\]' could each be the oxygen"):
        open_ocean([path])
    chosen = open_ocean([path], choose={"oxygen": "oxygen [umol/kg]"})
    assert float(chosen["oxygen"][0, 0]) == 220
    with pytest.raises(InputError, match="no column 'optode' for the oxygen; expected one of depth"):
        open_ocean([path], choose={"oxygen": "optode"})
    with pytest.raises(InputError, match="'oxigen' is not a part of a water column; did you mean 'oxygen'"):
        open_ocean([path], choose={"oxigen": "oxygen"})


def test_a_column_of_any_name_can_be_chosen(write):
    path = write((HEAD + ROWS).replace("oxygen [umol/kg]", "Optode 2 [umol/kg]"))
    assert open_ocean([path], choose={"oxygen": "optode 2"})["oxygen"].values.tolist() == [[220, 180, 20]]


def test_station_and_cast_label_a_cast_together(write):
    text = "cast,station," + HEAD + "".join(f"{c},{s},0,20,35,220,10,-120\n" for s in "AB" for c in (1, 2))
    path = write(text)
    assert open_ocean([path])["cast"].values.tolist() == ["A-1", "A-2", "B-1", "B-2"]
    chosen = open_ocean([path], choose={"cast": "station"})
    assert chosen["cast"].values.tolist() == ["A", "B"]
    assert chosen.sizes["level"] == 2


def test_drift_within_a_cast_is_told(write):
    text = "cast," + HEAD + "".join(f"x,{row}\n" for row in ROWS.split()).replace("10,-120\nx,300", "10.4,-120\nx,300")
    columns = open_ocean([write(text)])
    assert columns.attrs["suspicious"] == [
        "cast x: latitude varies by 0.40 degrees within the cast; the first value was taken"
    ]


# --- refusals ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("20,35,220", "20,35,abc", r"'abc' in line 2, column 'oxygen \[umol/kg\]', is not a number"),
        ("50,15,34.8", "50,inf,34.8", r"'inf' in line 3, column 'temperature \[degC\]', is not a number"),
        ("300,9,34.6", "300,9,34,6", "line 4 has 7 fields; expected 6, .*decimals need a point"),
        ("300,9,34.6,", "300,9,", "line 4 has 5 fields; expected 6"),
        (",10,-120\n50", ",95,-120\n50", r"2 different values of latitude \(10 to 95\)"),
        ("oxygen [umol/kg]", "sulphide [umol/kg]", "no oxygen .*among depth .*sulphide .*expected a column headed"),
        ("salinity", "conductivity", r"no salinity \(only temperature and oxygen\) among depth"),
        ("temperature [degC]", "weather", r"no temperature \(only salinity and oxygen\)"),
        (
            "depth [m]",
            "height",
            r"no depth or pressure \(only temperature and salinity and oxygen\)|no depth or pressure among",
        ),
        ("latitude", "north", "no latitude"),
        ("longitude", "east", "no longitude"),
    ],
)
def test_refused_tables(write, old, new, message):
    with pytest.raises(InputError, match=message):
        open_ocean([write((HEAD + ROWS).replace(old, new, 1))])


@pytest.mark.parametrize(
    ("heading", "message"),
    [
        ("depth", r"'depth': no unit given; expected the unit of depth; .* for example 'depth \[m\]'"),
        ("temperature", r"'temperature': no unit given.*'temperature \[degC\]'"),
        ("oxygen", r"'oxygen': no unit given.*'oxygen \[umol/kg\]'"),
    ],
)
def test_missing_units(write, heading, message):
    text = HEAD + ROWS
    start = text.index(f"{heading} [")
    text = text[: start + len(heading)] + text[text.index("]", start) + 1 :]
    with pytest.raises(UnitError, match=message):
        open_ocean([write(text)])


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("[umol/kg]", "[umols/kgg]", r"'oxygen \[umols/kgg\]': unit 'umols/kgg' is not known"),
        ("[umol/kg]", "[m]", r"'oxygen \[m\]': unit 'm' is not one of dissolved oxygen; expected umol/kg"),
        ("[degC]", "[m]", r"'temperature \[m\]': unit 'm' is not one of temperature"),
        ("depth [m]", "depth [dbar]", "unit 'dbar' cannot be converted; expected a unit such as m"),
        ("salinity", "salinity [degC]", "unit 'degC' cannot be converted"),
    ],
)
def test_wrong_units(write, old, new, message):
    with pytest.raises(UnitError, match=message):
        open_ocean([write((HEAD + ROWS).replace(old, new, 1))])


def test_several_positions_need_a_cast_column(write):
    text = HEAD + ROWS + ROWS.replace(",10,", ",12,")
    with pytest.raises(InputError, match=r"2 different values of latitude \(10 to 12\).*add a column 'cast'"):
        open_ocean([write(text)])


def test_times_that_are_none(write):
    text = HEAD.replace("\n", ",time\n") + "0,20,35,220,10,-120,yesterday\n"
    with pytest.raises(InputError, match="'yesterday' in line 2, column 'time', is not a time; expected a date such"):
        open_ocean([write(text)])


@pytest.mark.parametrize(
    ("text", "message"), [("# only\n# comments\n", "no line of headings"), (HEAD, "headings but no rows")]
)
def test_tables_without_content(write, text, message):
    with pytest.raises(InputError, match=message):
        open_ocean([write(text)])


def test_latin_text(tmp_path):
    path = tmp_path / "old.csv"
    path.write_bytes((HEAD + ROWS).replace("degC", "°C").encode("latin-1"))
    with pytest.raises(InputError, match=r"byte 23 is not UTF-8 text; save the table as CSV \(UTF-8\)"):
        open_ocean([path])
