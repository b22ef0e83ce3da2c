"""The output folder of a study: complete or absent."""

import glob
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


PROGRAM = "habitat"
"""Name by which a record is known to be ours."""


@contextmanager
def output_folder(target: str | Path) -> Iterator[Path]:
    """Give a temporary folder beside `target` to write to; put it in the place of `target` when the block ends well.

    When the block fails, or the program is stopped, the temporary folder is removed and `target` stays as it was. An
    earlier result in `target` is replaced; other files that somebody put there are kept, under a name ending in
    ``.kept`` where a result now has theirs.

    Raises
    ------
    OutputError
        `target` is a file, or a folder that holds other things than results, or cannot be written.
    """
    target = Path(target).resolve()  # a link stays a link: the folder it leads to is replaced
    temporary = target.with_name(f".{target.name}.partial-{os.getpid()}")
    with output_errors(target):
        _check(target)
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
    if os.path.ismount(target):
        raise OutputError(
            "this is a mount point, which cannot be replaced", where=str(target), remedy="choose a folder inside it"
        )
    if target.is_dir():
        strangers = sorted(entry.name for entry in target.iterdir())
        if strangers and not _outputs_of(target):
            listed = ", ".join(strangers[:3]) + (", ..." if len(strangers) > 3 else "")
            raise OutputError(
                f"the folder holds other files ({listed}) and no earlier results",
                where=str(target),
                remedy="choose a new or empty folder with --out",
            )
    there = next(path for path in (target, *target.parents) if path.exists())
    if not there.is_dir():
        raise OutputError(
            f"{there.name} is a file", where=str(target), expected="a folder", remedy="choose another with --out"
        )


def _remove_abandoned(target: Path) -> None:
    """Remove what runs that were killed outright have left, and put back what they had moved aside."""
    for state in ("partial", "earlier"):
        for leftover in target.parent.glob(f".{glob.escape(target.name)}.{state}-*"):
            number = leftover.name.rpartition("-")[2]
            if number.isdigit() and not _is_running(int(number)):
                if state == "earlier":
                    _settle(leftover, target)
                else:
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
    earlier = target.with_name(f".{target.name}.earlier-{os.getpid()}")
    try:
        if target.exists():
            target.rename(earlier)
        temporary.rename(target)
    finally:
        if earlier.exists():
            _settle(earlier, target)


def _settle(earlier: Path, target: Path) -> None:
    """End a swap: keep other people's files and drop the earlier results; put all back if nothing took their place."""
    if not target.exists():
        earlier.rename(target)
        return
    ours = _outputs_of(earlier)
    for entry in earlier.rglob("*"):
        name = entry.relative_to(earlier)
        if name.as_posix() in ours or (entry.is_dir() and not entry.is_symlink()):
            continue
        place = target / name
        place.parent.mkdir(parents=True, exist_ok=True)
        entry.rename(place if not place.exists() else place.with_name(f"{place.name}.kept"))
    shutil.rmtree(earlier)


def _outputs_of(folder: Path) -> set[str]:
    """Names of the files that the record of an earlier run lists as its own; empty without such a record."""
    try:
        record = json.loads((folder / RECORD).read_text(encoding="utf-8"))
        return {*record["outputs"], RECORD} if record["program"]["name"] == PROGRAM else set()
    except (OSError, ValueError, KeyError, TypeError):
        return set()
