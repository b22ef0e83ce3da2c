"""Tables in the forms that people paste: CSV, Markdown, LaTeX, XLSX, and plain text for a terminal."""

import io
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pandas as pd
import xlsxwriter
from tabulate import tabulate


def csv(table: pd.DataFrame) -> str:
    """Lay a table out as CSV: ten significant digits, times as ISO 8601."""
    return table.to_csv(index=False, float_format="%.10g", date_format="%Y-%m-%dT%H:%M:%S", lineterminator="\n")


def write_csv(table: pd.DataFrame, path: Path) -> None:
    """Write a table as CSV in UTF-8."""
    path.write_text(csv(table), encoding="utf-8", newline="")


def report_table(findings: pd.DataFrame) -> pd.DataFrame:
    """Bring the findings down to what fits a page: medians with the range over the columns, and changes."""
    table = findings[["species", "activity", "scenario", "region", "columns"]].copy()
    table["viable columns, %"] = [_number(100 * share) for share in findings["viable_share"]]
    for name, heading in (("upper", "upper edge, m"), ("lower", "lower edge, m"), ("thickness", "thickness, m")):
        keys = (f"{name}_m", f"{name}_m_columns_p05", f"{name}_m_columns_p95")
        table[f"{heading} (range over columns)"] = [_ranged(*values) for values in findings[list(keys)].to_numpy()]
    keys = ("thickness_m", "thickness_m_physiology_p05", "thickness_m_physiology_p95")
    table["thickness, m (physiology 5-95 %)"] = [_ranged(*values) for values in findings[list(keys)].to_numpy()]
    if findings["viable_volume_km3"].notna().any():
        table["viable volume, km3"] = [_number(volume) for volume in findings["viable_volume_km3"]]
    changed = findings[["thickness_change_m", "thickness_change_percent"]].to_numpy()
    is_baseline = findings["scenario"] == findings["scenario"].iloc[0]
    table["thickness change, m (%)"] = [
        "" if base or np.isnan(metres) else f"{metres:+.0f}" + ("" if np.isnan(percent) else f" ({percent:+.0f} %)")
        for base, (metres, percent) in zip(is_baseline, changed, strict=True)
    ]
    return table


def plain(table: pd.DataFrame) -> str:
    """Lay a table out for a terminal."""
    return tabulate(_texts(table), headers=list(table.columns), tablefmt="simple", disable_numparse=True)


def markdown(table: pd.DataFrame) -> str:
    """Lay a table out as Markdown."""
    cells = [[text.replace("|", "\\|") for text in row] for row in _texts(table)]
    return tabulate(cells, headers=list(table.columns), tablefmt="github", disable_numparse=True) + "\n"


def latex(table: pd.DataFrame) -> str:
    """Lay a table out as LaTeX, for the package booktabs."""
    return tabulate(_texts(table), headers=list(table.columns), tablefmt="latex_booktabs", disable_numparse=True) + "\n"


def write_xlsx(table: pd.DataFrame, meanings: Mapping[str, str], note: str, path: Path) -> None:
    """Write a table and a sheet with the meaning of its columns and a note; the same table gives the same bytes."""
    buffer = io.BytesIO()
    book = xlsxwriter.Workbook(buffer, {"in_memory": True, "strings_to_formulas": False, "strings_to_urls": False})
    book.set_properties({"created": pd.Timestamp("2000-01-01").to_pydatetime()})  # a clock would change the bytes
    head = book.add_format({"bold": True, "text_wrap": True, "valign": "top"})
    sheet = book.add_worksheet("findings")
    sheet.freeze_panes(1, 4)
    sheet.write_row(0, 0, list(table.columns), head)
    for i, row in enumerate(table.itertuples(index=False), start=1):
        for j, value in enumerate(row):
            if not pd.isna(value):
                sheet.write(i, j, value)
    sheet.set_column(0, 3, 22)
    sheet.set_column(4, len(table.columns) - 1, 13)
    sheet = book.add_worksheet("columns")
    sheet.write_row(0, 0, ["column", "meaning"], head)
    for i, name in enumerate(table.columns, start=1):
        sheet.write_row(i, 0, [name, meanings[name]])
    sheet.write(len(table.columns) + 2, 0, note)
    sheet.set_column(0, 0, 34)
    sheet.set_column(1, 1, 100)
    book.close()
    path.write_bytes(buffer.getvalue())


def _texts(table: pd.DataFrame) -> list[list[str]]:
    return [
        [f"{value:g}" if isinstance(value, float) else str(value) for value in row] for row in table.to_numpy(object)
    ]


def _number(value: float) -> str:
    if np.isnan(value):
        return ""
    return f"{value:.0f}" if abs(value) >= 10 or value == 0 else f"{value:.2g}"


def _ranged(middle: float, low: float, high: float) -> str:
    if np.isnan(middle):
        return "none"
    return _number(middle) if np.isnan(low) else f"{_number(middle)} ({_number(low)} to {_number(high)})"
