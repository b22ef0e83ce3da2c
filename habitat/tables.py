"""Findings for the regions of a report, and tables in the forms that people paste.

Two kinds of spread stand side by side in the findings and must not be mixed up: ``..._columns_p05`` and ``_p95`` are
the range *over the columns* of a region (how different its places are); ``..._physiology_p05`` and ``_p95`` are what
the animal's trials leave uncertain about the regional value itself.
"""

import io
import math
from collections.abc import Mapping
from pathlib import Path

import numpy as np
import pandas as pd
import xarray as xr
import xlsxwriter
from tabulate import tabulate

from habitat.regions import Region, column_areas

METRES_PER_KM = 1000.0

EDGES = ("upper", "lower", "thickness")

FINDINGS_COLUMNS = {
    "species": "name of the animal",
    "activity": "activity factor: multiple of the resting rate that must be sustained [1]",
    "scenario": "the ocean: baseline, or as changed",
    "region": "part of the map",
    "columns": "water columns with at least one valid sample",
    "columns_without_data": "water columns without a valid sample (land, missing oxygen), left out",
    "viable_share": "share of the columns that have any viable water, by area on grids [1]",
    "viable_share_physiology_p05": "5 % quantile of viable_share, from the physiology's uncertainty [1]",
    "viable_share_physiology_p95": "95 % quantile of viable_share, from the physiology's uncertainty [1]",
    **{
        name.format(quantity): text.format(words)
        for quantity, words in (
            ("upper", "upper edge of the shallowest band, over columns with viable water"),
            ("lower", "lower edge of the deepest band, over columns with viable water"),
            ("thickness", "total thickness of viable water, over all columns, 0 where there is none"),
        )
        for name, text in (
            ("{}_m", "median (by area on grids) of the {} [m]"),
            ("{}_m_columns_p05", "5 % of the columns lie below this: {} [m]"),
            ("{}_m_columns_p95", "95 % of the columns lie below this: {} [m]"),
            ("{}_m_physiology_p05", "5 % quantile of the median, from the physiology's uncertainty: {} [m]"),
            ("{}_m_physiology_p95", "95 % quantile of the median, from the physiology's uncertainty: {} [m]"),
            ("{}_change_m", "median minus that of the baseline: {} [m]"),
            ("{}_change_percent", "the same in percent of the baseline: {} [%]"),
        )
    },
    "thickness_change_m_physiology_p05": "5 % quantile of thickness_change_m, the same animal in both oceans [m]",
    "thickness_change_m_physiology_p95": "95 % quantile of thickness_change_m, the same animal in both oceans [m]",
    "viable_volume_km3": "volume of viable water, mean over the times of the file; grids only [km3]",
    "viable_volume_km3_physiology_p05": "5 % quantile of the volume, from the physiology's uncertainty [km3]",
    "viable_volume_km3_physiology_p95": "95 % quantile of the volume, from the physiology's uncertainty [km3]",
    "viable_volume_change_percent": "volume against the baseline [%]",
}


# --- findings ----------------------------------------------------------------------------------------------------


def weighted_quantiles(values: np.ndarray, weights: np.ndarray, quantiles: np.ndarray | list[float]) -> np.ndarray:
    """Quantiles of weighted values along the last axis, NaN left out.

    Each value stands at the middle of its share of the total weight, with linear interpolation between (with equal
    weights the plotting positions of Hazen 1914, so that the median is the usual one).

    Parameters
    ----------
    values : numpy.ndarray
        Shape (..., n).
    weights : numpy.ndarray
        Shape (n,), positive.
    quantiles : sequence of float
        Shape (k,).

    Returns
    -------
    numpy.ndarray
        Shape (k, ...); NaN where all values are.
    """
    lead = values.shape[:-1]
    flat = values.reshape(math.prod(lead), values.shape[-1])
    result = np.full((len(quantiles), len(flat)), np.nan)
    for i, row in enumerate(flat):  # rows are draws or activities: few
        known = np.flatnonzero(~np.isnan(row))
        if known.size:
            order = known[np.lexsort((weights[known], row[known]))]  # weights too, so that no other order matters
            weight = weights[order]
            position = (np.cumsum(weight) - weight / 2) / weight.sum()
            result[:, i] = np.interp(quantiles, position, row[order])
    return result.reshape(len(quantiles), *lead)


