"""What kind of file a path leads to, judged by its content and never by its extension."""

import re
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Literal

import xarray as xr

from habitat.errors import HabitatError, InputError
from habitat.files import missing_file

Kind = Literal["CSV table", "WHP-Exchange CTD cast", "WHP-Exchange bottle file", "netCDF grid", "netCDF profiles"]

_NETCDF_MAGIC = (b"CDF\x01", b"CDF\x02", b"CDF\x05", b"\x89HDF\r\n\x1a\n")
_OTHER_MAGIC = {
    b"PK\x03\x04": ("a zip archive or spreadsheet", "unpack it, or save the sheet as CSV (UTF-8)"),
    b"\x1f\x8b": ("a gzip archive", "unpack it first"),
    b"\xff\xfe": ("UTF-16 text", "save it as UTF-8"),
    b"\xfe\xff": ("UTF-16 text", "save it as UTF-8"),
    b"%PDF": ("a PDF document", "give the table itself, as CSV (UTF-8)"),
    b"GRIB": ("a GRIB file", "convert it to netCDF"),
    b"\xd0\xcf\x11\xe0": ("an old spreadsheet", "save the sheet as CSV (UTF-8)"),
}
# CF conventions, chapter 9; other values, such as "grid", tell of no profiles
_FEATURE_TYPES = {"point", "timeseries", "trajectory", "profile", "timeseriesprofile", "trajectoryprofile"}
_EXCHANGE_STAMP = re.compile(rb"(?:\xef\xbb\xbf)?\s*(BOTTLE|CTD)[ \t]*(?:,[^,\r\n]*)?[,\s]*[\r\n]")
_HEAD = 65536  # bytes looked at to tell text from binary


def recognise(path: str | Path) -> Kind:
    """Tell the kind of an ocean file from its content.

    Raises
    ------
    InputError
        The file is missing, a folder, empty, unreadable, damaged, or of a kind that is not read.
    """
    path = Path(path)
    head = _first_bytes(path)
    if head.startswith(_NETCDF_MAGIC):
        return _netcdf_kind(path)
    expected = "a CSV table, a WHP-Exchange file or a netCDF file"
    for magic, (what, remedy) in _OTHER_MAGIC.items():
        if head.startswith(magic):
            raise InputError(f"this is {what}", where=str(path), expected=expected, remedy=remedy)
    if b"\x00" in head:
        raise InputError("this is a binary file of unknown kind", where=str(path), expected=expected)
    stamp = _EXCHANGE_STAMP.match(head)
    if stamp is None:
        return "CSV table"
    return "WHP-Exchange bottle file" if stamp[1] == b"BOTTLE" else "WHP-Exchange CTD cast"


@contextmanager
def reading_errors(where: str) -> Iterator[None]:
    """Turn a failure of the netCDF libraries into an `InputError` naming the file or files.

    Warnings about several fill values and about calendars are silenced: what they tell is handled and reported here.
    """
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore", xr.SerializationWarning)
            yield
    except HabitatError:
        raise
    except (OSError, RuntimeError) as error:
        raise InputError(
            f"cannot be read as netCDF ({error})",
            where=where,
            remedy="the file may be damaged or cut off: fetch it again, or check it with ncdump -h",
        ) from None


def open_netcdf(path: str | Path, **options: object) -> xr.Dataset:
    """Open a netCDF file with its times undecoded, so that no time unit can stop it.

    Raises
    ------
    InputError
        The file is damaged.
    """
    with reading_errors(str(path)):
        return xr.open_dataset(path, engine="netcdf4", decode_times=False, **options)


def _first_bytes(path: Path) -> bytes:
    if path.is_dir():
        raise InputError(
            "this is a folder", where=str(path), expected="a file", remedy=f"name its files, for example '{path}/*.csv'"
        )
    try:
        with path.open("rb") as stream:
            head = stream.read(_HEAD)
    except FileNotFoundError:
        raise missing_file(path) from None
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", where=str(path)) from None
    if not head.strip():
        raise InputError("the file is empty", where=str(path), expected="a table or grid of ocean measurements")
    return head


def _netcdf_kind(path: Path) -> Kind:
    with open_netcdf(path) as dataset:
        features = {str(v).lower() for name, v in dataset.attrs.items() if name.lower() == "featuretype"}
        ragged = any({"sample_dimension", "instance_dimension"} & set(v.attrs) for v in dataset.variables.values())
        argo = {"N_PROF", "N_LEVELS"} <= set(dataset.sizes)
        return "netCDF profiles" if features & _FEATURE_TYPES or ragged or argo else "netCDF grid"
