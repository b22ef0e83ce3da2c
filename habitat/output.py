"""The output folder of a study: complete or absent."""

import json
import os
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from habitat.errors import OutputError
from habitat.files import output_errors

RECORD = "run.json"
"""The machine-readable record of a run; its presence says that a folder is one of ours and is complete."""


@contextmanager
def output_folder(target: str | Path) -> Iterator[Path]:
    """Give a temporary folder beside `target` to write to; put it in the place of `target` when the block ends well.

    When the block fails, or the program is stopped, the temporary folder is removed and `target` stays as it was. An
    earlier result in `target` is replaced; other files that somebody put there are kept.

    Raises
    ------
    OutputError
        `target` is a file, or a folder that holds other things than results, or cannot be written.
    """
    target = Path(target).absolute()
    _check(target)
    temporary = target.with_name(f".{target.name}.partial-{os.getpid()}")
    with output_errors(target):
        target.parent.mkdir(parents=True, exist_ok=True)
        _remove_abandoned(target)
        temporary.mkdir()
    try:
        with output_errors(target):
            yield temporary
            _swap(temporary, target)
    finally:
        shutil.rmtree(temporary, ignore_errors=True)


def _check(target: Path) -> None:
    if target.is_dir():
        strangers = sorted(entry.name for entry in target.iterdir())
        if strangers and RECORD not in strangers:
            listed = ", ".join(strangers[:3]) + (", ..." if len(strangers) > 3 else "")
            raise OutputError(
                f"the folder holds other files ({listed}) and no earlier results",
                where=str(target),
                remedy="choose a new or empty folder with --out",
            )
    elif target.exists():
        raise OutputError("this is a file", where=str(target), expected="a folder", remedy="choose another with --out")


def _remove_abandoned(target: Path) -> None:
    """Remove what runs that were killed outright have left."""
    for leftover in target.parent.glob(f".{target.name}.partial-*"):
        number = leftover.name.rpartition("-")[2]
        if number.isdigit() and not _is_running(int(number)):
            shutil.rmtree(leftover, ignore_errors=True)


def _is_running(process: int) -> bool:
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except OSError:
        return True
    return process != os.getpid()


def _swap(temporary: Path, target: Path) -> None:
    if not target.exists():
        temporary.rename(target)
        return
    earlier = target.with_name(f".{target.name}.earlier-{os.getpid()}")
    ours = _results_in(target)
    target.rename(earlier)
    temporary.rename(target)
    for entry in earlier.iterdir():
        if entry.name not in ours and not (target / entry.name).exists():
            entry.rename(target / entry.name)
    shutil.rmtree(earlier)


def _results_in(folder: Path) -> set[str]:
    """Top-level names that the record of an earlier run lists as its own."""
    record = folder / RECORD
    if not record.exists():
        return set()
    try:
        listed = json.loads(record.read_text(encoding="utf-8"))["outputs"]
    except (ValueError, KeyError, TypeError):
        listed = {}
    return {Path(name).parts[0] for name in listed} | {RECORD}