def regional_findings(
    columns: xr.Dataset,
    totals: Mapping[str, xr.Dataset],
    drawn: Mapping[str, xr.Dataset] | None,
    regions: list[Region],
    species: str,
) -> pd.DataFrame:
    """Bring the columns of each region down to one row per activity, scenario and region.

    Parameters
    ----------
    columns : xarray.Dataset
        The water columns, for positions and areas.
    totals : mapping of str to xarray.Dataset
        Scenario name to `habitat.viability.column_totals`; the first is the baseline.
    drawn : mapping of str to xarray.Dataset, optional
        Scenario name to `habitat.viability.drawn_totals`; None where the physiology's uncertainty is not known.
    regions : list of Region
    species : str

    Returns
    -------
    pandas.DataFrame
        With the columns `FINDINGS_COLUMNS`.
    """
    area = column_areas(columns)
    first = next(iter(totals.values()))["thickness"].isel(activity=0, drop=True)
    times = first.sizes.get("time", 1)
    rows = []
    for region in regions:
        inside = region.contains(columns).broadcast_like(first).transpose(*first.dims).to_numpy().ravel()
        weight = np.ones(first.size) if area is None else area.broadcast_like(first).transpose(*first.dims).to_numpy()
        weight = weight.ravel()[inside]
        volume_weight = None if area is None else weight / times / METRES_PER_KM
        baseline: list[dict[str, np.ndarray]] = []
        for scenario, totals_here in totals.items():
            for i, activity in enumerate(totals_here["activity"].to_numpy()):
                centre = _summary(_inside(totals_here, i, inside), weight, volume_weight)
                draws = {} if drawn is None else _summary(_inside(drawn[scenario], i, inside), weight, volume_weight)
                if len(baseline) <= i:
                    baseline.append({"centre": centre, "draws": draws})
                row = {"species": species, "activity": float(activity), "scenario": scenario, "region": region.name}
                rows.append(row | _row(centre, draws, **baseline[i]))
    rows.sort(key=lambda row: row["activity"])  # stable: scenarios and regions keep the order of the study
    return pd.DataFrame(rows, columns=list(FINDINGS_COLUMNS))


def _inside(totals: xr.Dataset, activity: int, inside: np.ndarray) -> dict[str, np.ndarray]:
    """Edges and thickness of the columns in a region, shape (draws..., columns)."""
    here = totals.isel(activity=activity)
    extra = [dim for dim in here.dims if dim == "draw"]
    return {
        name: here[name].transpose(*extra, ...).to_numpy().reshape(*(here.sizes[dim] for dim in extra), -1)[..., inside]
        for name in EDGES
    }


def _summary(
    here: dict[str, np.ndarray], weight: np.ndarray, volume_weight: np.ndarray | None
) -> dict[str, np.ndarray]:
    """Regional values, each of shape (draws...): medians, ranges over columns, share and volume."""
    thickness = here["thickness"]
    known = np.isfinite(thickness)
    viable = np.isfinite(here["upper"])
    total = (known * weight).sum(-1)
    with np.errstate(invalid="ignore"):
        summary = {"viable_share": (viable * weight).sum(-1) / total}
    summary |= {"columns": known.sum(-1), "columns_without_data": (~known).sum(-1)}
    for name in EDGES:
        low, middle, high = weighted_quantiles(here[name].astype(float), weight, [0.05, 0.5, 0.95])
        summary |= {f"{name}_m": middle, f"{name}_m_columns_p05": low, f"{name}_m_columns_p95": high}
    if volume_weight is not None:
        summary["viable_volume_km3"] = (np.nan_to_num(thickness) * volume_weight).sum(-1)
    return summary


def _row(
    here: dict[str, np.ndarray],
    here_drawn: dict[str, np.ndarray],
    centre: dict[str, np.ndarray],
    draws: dict[str, np.ndarray],
) -> dict[str, float]:
    """One row of the findings: the values here, their change from the baseline's `centre`, and quantiles over draws."""
    row = {name: value.item() for name, value in here.items()}
    row["columns"], row["columns_without_data"] = int(row["columns"]), int(row["columns_without_data"])
    for name in EDGES:
        row[f"{name}_change_m"] = row[f"{name}_m"] - centre[f"{name}_m"].item()
        row[f"{name}_change_percent"] = _percent(row[f"{name}_change_m"], centre[f"{name}_m"].item())
    if "viable_volume_km3" in here:
        before = centre["viable_volume_km3"].item()
        row["viable_volume_change_percent"] = _percent(row["viable_volume_km3"] - before, before)
    if here_drawn:
        uncertain = {name: here_drawn[name] for name in here_drawn if name in _DRAWN}
        uncertain["thickness_change_m"] = here_drawn["thickness_m"] - draws["thickness_m"]
        for name, values in uncertain.items():
            known = values[np.isfinite(values)]
            low, high = np.quantile(known, [0.05, 0.95]) if known.size else (np.nan, np.nan)
            row |= {f"{name}_physiology_p05": low, f"{name}_physiology_p95": high}
    return row


_DRAWN = ("viable_share", "upper_m", "lower_m", "thickness_m", "viable_volume_km3")


def _percent(change: float, before: float) -> float:
    return 100.0 * change / before if before else np.nan


# --- the forms that people paste ---------------------------------------------------------------------------------


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
    return tabulate(_texts(table), headers=list(table.columns), tablefmt="github", disable_numparse=True) + "\n"


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
