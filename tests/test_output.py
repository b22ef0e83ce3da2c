"""The output folder is complete or absent, and nobody's files are lost."""

import errno
import json
import os
import signal
import subprocess
import sys

import pytest

from habitat import output
from habitat.errors import OutputError
from habitat.output import RECORD, output_folder


def write_results(folder, **files):
    """Write files and the record that lists them, as a run does."""
    for name, text in files.items():
        path = folder / name.replace("__", "/")
        path.parent.mkdir(exist_ok=True)
        path.write_text(text)
    names = [name.replace("__", "/") for name in files]
    (folder / RECORD).write_text(
        json.dumps({"program": {"name": "habitat"}, "outputs": dict.fromkeys(names, "checksum")})
    )


def run(target, **files):
    with output_folder(target) as folder:
        write_results(folder, **files)


def contents(folder):
    return {path.relative_to(folder).as_posix() for path in folder.rglob("*") if not path.is_dir()}


def dead_process():
    """Number of a process that has ended."""
    process = subprocess.Popen([sys.executable, "-c", ""])
    process.wait()
    return process.pid


# --- what ends up in the folder ----------------------------------------------------------------------------------


def test_a_new_folder_appears_when_the_block_ends_and_not_before(tmp_path):
    target = tmp_path / "deep" / "er" / "out"
    with output_folder(target) as folder:
        write_results(folder, findings="1")
        assert not target.exists()
        assert folder.parent == target.parent  # one disk, so that renaming is enough
    assert contents(target) == {"findings", RECORD}
    assert os.listdir(target.parent) == ["out"]


def test_earlier_results_are_replaced_and_nothing_of_them_stays(tmp_path):
    target = tmp_path / "out"
    run(target, old="1", both="1", figures__a="1")
    run(target, both="2", figures__b="2")
    assert contents(target) == {"both", "figures/b", RECORD}
    assert (target / "both").read_text() == "2"
    assert os.listdir(tmp_path) == ["out"]


def test_an_empty_folder_is_filled(tmp_path):
    (tmp_path / "out").mkdir()
    run(tmp_path / "out", findings="1")
    assert contents(tmp_path / "out") == {"findings", RECORD}


def test_files_that_somebody_put_beside_results_are_kept(tmp_path):
    target = tmp_path / "out"
    run(target, findings="1", figures__a="1")
    for name in ("notes.txt", "figures/mine.png", "mine/deep.txt", "taken"):
        (target / name).parent.mkdir(exist_ok=True)
        (target / name).write_text("mine")
    run(target, findings="2", taken="2")
    assert contents(target) == {
        "findings", RECORD, "taken", "taken.kept", "notes.txt", "figures/mine.png", "mine/deep.txt",
    }  # fmt: skip
    assert (target / "taken").read_text() == "2"
    assert (target / "taken.kept").read_text() == "mine"


@pytest.mark.parametrize(
    "record", ["{", "[]", '{"outputs": 3}', "{}", '{"program": {"name": "another"}, "outputs": {"findings": "1"}}']
)
def test_a_record_that_is_not_ours_protects_its_folder(tmp_path, record):
    target = tmp_path / "out"
    run(target, findings="1")
    (target / RECORD).write_text(record)
    with pytest.raises(OutputError, match=r"holds other files \(findings, run\.json\) and no earlier results"):
        run(target, tables="2")
    assert contents(target) == {"findings", RECORD}


def test_a_link_to_a_folder_stays_a_link(tmp_path):
    (tmp_path / "disk" / "real").mkdir(parents=True)
    link = tmp_path / "out"
    link.symlink_to(tmp_path / "disk" / "real")
    run(link, findings="1")
    run(link, findings="2")
    assert link.is_symlink()
    assert (tmp_path / "disk" / "real" / "findings").read_text() == "2"
    assert os.listdir(tmp_path / "disk") == ["real"]


# --- refusals ----------------------------------------------------------------------------------------------------


def test_a_folder_of_other_files_is_refused_and_left_alone(tmp_path):
    for name in ("a", "b", "c", "d"):
        (tmp_path / name).touch()
    with (
        pytest.raises(OutputError, match=r"holds other files \(a, b, c, \.\.\.\) and no earlier results; choose a"),
        output_folder(tmp_path),
    ):
        pytest.fail("the block must not run")
    assert contents(tmp_path) == {"a", "b", "c", "d"}


def test_a_file_is_refused(tmp_path):
    (tmp_path / "out").write_text("mine")
    with pytest.raises(OutputError, match=r"out: out is a file; expected a folder"), output_folder(tmp_path / "out"):
        pytest.fail("the block must not run")
    assert (tmp_path / "out").read_text() == "mine"


def test_a_path_below_a_file_is_refused(tmp_path):
    (tmp_path / "file").write_text("mine")
    with (
        pytest.raises(OutputError, match=r"file/out: file is a file; expected a folder; choose another with --out"),
        output_folder(tmp_path / "file" / "out"),
    ):
        pytest.fail("the block must not run")


def test_a_name_too_long_for_the_disk_is_refused(tmp_path):
    with (
        pytest.raises(OutputError, match=r"cannot be written \(File name too long\); choose another place"),
        output_folder(tmp_path / ("x" * 300)),
    ):
        pytest.fail("the block must not run")


def test_a_mount_point_is_refused_before_work_begins(tmp_path, monkeypatch):
    monkeypatch.setattr(os.path, "ismount", lambda path: path == tmp_path)
    with (
        pytest.raises(OutputError, match="this is a mount point, which cannot be replaced; choose a folder inside it"),
        output_folder(tmp_path),
    ):
        pytest.fail("the block must not run")


