"""Reading TOML, checksums, and writing that is complete or absent."""

import errno
import os

import pytest

from habitat import files
from habitat.errors import InputError, OutputError


def test_toml_is_read_with_or_without_a_byte_order_mark(tmp_path):
    path = tmp_path / "species.toml"
    for mark in (b"", b"\xef\xbb\xbf"):
        path.write_bytes(mark + 'name = "Prawn µ"\r\nmass = 2.5\r\n'.encode())
        assert files.read_toml(path) == {"name": "Prawn µ", "mass": 2.5}


@pytest.mark.parametrize(
    ("content", "message"),
    [
        (b'name = "Prawn"\nmass = \n', r"species\.toml: not valid TOML \(.*line 2, column 8\)\); correct that line"),
        (b"name = Prawn\n", r"not valid TOML \(.*line 1, column 8\).*double quotes"),
        (b'name = "a"\nname = "b"\n', r"not valid TOML \(.*line 2"),
        (b'name = "Pr\xe4wn"\n', r"species\.toml: byte 10 is not UTF-8 text; expected a TOML text file"),
    ],
)
def test_toml_errors_name_file_and_place(tmp_path, content, message):
    path = tmp_path / "species.toml"
    path.write_bytes(content)
    with pytest.raises(InputError, match=message):
        files.read_toml(path)


def test_a_folder_is_not_read_as_toml(tmp_path):
    with pytest.raises(InputError, match=r"cannot be read \(Is a directory\)"):
        files.read_toml(tmp_path)


def test_a_missing_file_is_answered_with_near_names(tmp_path):
    (tmp_path / "prawn.toml").touch()
    with pytest.raises(InputError, match=r"prwan\.toml: file not found; did you mean prawn\.toml\?"):
        files.read_toml(tmp_path / "prwan.toml")
    with pytest.raises(InputError, match="file not found; check the name"):
        files.read_toml(tmp_path / "zebra.csv")
    with pytest.raises(InputError, match=r"file not found; the folder .*nowhere does not exist either"):
        files.read_toml(tmp_path / "nowhere" / "prawn.toml")


def test_nearest_names_one_word_or_lists_all():
    known = ["warming", "oxygen"]
    assert files.nearest("oxigen", iter(known)) == "did you mean 'oxygen'?"
    assert files.nearest("zzz", iter(known)) == "known here: warming, oxygen"


def test_sha256_of_a_file_within_the_limit_only(tmp_path, monkeypatch):
    path = tmp_path / "abc"
    path.write_bytes(b"abc")
    # FIPS 180-2, appendix B.1: the digest of "abc"
    assert files.sha256(path) == "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    monkeypatch.setattr(files, "CHECKSUM_LIMIT", 3)
    assert files.sha256(path) is not None
    monkeypatch.setattr(files, "CHECKSUM_LIMIT", 2)
    assert files.sha256(path) is None
    assert files.sha256(tmp_path) is None


def test_a_finished_block_replaces_the_file_and_leaves_nothing_else(tmp_path):
    path = tmp_path / "table.csv"
    path.write_text("old")
    with files.atomic_path(path) as temporary:
        assert temporary.parent == tmp_path
        assert temporary.suffix == ".csv"  # writers choose the format by it
        temporary.write_text("new")
        assert path.read_text() == "old"
    assert path.read_text() == "new"
    assert os.listdir(tmp_path) == ["table.csv"]


def test_a_written_file_has_the_permissions_of_any_new_file(tmp_path):
    (tmp_path / "ordinary").touch()
    with files.atomic_path(tmp_path / "table.csv"):
        pass
    assert (tmp_path / "table.csv").stat().st_mode == (tmp_path / "ordinary").stat().st_mode


@pytest.mark.parametrize("failure", [InputError("bad row"), KeyboardInterrupt("stopped"), OSError(errno.EIO, "broken")])
def test_a_failed_block_keeps_the_old_file_and_leaves_nothing(tmp_path, failure):
    path = tmp_path / "table.csv"
    path.write_text("old")
    expected = OutputError if isinstance(failure, OSError) else type(failure)
    with pytest.raises(expected, match=r"bad row|stopped|broken"), files.atomic_path(path) as temporary:  # noqa: PT012
        temporary.write_text("half of the n")
        raise failure
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["table.csv"]


@pytest.mark.parametrize(
    ("code", "remedy"),
    [
        (errno.ENOSPC, "the disk is full: free some space"),
        (errno.EDQUOT, "the disk quota is used up: free some space"),
        (errno.EACCES, "no permission to write there: choose another place"),
        (errno.EPERM, "no permission to write there: choose another place"),
        (errno.EROFS, "that disk is read-only: choose another place"),
        (errno.EIO, "choose another place"),
    ],
)
def test_a_refused_rename_says_why_and_what_to_do(tmp_path, monkeypatch, code, remedy):
    path = tmp_path / "table.csv"
    path.write_text("old")

    def refuse(*_args):
        raise OSError(code, os.strerror(code))

    monkeypatch.setattr("pathlib.Path.replace", refuse)
    message = rf"table\.csv: cannot be written \({os.strerror(code)}\); {remedy}"
    with pytest.raises(OutputError, match=message), files.atomic_path(path) as temporary:
        temporary.write_text("new")
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["table.csv"]


def test_real_refusals_of_the_file_system(tmp_path):
    (tmp_path / "file").touch()
    (tmp_path / "folder").mkdir()
    for path, remedy in [
        (tmp_path / "absent" / "table.csv", r"No such file.*the folder does not exist: create it"),
        (tmp_path / "file" / "table.csv", r"Not a directory.*a part of that path is a file"),
        (tmp_path / "folder", r"Is a directory.*that is a folder: give the name of a file"),
    ]:
        with pytest.raises(OutputError, match=remedy), files.atomic_path(path):
            pass
    assert sorted(os.listdir(tmp_path)) == ["file", "folder"]


def test_nested_output_errors_keep_the_first_message():
    message = r"inner\.csv: cannot be written \(full\); the disk is full"
    with pytest.raises(OutputError, match=message), files.output_errors("outer"), files.output_errors("inner.csv"):
        raise OSError(errno.ENOSPC, "full")
