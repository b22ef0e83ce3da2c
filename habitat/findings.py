"""Findings for the regions of a report.

Two kinds of spread stand side by side and must not be mixed up: ``..._columns_p05`` and ``_p95`` are the range *over
the columns* of a region (how different its places are); ``..._physiology_p05`` and ``_p95`` are what the animal's
trials leave uncertain about the regional value itself.
"""

import math
from collections.abc import Mapping, Sequence

import numpy as np
import pandas as pd
import xarray as xr

from habitat.regions import Region, column_areas

METRES_PER_KM = 1000.0

EDGES = ("upper", "lower", "thickness")

FINDINGS_COLUMNS = {
    "species": "name of the animal",
    "activity": "activity factor: multiple of the resting rate that must be sustained [1]",
    "scenario": "the ocean: baseline, or as changed",
    "region": "part of the map",
    "columns": "water columns with at least one valid sample; on grids each time counts",
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


def weighted_quantiles(values: np.ndarray, weights: np.ndarray, quantiles: np.ndarray | list[float]) -> np.ndarray:
    """Quantiles of weighted values along the last axis, NaN left out.

    Each value stands at the middle of its share of the total weight, with linear interpolation between (with equal
    weights the plotting positions of Hazen 1914, so that the median is the usual one). Equal values share their weight
    evenly, so that the order of the input does not matter.

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
            order = known[np.argsort(row[known])]
            ordered = row[order].astype(float)
            first = np.flatnonzero(np.diff(ordered, prepend=np.nan) != 0)  # of each run of equal values
            weight = np.add.reduceat(weights[order], first)
            each = weight / np.diff(first, append=ordered.size)
            total = np.cumsum(weight)
            position = np.stack([total - weight + each / 2, total - each / 2], axis=1).ravel() / total[-1]
            result[:, i] = np.interp(quantiles, position, np.repeat(ordered[first], 2))
    return result.reshape(len(quantiles), *lead)


RegionalValues = Mapping[tuple[str, float], Mapping[str, np.ndarray]]
"""Region and activity to the values of that region, each of shape (draws...)."""


def regional_values(columns: xr.Dataset, totals: xr.Dataset, regions: Sequence[Region]) -> RegionalValues:
    """Bring the columns of each region down to medians, ranges, shares and volumes.

    Parameters
    ----------
    columns : xarray.Dataset
        The water columns, for positions and areas.
    totals : xarray.Dataset
        `habitat.viability.column_totals`, or `habitat.viability.drawn_totals`, whose draws are kept.
    regions : sequence of Region

    Returns
    -------
    dict
        Region and activity to the values of that region; volumes on grids only, the mean over the times of the file.
    """
    first = totals["thickness"].isel({dim: 0 for dim in ("activity", "draw") if dim in totals.dims}, drop=True)
    area = column_areas(columns)
    weights = xr.ones_like(first, dtype=float) if area is None else area.broadcast_like(first).transpose(*first.dims)
    values = {}
    for region in regions:
        inside = region.contains(columns).broadcast_like(first).transpose(*first.dims).to_numpy().ravel()
        weight = weights.to_numpy().ravel()[inside]
        volume_weight = None if area is None else weight / first.sizes.get("time", 1) / METRES_PER_KM
        for i, activity in enumerate(totals["activity"].to_numpy()):
            here = _inside(totals.isel(activity=i), inside)
            values[region.name, float(activity)] = _summary(here, weight, volume_weight)
    return values


def findings_table(
    values: Mapping[str, RegionalValues], drawn: Mapping[str, RegionalValues] | None, species: str
) -> pd.DataFrame:
    """Lay regional values out with one row per activity, scenario and region, and their change from the baseline.

    Parameters
    ----------
    values : mapping of str to RegionalValues
        Scenario name to `regional_values` of the column totals; the first is the baseline.
    drawn : mapping of str to RegionalValues, optional
        The same of the drawn totals; None where the physiology's uncertainty is not known.
    species : str

    Returns
    -------
    pandas.DataFrame
        With the columns `FINDINGS_COLUMNS`.
    """
    baseline = next(iter(values))
    rows = []
    for scenario, here in values.items():
        for place, centre in here.items():
            row = dict(zip(("region", "activity"), place, strict=True)) | {"species": species, "scenario": scenario}
            row |= _row(centre, values[baseline][place])
            if drawn is not None:
                row |= _physiology(drawn[scenario][place], drawn[baseline][place])
            rows.append(row)
    order = [region for region, _ in values[baseline]]
    rows.sort(key=lambda row: (row["activity"], order.index(row["region"])))  # stable: scenarios keep their order
    return pd.DataFrame(rows, columns=list(FINDINGS_COLUMNS))


def _inside(totals: xr.Dataset, inside: np.ndarray) -> dict[str, np.ndarray]:
    """Edges and thickness of the columns in a region, shape (draws..., columns)."""
    dims = sorted(totals["thickness"].dims, key=lambda dim: dim != "draw")  # draws first, the others as they are
    shape = (*(totals.sizes[dim] for dim in dims if dim == "draw"), inside.size)
    return {name: totals[name].transpose(*dims).to_numpy().reshape(shape)[..., inside] for name in EDGES}


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
        low, middle, high = weighted_quantiles(here[name], weight, [0.05, 0.5, 0.95])
        summary |= {f"{name}_m": middle, f"{name}_m_columns_p05": low, f"{name}_m_columns_p95": high}
    if volume_weight is not None:
        summary["viable_volume_km3"] = (np.nan_to_num(thickness) * volume_weight).sum(-1)
    return summary


def _row(here: Mapping[str, np.ndarray], baseline: Mapping[str, np.ndarray]) -> dict[str, float]:
    """Values of a row without those of the physiology's uncertainty."""
    row = {name: value.item() for name, value in here.items()}
    before = {name: value.item() for name, value in baseline.items()}
    for name in EDGES:
        row[f"{name}_change_m"] = row[f"{name}_m"] - before[f"{name}_m"]
        row[f"{name}_change_percent"] = _percent(row[f"{name}_change_m"], before[f"{name}_m"])
    if "viable_volume_km3" in row:
        change = row["viable_volume_km3"] - before["viable_volume_km3"]
        row["viable_volume_change_percent"] = _percent(change, before["viable_volume_km3"])
    return row


def _physiology(drawn: Mapping[str, np.ndarray], baseline: Mapping[str, np.ndarray]) -> dict[str, float]:
    """5 and 95 % quantiles over the draws; a draw is the same animal here and in the baseline."""
    uncertain = {name: values for name, values in drawn.items() if name in _UNCERTAIN}
    uncertain["thickness_change_m"] = drawn["thickness_m"] - baseline["thickness_m"]
    row = {}
    for name, values in uncertain.items():
        known = values[np.isfinite(values)]
        low, high = np.quantile(known, [0.05, 0.95]) if known.size else (np.nan, np.nan)
        row |= {f"{name}_physiology_p05": low, f"{name}_physiology_p95": high}
    return row


_UNCERTAIN = ("viable_share", "upper_m", "lower_m", "thickness_m", "viable_volume_km3")


def _percent(change: float, before: float) -> float:
    return 100.0 * change / before if before else np.nan
