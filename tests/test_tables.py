"""Findings of regions, by hand and against slow code, and the forms of tables."""

import time

import numpy as np
import openpyxl
import pandas as pd
import pytest
from columns_by_hand import casts, four_casts, grid, regional_findings, totals_of
from hypothesis import strategies as st

from habitat import tables
from habitat.findings import FINDINGS_COLUMNS
from habitat.regions import Region
from habitat.tables import report_table

NAN = np.nan

numbers = st.floats(-1e6, 1e6, allow_subnormal=False)
some_numbers = st.lists(numbers, min_size=1, max_size=30)


# --- the forms ---------------------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def findings():
    warmer = four_casts().assign(thickness=four_casts()["thickness"] * 0.75)
    return regional_findings(casts(), {"baseline": four_casts(), "+2 degC": warmer}, None, [Region("all")], "=Prawn_1")


def test_csv_keeps_ten_digits_and_writes_times_as_iso_8601():
    table = pd.DataFrame({"a": [1 / 3, NAN], "time": pd.to_datetime(["2001-02-03T04:05", None]), "word": ["x,y", 'q"']})
    assert tables.csv(table) == 'a,time,word\n0.3333333333,2001-02-03T04:05:00,"x,y"\n,,"q"""\n'


def test_csv_is_utf_8_with_plain_line_ends(tmp_path):
    tables.write_csv(pd.DataFrame({"species": ["Крилль"]}), tmp_path / "t.csv")
    assert (tmp_path / "t.csv").read_bytes() == "species\nКрилль\n".encode()


def test_the_page_gives_medians_ranges_and_changes(findings):
    page = report_table(findings)
    assert page["viable columns, %"].tolist() == ["67", "67"]
    assert page["upper edge, m (range over columns)"].tolist() == ["5 (0 to 10)"] * 2
    assert page["thickness, m (range over columns)"].tolist() == ["60 (0 to 100)", "45 (0 to 75)"]
    assert page["thickness, m (physiology 5-95 %)"].tolist() == ["60", "45"]
    assert page["thickness change, m (%)"].tolist() == ["", "-15 (-25 %)"]
    assert "viable volume, km3" not in page


def test_the_page_says_none_where_nothing_is_viable():
    nothing = totals_of([NAN] * 4, [NAN] * 4, [0.0] * 4, ["cast"])
    page = report_table(regional_findings(casts(), {"baseline": nothing}, None, [Region("all")], "p"))
    assert page["upper edge, m (range over columns)"].item() == "none"
    assert page["thickness, m (range over columns)"].item() == "0 (0 to 0)"


def test_the_page_of_a_grid_has_volumes():
    totals = totals_of([[0.0]], [[50.0]], [[50.0]], ["latitude", "longitude"])
    page = report_table(regional_findings(grid([0.0], [0.0]), {"baseline": totals}, None, [Region("all")], "p"))
    # (2 x 6371 x sin 0.5 degrees) x (6371 x 1 degree in radians) x 0.05 km = 618 km3
    assert page["viable volume, km3"].item() == "618"


def test_markdown_and_terminal_rows_hold_the_values(findings):
    page = report_table(findings)
    lines = tables.markdown(page).splitlines()
    assert len(lines) == 4
    assert [cell.strip() for cell in lines[0].strip("|").split("|")] == list(page.columns)
    assert [cell.strip() for cell in lines[3].strip("|").split("|")] == [
        f"{value:g}" if isinstance(value, float) else str(value) for value in page.iloc[1]
    ]
    assert "45 (0 to 75)" in tables.plain(page)


def test_latex_escapes_what_names_may_hold(findings):
    page = report_table(findings).assign(species="a_b & 5 % of $x")
    text = tables.latex(page)
    assert text.startswith(r"\begin{tabular}")
    assert r"\toprule" in text
    assert r"a\_b \& 5 \% of \$x" in text
    assert r"viable columns, \%" in text


def test_the_workbook_holds_every_value_and_the_meaning_of_every_column(findings, tmp_path):
    tables.write_xlsx(findings, FINDINGS_COLUMNS, "a note", tmp_path / "f.xlsx")
    book = openpyxl.load_workbook(tmp_path / "f.xlsx")
    assert book.sheetnames == ["findings", "columns"]
    rows = list(book["findings"].iter_rows(values_only=True))
    assert list(rows[0]) == list(findings.columns)
    for row, wanted in zip(rows[1:], findings.itertuples(index=False), strict=True):
        assert row[4:] == tuple(None if pd.isna(value) else pytest.approx(value, rel=1e-12) for value in wanted[4:])
        assert row[:4] == wanted[:4]
    assert book["findings"]["A2"].data_type == "s"  # a name that begins with = is a name, not a formula
    meanings = list(book["columns"].iter_rows(values_only=True, max_col=2))
    assert [name for name, _ in meanings[1 : len(FINDINGS_COLUMNS) + 1]] == list(findings.columns)
    assert all(meaning for _, meaning in meanings[1 : len(FINDINGS_COLUMNS) + 1])
    assert meanings[-1][0] == "a note"


def test_every_length_and_share_says_its_unit():
    for name, meaning in FINDINGS_COLUMNS.items():
        for part, unit in (("_percent", "[%]"), ("km3", "[km3]"), ("_m_", "[m]"), ("_share", "[1]")):
            if part in f"{name}_" and not (part != "_percent" and "_percent" in name):
                assert unit in meaning, name


def test_the_same_table_gives_the_same_workbook_a_second_later(findings, tmp_path):
    first, second = tmp_path / "first.xlsx", tmp_path / "second.xlsx"
    tables.write_xlsx(findings, FINDINGS_COLUMNS, "a note", first)
    time.sleep(2.1)  # zip archives keep times in steps of two seconds
    tables.write_xlsx(findings, FINDINGS_COLUMNS, "a note", second)
    assert first.read_bytes() == second.read_bytes()
