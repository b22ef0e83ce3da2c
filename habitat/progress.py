"""How far long work has come: a bar on a terminal, nothing in a pipe."""

import sys
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

from dask.callbacks import Callback
from rich.console import Console
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn


class Steps:
    """A bar of known length; `step` names what is being done, lazy arrays computed meanwhile fill a second bar."""

    def __init__(self, progress: Progress, total: int) -> None:
        self._progress = progress
        self._task = progress.add_task("", total=total)
        self._begun = False

    def step(self, what: str) -> None:
        """Begin the next step; the one before it is done."""
        self._progress.update(self._task, advance=1 if self._begun else 0, description=what)
        self._begun = True


class _LazyWork(Callback):
    """Shows the tasks of a dask computation that takes more than a moment."""

    def __init__(self, progress: Progress) -> None:
        super().__init__()
        self._progress = progress

    def _start_state(self, dsk: Any, state: Any) -> None:  # noqa: ARG002 - dask's signature
        total = sum(len(state[key]) for key in ("ready", "waiting", "running", "finished"))
        self._task = self._progress.add_task("  grid blocks", total=total)

    def _posttask(self, key: Any, result: Any, dsk: Any, state: Any, worker_id: Any) -> None:  # noqa: ARG002
        self._progress.advance(self._task)

    def _finish(self, dsk: Any, state: Any, failed: bool) -> None:  # noqa: ARG002
        self._progress.remove_task(self._task)


@contextmanager
def steps(total: int) -> Iterator[Steps]:
    """Show a bar of `total` steps on standard error while the block runs, if that is a terminal."""
    columns = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    progress = Progress(*columns, console=Console(stderr=True), transient=True)
    if not sys.stderr.isatty():  # a bar that is counted but never shown
        yield Steps(progress, total)
        return
    with progress, _LazyWork(progress):
        yield Steps(progress, total)
