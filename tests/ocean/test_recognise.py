"""Files told apart by what is in them."""

import gzip
import zipfile
from pathlib import Path

import netCDF4
import pytest

from habitat.errors import InputError
from habitat.ocean import open_ocean
from habitat.ocean.recognise import recognise


@pytest.mark.parametrize(
    ("text", "kind"),
    [
        ("CTD,20240101X\nNUMBER_HEADERS = 1\n", "WHP-Exchange CTD cast"),
        ("CTD\n", "WHP-Exchange CTD cast"),
        ("\ufeffBOTTLE,20240101X\n", "WHP-Exchange bottle file"),
        ("depth [m],oxygen [ml/l]\n", "CSV table"),
        ("CTDPRS,CTDTMP\n1,2\n", "CSV table"),
        ("BOTTLE,depth [m],oxygen [ml/l]\n1,2,3\n", "CSV table"),
        ("CTD,20240101X\r\nNUMBER_HEADERS = 1\r\n", "WHP-Exchange CTD cast"),
    ],
)
def test_text_by_its_first_line_whatever_the_ending(write, text, kind):
    assert recognise(write(text, "file.nc")) == kind


def test_grid_whatever_the_ending(write_grid, water):
    assert recognise(write_grid(water(), "grid.csv")) == "netCDF grid"


@pytest.mark.parametrize(("feature", "kind"), [("profile", "netCDF profiles"), ("Grid", "netCDF grid")])
def test_feature_type(write_grid, water, feature, kind):
    path = write_grid(water())
    with netCDF4.Dataset(path, "a") as file:
        file.featureType = feature
    assert recognise(path) == kind


def test_real_files(data):
    assert recognise(data / "section" / "a03_hy1.csv") == "WHP-Exchange bottle file"
    kinds = {path.name: recognise(path) for path in sorted((data / "floats").iterdir())}
    assert set(kinds.values()) == {"netCDF profiles"}
    assert len(kinds) == 4


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b"", "the file is empty"),
        (b" \n\n", "the file is empty"),
        (b"\x00\x01\x02\x03", "a binary file of unknown kind; expected a CSV table"),
        (b"%PDF-1.4 ...", "this is a PDF document"),
        (b"GRIB....", "this is a GRIB file.*convert it to netCDF"),
        (gzip.compress(b"depth [m]", mtime=0), "this is a gzip archive.*unpack it first"),
        ("depth [m]".encode("utf-16"), "this is UTF-16 text.*save it as UTF-8"),
        (b"\x89HDF\r\n\x1a\n" + b"\x00" * 100, r"cannot be read as netCDF \(.*damaged or cut off"),
        (b"CDF\x01\x00", r"cannot be read as netCDF \("),
    ],
)
def test_refused_contents(tmp_path, content, message):
    path = tmp_path / "thing.csv"
    path.write_bytes(content)
    with pytest.raises(InputError, match=message):
        open_ocean([path])


def test_zip_archive(tmp_path):
    path = tmp_path / "casts.csv"
    with zipfile.ZipFile(path, "w") as archive:
        archive.writestr("a.csv", "depth")
    with pytest.raises(InputError, match=r"this is a zip archive or spreadsheet.*save the sheet as CSV"):
        open_ocean([path])


def test_netcdf_cut_off(write_grid, water, tmp_path):
    whole = Path(write_grid(water())).read_bytes()
    path = tmp_path / "cut.nc"
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(InputError, match=r"cut\.nc: cannot be read as netCDF"):
        open_ocean([path])


def test_netcdf_whose_values_cannot_be_read(write_grid, water, tmp_path):
    path = write_grid(water(), compression="zlib", chunksizes=(3, 2, 3), fletcher32=True)
    content = bytearray(Path(path).read_bytes())
    start = content.find(b"\x78\x5e") if b"\x78\x5e" in content else content.find(b"\x78\x9c")
    assert start > 0  # the first compressed block
    content[start + 2 : start + 22] = bytes(20)
    broken = tmp_path / "broken.nc"
    broken.write_bytes(content)
    with pytest.raises(InputError, match=r"broken\.nc: cannot be read as netCDF \("):
        open_ocean([broken])


def test_folder_and_missing_file(tmp_path):
    with pytest.raises(InputError, match="this is a folder; expected a file; name its files"):
        open_ocean([tmp_path])
    (tmp_path / "cast_1.csv").write_text("x")
    with pytest.raises(InputError, match=r"file not found; did you mean cast_1\.csv"):
        open_ocean([tmp_path / "cast_2.csv"])


def test_file_without_permission(tmp_path, monkeypatch):
    path = tmp_path / "cast.csv"
    path.write_text("depth [m]")

    def refuse(*_, **__):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("pathlib.Path.open", refuse)
    with pytest.raises(InputError, match=r"cannot be read \(Permission denied\)"):
        recognise(path)
