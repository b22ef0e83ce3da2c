"""What all pictures share: width, letters, and files that are the same in every run."""

import pytest
from matplotlib import rcParams
from scenes import letters, pictures, places

from habitat import figures
from habitat.errors import OutputError


def test_pictures_are_a_column_wide_and_the_same_in_every_run(tmp_path):
    for number, (one, other) in enumerate(zip(pictures(), pictures(), strict=True)):
        assert one.get_figwidth() * 25.4 == pytest.approx(180 if number == 2 else 90)  # mm
        first = figures.save(one, tmp_path / f"first_1.5_{number}")
        second = figures.save(other, tmp_path / f"second_1.5_{number}")
        assert [path.name for path in first] == [f"first_1.5_{number}.png", f"first_1.5_{number}.svg"]
        for path, twin in zip(first, second, strict=True):
            assert path.read_bytes() == twin.read_bytes()
        assert first[0].read_bytes().startswith(b"\x89PNG")
        assert b"</svg>" in first[1].read_bytes()


def test_letters_keep_their_size_when_a_caller_draws_without_our_style():
    for figure in pictures():
        assert {text.get_fontsize() for text in letters(figure)} <= {6.0, 6.5, 7.0, 8.0}


def test_the_settings_of_the_caller_are_left_alone(tmp_path):
    before = dict(rcParams)
    for figure in pictures():
        figures.save(figure, tmp_path / "picture")
    assert dict(rcParams) == before


def test_a_missing_folder_is_said(tmp_path):
    figure = figures.station_map(places(1), title="Prawn")
    with pytest.raises(OutputError, match=r"picture\.png: cannot be written .*the folder does not exist"):
        figures.save(figure, tmp_path / "absent" / "picture")
