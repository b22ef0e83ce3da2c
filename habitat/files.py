"""Reading TOML, checksums, and writing that is complete or absent."""

import difflib
import errno
import hashlib
import os
import tempfile
import tomllib
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from habitat.errors import InputError, OutputError

CHECKSUM_LIMIT = 2**30  # bytes; larger inputs are worked out of core and are not read a second time for a checksum


def read_toml(path: str | Path) -> dict[str, Any]:
    """Read a TOML file.

    Raises
    ------
    InputError
        The file is missing, unreadable, not UTF-8, or not TOML (the message carries line and column).
    """
    path = Path(path)
    try:
        return tomllib.loads(path.read_text(encoding="utf-8-sig"))  # some editors put a byte-order mark first
    except FileNotFoundError:
        raise missing_file(path) from None
    except OSError as error:
        raise InputError(f"cannot be read ({error.strerror})", where=str(path)) from None
    except UnicodeDecodeError as error:
        raise InputError(
            f"byte {error.start} is not UTF-8 text", where=str(path), expected="a TOML text file"
        ) from None
    except tomllib.TOMLDecodeError as error:
        raise InputError(
            f"not valid TOML ({error})", where=str(path), remedy="correct that line; texts need double quotes"
        ) from None


def missing_file(path: Path) -> InputError:
    """Build the error for a file that is not there, naming near misses in the same folder."""
    folder = path.parent
    names = [entry.name for entry in folder.iterdir()] if folder.is_dir() else []
    near = difflib.get_close_matches(path.name, names, n=3)
    if near:
        remedy = f"did you mean {', '.join(near)}?"
    elif folder.is_dir():
        remedy = "check the name"
    else:
        remedy = f"the folder {folder} does not exist either"
    return InputError("file not found", where=str(path), remedy=remedy)


def nearest(word: str, known: Iterable[str]) -> str:
    """Name the known word nearest to `word`, or list all when none is near.

    Examples
    --------
    >>> nearest("warmin", ["warming", "oxygen"])
    "did you mean 'warming'?"
    """
    known = list(known)
    close = difflib.get_close_matches(word, known, n=1, cutoff=0.6)
    return f"did you mean '{close[0]}'?" if close else f"known here: {', '.join(known)}"


def sha256(path: str | Path) -> str | None:
    """SHA-256 of a file as hexadecimal text; None for a folder or a file larger than `CHECKSUM_LIMIT`."""
    path = Path(path)
    if path.is_dir() or path.stat().st_size > CHECKSUM_LIMIT:
        return None
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


@contextmanager
def atomic_path(path: str | Path) -> Iterator[Path]:
    """Give a temporary path beside `path` to write to; rename it onto `path` when the block ends well.

    When the block fails the temporary file is removed and `path` stays as it was.

    Raises
    ------
    OutputError
        The folder is missing or not writable, or the disk is full.
    """
    path = Path(path)
    with output_errors(path):
        handle, name = tempfile.mkstemp(prefix=f".{path.name}.", suffix=path.suffix, dir=path.parent)
        os.close(handle)
    temporary = Path(name)
    try:
        with output_errors(path):
            yield temporary
            temporary.chmod(0o666 & ~_umask())
            temporary.replace(path)
    finally:
        temporary.unlink(missing_ok=True)


@contextmanager
def output_errors(path: str | Path) -> Iterator[None]:
    """Turn an operating-system failure to write `path` into an `OutputError` with a remedy."""
    try:
        yield
    except OutputError:
        raise
    except OSError as error:
        remedies = {
            errno.ENOSPC: "the disk is full: free some space, or write elsewhere with --out",
            errno.EDQUOT: "the disk quota is used up: free some space, or write elsewhere with --out",
            errno.EACCES: "no permission to write there: choose another place with --out",
            errno.EPERM: "no permission to write there: choose another place with --out",
            errno.EROFS: "that disk is read-only: choose another place with --out",
            errno.ENOENT: "the folder does not exist: create it, or choose another place with --out",
            errno.EISDIR: "that is a folder: give the name of a file",
            errno.ENOTDIR: "a part of that path is a file: choose another place with --out",
        }
        found = f"cannot be written ({error.strerror or error})"
        remedy = remedies.get(error.errno or 0, "choose another place with --out")
        raise OutputError(found, where=str(path), remedy=remedy) from None


def _umask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
