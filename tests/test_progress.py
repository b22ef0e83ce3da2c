"""A bar on a terminal, nothing in a pipe."""

import io
import sys

import dask
import numpy as np
import pytest
import xarray as xr

from habitat.progress import steps


class Terminal(io.StringIO):
    """Text that takes itself for a terminal."""

    def isatty(self):
        return True


@pytest.fixture
def terminal(monkeypatch):
    """Give a function that puts a terminal in the place of standard error; pytest puts its own there before a test."""

    def open_terminal():
        stream = Terminal()
        monkeypatch.setenv("TERM", "xterm")
        monkeypatch.setenv("COLUMNS", "100")
        monkeypatch.setattr(sys, "stderr", stream)
        return stream

    return open_terminal


def work():
    with steps(3) as progress:
        progress.step("baseline")
        lazy = xr.DataArray(np.arange(10.0), dims="x").chunk(x=1)
        total = float((lazy + 1).sum())
        progress.step("two degrees warmer")
        progress.step("tables")
    return total


def test_in_a_pipe_nothing_is_written(capsys):
    assert work() == 55.0
    assert capsys.readouterr() == ("", "")


def test_a_terminal_shows_each_step_and_is_left_clean(terminal):
    stream = terminal()
    assert work() == 55.0
    shown = stream.getvalue()
    assert "tables" in shown
    assert "2/3" in shown  # the third step has begun, so two are done
    assert "\x1b[2K" in shown  # the line is erased at the end


def test_nothing_goes_to_standard_output(terminal, capsys):
    stream = terminal()
    work()
    assert capsys.readouterr().out == ""
    assert stream.getvalue() != ""


def test_a_failure_passes_through_and_the_callback_is_gone(terminal):
    stream = terminal()

    def fail():
        with steps(2) as progress:
            progress.step("baseline")
            raise ValueError("bad")

    with pytest.raises(ValueError, match="bad"):
        fail()
    assert dask.callbacks.Callback.active == set()
    assert "baseline" in stream.getvalue()