# --- failures ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("failure", [ValueError("bad"), KeyboardInterrupt("bad"), SystemExit("bad")])
def test_a_block_that_fails_leaves_everything_as_it_was(tmp_path, failure):
    target = tmp_path / "out"
    run(target, findings="1")

    def fail():
        with output_folder(target) as folder:
            (folder / "half").write_text("2")
            raise failure

    with pytest.raises(type(failure), match="bad"):
        fail()
    assert contents(target) == {"findings", RECORD}
    assert os.listdir(tmp_path) == ["out"]


@pytest.mark.parametrize("failing", [0, 1])
def test_a_swap_that_fails_puts_the_earlier_results_back(tmp_path, monkeypatch, failing):
    target = tmp_path / "out"
    run(target, findings="1")
    rename, calls = output.Path.rename, []

    def fails_once(self, other):
        calls.append(self)
        if len(calls) == failing + 1:
            raise OSError(errno.EBUSY, os.strerror(errno.EBUSY))
        return rename(self, other)

    monkeypatch.setattr(output.Path, "rename", fails_once)
    with pytest.raises(OutputError, match=r"out: cannot be written \(Device or resource busy\)"):
        run(target, findings="2")
    assert (target / "findings").read_text() == "1"
    assert os.listdir(tmp_path) == ["out"]


def test_a_full_disk_is_told_with_what_to_do(tmp_path):
    with (
        pytest.raises(OutputError, match=r"out: cannot be written \(No space left on device\); the disk is full: free"),
        output_folder(tmp_path / "out"),
    ):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
    assert os.listdir(tmp_path) == []


def test_a_disk_that_is_really_full(tmp_path):
    disk = tmp_path / "disk"
    disk.mkdir()
    mount = ["mount", "-t", "tmpfs", "-o", "size=256k", "tmpfs", str(disk)]
    if sys.platform != "linux" or os.geteuid() or subprocess.run(mount, capture_output=True, check=False).returncode:
        pytest.skip("a small disk cannot be mounted here")
    try:
        run(disk / "out", findings="1")
        with pytest.raises(OutputError, match="the disk is full: free some space"):
            run(disk / "out", findings="2" * 10**6)
        assert (disk / "out" / "findings").read_text() == "1"
        assert os.listdir(disk) == ["out"]
    finally:
        subprocess.run(["umount", str(disk)], check=True)


# --- runs that are killed ----------------------------------------------------------------------------------------


STUCK = """
import signal, sys, time
from pathlib import Path
from habitat.output import output_folder
signal.signal(signal.SIGTERM, lambda *_: sys.exit(143))
with output_folder(sys.argv[1]) as folder:
    (folder / "half").write_text("half")
    print("ready", flush=True)
    time.sleep(60)
"""


def killed_with(number, target):
    process = subprocess.Popen([sys.executable, "-c", STUCK, str(target)], stdout=subprocess.PIPE, text=True)
    assert process.stdout.readline() == "ready\n"
    process.send_signal(number)
    process.wait(timeout=20)
    process.stdout.close()
    return process.returncode


def test_a_run_that_is_ended_leaves_nothing(tmp_path):
    run(tmp_path / "out", findings="1")
    assert killed_with(signal.SIGTERM, tmp_path / "out") == 143
    assert contents(tmp_path / "out") == {"findings", RECORD}
    assert os.listdir(tmp_path) == ["out"]


def test_a_run_that_is_killed_leaves_no_half_result_and_the_next_run_clears_up(tmp_path):
    run(tmp_path / "out", findings="1")
    assert killed_with(signal.SIGKILL, tmp_path / "out") == -signal.SIGKILL
    assert contents(tmp_path / "out") == {"findings", RECORD}
    assert len(os.listdir(tmp_path)) == 2
    run(tmp_path / "out", findings="2")
    assert os.listdir(tmp_path) == ["out"]


def test_results_moved_aside_by_a_run_killed_in_its_last_moment_are_put_back(tmp_path):
    target = tmp_path / "out[1]"  # brackets in a name are no pattern
    run(target, findings="1")
    (target / "notes").write_text("mine")
    target.rename(tmp_path / f".out[1].earlier-{dead_process()}")
    with pytest.raises(ValueError, match="bad"), output_folder(target):
        raise ValueError("bad")
    assert contents(target) == {"findings", "notes", RECORD}
    assert os.listdir(tmp_path) == ["out[1]"]


def test_files_of_others_that_were_moved_aside_come_back(tmp_path):
    target = tmp_path / "out"
    run(target, findings="2")
    aside = tmp_path / f".out.earlier-{dead_process()}"
    aside.mkdir()
    write_results(aside, findings="1")
    (aside / "notes").write_text("mine")
    run(target, findings="3")
    assert contents(target) == {"findings", "notes", RECORD}
    assert (target / "findings").read_text() == "3"
    assert os.listdir(tmp_path) == ["out"]


def test_what_a_running_process_writes_is_left_alone(tmp_path):
    with subprocess.Popen([sys.executable, "-c", "import time; time.sleep(60)"]) as process:
        try:
            other = tmp_path / f".out.partial-{process.pid}"
            other.mkdir()
            unlike = tmp_path / ".out.partial-mine"
            unlike.mkdir()
            run(tmp_path / "out", findings="1")
            assert other.is_dir()
            assert unlike.is_dir()
        finally:
            process.kill()
