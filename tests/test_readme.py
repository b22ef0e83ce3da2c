"""README tells the truth: its table, study file, species file and Python are those of the bundled example."""

import re
from pathlib import Path

import pandas as pd
import pytest

from habitat.study import run_study
from habitat.studyfile import read_study

REPOSITORY = Path(__file__).resolve().parents[1]
README = (REPOSITORY / "README.md").read_text(encoding="utf-8")
EXAMPLE = REPOSITORY / "examples" / "basin.toml"


def block(kind):
    """Text of the first code block of a kind."""
    return re.search(rf"^```{kind}\n(.*?)^```", README, re.MULTILINE | re.DOTALL)[1]


def rows(text):
    """Cells of the rows of a Markdown table, without their padding."""
    lines = [line for line in text.splitlines() if line.startswith("| ")]
    return [[cell.strip() for cell in line.strip("|").split("|")] for line in lines]


@pytest.fixture(scope="module")
def findings(tmp_path_factory):
    folder = tmp_path_factory.mktemp("readme")
    study = EXAMPLE.read_text(encoding="utf-8") + "figures = false\n"
    study = study.replace('"../', f'"{REPOSITORY}/').replace('file = "', f'file = "{EXAMPLE.parent}/')
    (folder / "basin.toml").write_text(study, encoding="utf-8")
    return run_study(folder / "basin.toml", folder / "out")


def test_the_table_is_that_of_the_example(findings):
    shown = [row for row in rows(README) if row[0] in ("species", "Veil prawn", "Copper runner")]
    assert shown == rows((findings / "findings.md").read_text(encoding="utf-8"))


def test_the_study_shown_is_the_example(tmp_path):
    text = block("toml").replace('"../', f'"{REPOSITORY}/').replace('file = "', f'file = "{EXAMPLE.parent}/')
    (tmp_path / "shown.toml").write_text(text, encoding="utf-8")
    shown, example = read_study(tmp_path / "shown.toml"), read_study(EXAMPLE)
    assert (shown.title, shown.regions) == (example.title, example.regions)
    assert shown.scenarios == example.scenarios[:1]
    assert shown.animals[0].species == example.animals[0].species


def test_the_python_shown_runs(monkeypatch):
    monkeypatch.chdir(REPOSITORY)
    names: dict[str, object] = {}
    exec(block("python"), names)
    assert isinstance(names["table"], pd.DataFrame)
    assert set(names["table"]["activity"]) == {1.0, 2.5}


def test_links_lead_to_files():
    for target in re.findall(r"\]\((?!http)([^)#]+)\)", README):
        assert (REPOSITORY / target).is_file()
