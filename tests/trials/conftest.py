"""Writers of small laboratory tables."""

import pytest


@pytest.fixture
def write(tmp_path):
    """Write a text file; give its path as text."""

    def writer(text, name="trials.csv"):
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        return str(path)

    return writer
