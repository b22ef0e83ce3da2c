"""Laboratory tables: separators, headings, numbers, units, time stamps, and what is refused."""

import numpy as np
import pytest

from habitat import seawater
from habitat.errors import InputError, UnitError
from habitat.trials.sheet import check_settling, check_trial, read_sheet

TEXT = "Trial,PO2 [mbar],Time [min]\na,210,0\nb,105,30\na,,60\n"


@pytest.mark.parametrize("separator", [",", ";", "\t"])
@pytest.mark.parametrize("start", ["", "\ufeff", "# notes: none\n\n"])
def test_separators_marks_and_notes(write, separator, start):
    sheet = read_sheet(write(start + TEXT.replace(",", separator)))
    np.testing.assert_allclose(sheet.quantity("po2", "kPa"), [21.0, 10.5, np.nan])  # 10 mbar are 1 kPa
    np.testing.assert_allclose(sheet.hours(), [0, 0.5, 1])
    assert {name: rows.tolist() for name, rows in sheet.trials().items()} == {"a": [0, 2], "b": [1]}
    assert sheet.lines[0] == 2 + start.count("\n")


def test_quoted_fields_hold_separators(write):
    sheet = read_sheet(write('trial;flush [min]\na;"10-15;25-30"\n'))
    assert sheet.column("flush").texts == ["10-15;25-30"]


def test_empty_columns_at_the_end_are_none(write):
    assert [column.name for column in read_sheet(write("trial,mass [g],,\na,1,,\n")).columns] == ["trial", "mass"]


def test_time_stamps_become_hours(write):
    sheet = read_sheet(write("time\n2024-05-27T08:00:00\n2024-05-27T09:30:00+01:00\n\n2024-05-28\nNA\n"))
    assert sheet.stamped()
    np.testing.assert_allclose(sheet.hours() - sheet.hours()[0], [0, 0.5, 16, np.nan], atol=1e-8)


@pytest.mark.parametrize(("unit", "text"), [("degC", "10"), ("K", "283.15"), ("°F", "50")])
def test_temperature_units(write, unit, text):
    assert read_sheet(write(f"temperature [{unit}]\n{text}\n")).temperature()[0] == pytest.approx(10)


def test_salinity_units(write):
    assert read_sheet(write("salinity\n35\n")).salinity() == [35]
    assert read_sheet(write("salinity [psu]\n35\n")).salinity() == [35]
    absolute = float(seawater.absolute_salinity(35.0, 0.0))
    assert read_sheet(write(f"salinity [g/kg]\n{absolute}\n")).salinity()[0] == pytest.approx(35)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "there is no line of headings"),
        ("trial,mass [g]\n", "headings but no rows"),
        ("trial,mass [g]\na,1\nb\n", "line 3 has 1 fields; expected 2, one for each heading"),
        ("trial;mass [g]\na;1;5\n", "line 2 has 3 fields.*decimals need a point"),
    ],
)
def test_malformed_tables(write, text, message):
    with pytest.raises(InputError, match=message):
        read_sheet(write(text))


def test_unreadable_files(write, tmp_path):
    write(TEXT, "run1.csv")
    with pytest.raises(InputError, match=r"file not found; did you mean run1\.csv"):
        read_sheet(tmp_path / "run2.csv")
    with pytest.raises(InputError, match="cannot be read"):
        read_sheet(tmp_path)
    (tmp_path / "old.csv").write_bytes("temperature [°C]\n1\n".encode("latin-1"))
    with pytest.raises(InputError, match=r"byte 13 is not UTF-8 text; save the table as CSV \(UTF-8\)"):
        read_sheet(tmp_path / "old.csv")
    with pytest.raises(InputError, match="quotation mark without its partner"):
        read_sheet(write('trial\na\n"' + "b\n" * 100_000))


def test_missing_columns_are_all_named(write):
    sheet = read_sheet(write("trails,mass [g]\na,1\n"))
    with pytest.raises(
        InputError, match=r"no columns 'trial', 'rate'; expected the headings 'trial', 'rate \[mg/h\]'; did.*'trails'"
    ):
        sheet.require({"trial": "trial", "rate": "rate [mg/h]", "mass": "mass [g]"})


def test_two_columns_of_one_name(write):
    with pytest.raises(InputError, match=r"'mass \[g\]' and 'Mass \[kg\]' mean the same; keep one"):
        read_sheet(write("mass [g],Mass [kg]\n1,2\n")).numbers("mass")


def test_text_among_numbers_is_named_with_its_place(write):
    with pytest.raises(InputError, match=r"trials\.csv: 'low' in line 3, column 'PO2 \[mbar\]', is not a number"):
        read_sheet(write(TEXT.replace("105", "low"))).quantity("po2", "kPa")


def test_missing_and_wrong_units(write):
    sheet = read_sheet(write("trial,po2,temperature [m],salinity [%],mass [h]\na,1,1,1,1\n"))
    with pytest.raises(UnitError, match=r"heading 'po2' states no unit.*'po2 \[kPa\]'"):
        sheet.quantity("po2", "kPa")
    with pytest.raises(UnitError, match=r"column 'mass \[h\]': unit 'h' cannot be converted; expected.*such as g; why"):
        sheet.quantity("mass", "g", remedy="why")
    with pytest.raises(UnitError, match=r"column 'temperature \[m\]': unit 'm' is not one of temperature"):
        sheet.temperature()
    with pytest.raises(UnitError, match=r"column 'salinity \[%\]': unit '%' is not one of salinity"):
        sheet.salinity()
    with pytest.raises(UnitError, match=r"column 'salinity \[kPa\]': unit 'kPa' cannot be converted"):
        read_sheet(write("salinity [kPa]\n1\n")).salinity()


def test_times_that_are_none(write):
    with pytest.raises(UnitError, match=r"'time' states no unit.*'time \[min\]'"):
        read_sheet(write("time\n0\n10\n")).hours()
    with pytest.raises(InputError, match="'noon' in line 3, column 'time', is not a time"):
        read_sheet(write("time\n2024-05-27\nnoon\n")).hours()


def test_rows_without_trial(write):
    with pytest.raises(InputError, match="line 3 names no trial"):
        read_sheet(write("trial,mass [g]\na,1\n,2\n")).trials()


def test_readings_that_are_of_no_single_trial():
    check_trial("t", np.array([-0.1, 101.3]), np.array([10.0, 14.9]))
    with pytest.raises(InputError, match=r"t: temperatures from 10 to 15\.1 degC in one trial"):
        check_trial("t", np.array([1.0, 2.0]), np.array([10.0, 15.1]))
    with pytest.raises(InputError, match="t: PO2 up to 155 kPa; expected at most 101 kPa"):
        check_trial("t", np.array([1.0, 155.0]), np.array([10.0, 10.0]))


@pytest.mark.parametrize("hours", [-1.0, np.nan, np.inf])
def test_settling_that_is_no_time(hours):
    with pytest.raises(InputError, match=r"settling period of .* h; expected hours, 0 or more"):
        check_settling(hours)


@pytest.mark.parametrize("temperature", [283.15, -263.15])
def test_kelvin_labelled_celsius_and_the_reverse_are_refused(temperature):
    with pytest.raises(
        InputError, match=rf"t: temperatures from {temperature:.4g} .* expected -3 to 50 degC; .*kelvin"
    ):
        check_trial("t", np.array([1.0, 2.0]), np.array([temperature, temperature]))
