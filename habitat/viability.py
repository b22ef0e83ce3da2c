"""Where the ocean meets the animal: from water columns and a species to bands, their uncertainty and column totals.

Water columns are the Dataset that `habitat.ocean.open_ocean` returns; any leading dimensions, `level`
last, lazy or not.
"""

from collections.abc import Callable, Sequence

import numpy as np
import pandas as pd
import xarray as xr
from scipy.special import ndtri

from habitat.bands import EDGE_KINDS, SURFACE_WITHIN, Bands, Samples, find_bands, gather, least_po2, totals
from habitat.seawater import po2_from_concentration
from habitat.species import Species

TAILS = (0.05, 0.95)
"""Chances at which the outer and the inner edges of a band are drawn [1]."""

COLUMNS_PER_BLOCK = 2**11
"""Columns worked on at a time, to bound memory."""

# Nodes and weights for the mean over the quantiles at which the water between two samples is viable in part.
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)
_NODES, _WEIGHTS = (_NODES + 1) / 2, _WEIGHTS / 2

SAME_CHANCE = 1e-9
"""Samples whose chances are this close become viable together [1]."""

# name: (unit, long name) of what is known of a whole column
QUANTITIES = {
    "upper": ("m", "depth of the upper edge of the shallowest viable band"),
    "lower": ("m", "depth of the lower edge of the deepest viable band"),
    "thickness": ("m", "total thickness of viable water"),
    "band_count": ("1", "number of viable bands"),
    "least_po2": ("kPa", "least oxygen partial pressure of the column"),
    "least_po2_depth": ("m", "depth of the least oxygen partial pressure"),
    "joins": ("1", "joins over missing samples in or at the edges of the bands"),
    "outside_temperature_range": ("1", "whether viable water lies outside the temperatures the animal was measured at"),
}
UNCERTAIN_QUANTITIES = {
    "upper_p05": ("m", "5 % quantile of the first upper edge, from the physiology's uncertainty"),
    "upper_p95": ("m", "95 % quantile of the first upper edge, from the physiology's uncertainty"),
    "lower_p05": ("m", "5 % quantile of the deepest lower edge, from the physiology's uncertainty"),
    "lower_p95": ("m", "95 % quantile of the deepest lower edge, from the physiology's uncertainty"),
    "mean_thickness": ("m", "mean thickness of viable water: the chance of viability integrated over depth"),
}
DRAWN_QUANTITIES = {name: QUANTITIES[name] for name in ("upper", "lower", "thickness")}

BAND_COLUMNS = (
    "species", "activity", "scenario", "cast", "latitude", "longitude", "time", "band", "upper_m", "lower_m",
    "thickness_m", "upper_edge", "lower_edge", "upper_m_p05", "upper_m_p95", "lower_m_p05", "lower_m_p95",
    "upper_m_per_kpa", "lower_m_per_kpa", "least_po2_kpa", "flags",
)  # fmt: skip


def oxygen_pressure(columns: xr.Dataset, *, hydrostatic: bool = True) -> xr.DataArray:
    """Oxygen partial pressure of water columns [kPa], see `habitat.seawater.po2_from_concentration`."""
    po2 = po2_from_concentration(
        columns["oxygen"], columns["temperature"], columns["salinity"], columns["pressure"], hydrostatic=hydrostatic
    )
    po2 = po2.transpose(*columns["oxygen"].dims)
    return po2.assign_attrs(units="kPa", long_name="oxygen partial pressure")


def chance_of_viability(
    columns: xr.Dataset, species: Species, activities: Sequence[float], *, hydrostatic: bool = True
) -> xr.DataArray:
    """Probability that each cell's oxygen margin is not negative [1], along a new leading dimension `activity`."""
    po2 = oxygen_pressure(columns, hydrostatic=hydrostatic)
    each = [species.chance(po2, columns["temperature"], activity) for activity in activities]
    chance = xr.concat(each, pd.Index(list(activities), name="activity", dtype=float))
    return chance.assign_attrs(units="1", long_name="chance of viability")


def column_totals(
    columns: xr.Dataset,
    species: Species,
    activities: Sequence[float],
    *,
    uncertainty: bool = False,
    hydrostatic: bool = True,
) -> xr.Dataset:
    """Bring each water column down to its first and deepest edge, thickness, number of bands and least PO2.

    Parameters
    ----------
    columns : xarray.Dataset
        Water columns.
    species : Species
    activities : sequence of float
        Activity factors [1].
    uncertainty : bool
        Whether to add the 5 and 95 % quantile edges and the mean thickness, all from the closed form.
    hydrostatic : bool
        Whether PO2 includes the hydrostatic term.

    Returns
    -------
    xarray.Dataset
        The variables of `QUANTITIES` (and `UNCERTAIN_QUANTITIES`), dimensions `activity` and those of the columns
        without `level`; NaN where a column has no valid sample; lazy when the columns are.
    """
    quantities = QUANTITIES | (UNCERTAIN_QUANTITIES if uncertainty else {})

    def work(samples: Samples) -> np.ndarray:
        return np.stack([_totals_at(samples, species, activity, uncertainty) for activity in activities])

    return _reduce(columns, work, {"activity": list(activities)}, quantities, hydrostatic)


def drawn_totals(
    columns: xr.Dataset, species: Species, activities: Sequence[float], *, count: int = 128, hydrostatic: bool = True
) -> xr.Dataset:
    """Edges and thickness of each column for quasi-random draws of the physiology.

    One draw holds for all columns, so that quantiles of anything made from many columns (a median, a volume) can be
    taken over the dimension `draw`.

    Parameters
    ----------
    columns, species, activities, hydrostatic
        As in `column_totals`.
    count : int
        Number of draws, a power of 2.
    """
    draws = species.draws(count)

    def work(samples: Samples) -> np.ndarray:
        results = np.empty((len(activities), count, samples.columns, len(DRAWN_QUANTITIES)))
        for i, draw in enumerate(draws):
            drawn = species.pcrit_of_draw(samples.temperature, draw)
            for j, activity in enumerate(activities):
                bands = find_bands(samples, samples.po2 - activity * drawn)
                results[j, i] = np.stack(totals(bands, samples.columns)[:3], axis=-1)
        return results

    extra = {"activity": list(activities), "draw": range(count)}
    return _reduce(columns, work, extra, DRAWN_QUANTITIES, hydrostatic, np.float32)  # many draws: half the memory


def band_table(
    columns: xr.Dataset,
    species: Species,
    activities: Sequence[float],
    *,
    scenario: str = "baseline",
    hydrostatic: bool = True,
) -> pd.DataFrame:
    """List every viable band, one row each; a column without one has a row with band = 0 and no edges.

    `least_po2_kpa` is that of the whole column. `flags` holds words separated by ``;``: ``no-valid-sample``,
    ``joined:N`` (joins over missing samples), ``outside-temperature-range``, and where a quantile edge does not exist
    because at that quantile the band ``merges-at-p05`` with a neighbour, ``splits-at-p95`` or ``vanishes-at-p95``.

    Returns
    -------
    pandas.DataFrame
        With the columns `BAND_COLUMNS`; rows in the order activity, column, depth.
    """
    names = [dim for dim in columns["oxygen"].dims if dim != "level"]
    arrays = xr.broadcast(*_kernel_arrays(columns), exclude=["level"])
    samples = _samples(*_as_rows(*(array.to_numpy() for array in arrays)), hydrostatic)
    places = _places(columns, names)
    tables = [_bands_at(samples, species, activity).join(places, on="column") for activity in activities]
    table = pd.concat(tables, ignore_index=True).assign(species=species.name, scenario=scenario)
    return table[list(BAND_COLUMNS)]


# --- from columns to the kernel and back -------------------------------------------------------------------------


def _kernel_arrays(columns: xr.Dataset) -> list[xr.DataArray]:
    """Oxygen, temperature, salinity, pressure and depth, with `level` last, and the seabed.

    Pressures, depths and seabed that many columns share are not repeated here: that would fill the memory which lazy
    columns save.
    """
    dims = columns["oxygen"].dims
    water = [columns[name].transpose(*dims) for name in ("oxygen", "temperature", "salinity")]
    seabed = columns["seabed_depth"] if "seabed_depth" in columns else xr.DataArray(np.nan)
    return [*water, columns["pressure"], columns["depth"], seabed]


def _as_rows(oxygen: np.ndarray, *others: np.ndarray) -> list[np.ndarray]:
    """Lay the kernel's arrays out as (columns, levels), and the last one, the seabed, as (columns,)."""
    *fields, seabed = others
    rows = [np.broadcast_to(a, oxygen.shape).reshape(-1, oxygen.shape[-1]) for a in (oxygen, *fields)]
    return [*rows, np.broadcast_to(seabed, oxygen.shape[:-1]).reshape(-1)]


def _samples(
    oxygen: np.ndarray,
    temperature: np.ndarray,
    salinity: np.ndarray,
    pressure: np.ndarray,
    depth: np.ndarray,
    seabed: np.ndarray,
    hydrostatic: bool,
) -> Samples:
    po2 = po2_from_concentration(oxygen, temperature, salinity, pressure, hydrostatic=hydrostatic)
    return gather(depth, po2, temperature, seabed)


def _reduce(
    columns: xr.Dataset,
    work: Callable[[Samples], np.ndarray],
    extra: dict[str, Sequence[float]],
    quantities: dict[str, tuple[str, str]],
    hydrostatic: bool,
    dtype: type = float,
) -> xr.Dataset:
    """Apply `work` to blocks of columns; it returns (*extra, columns of the block, quantities)."""
    shape = tuple(len(values) for values in extra.values())

    def kernel(*arrays: np.ndarray) -> np.ndarray:
        lead, rows = arrays[0].shape[:-1], _as_rows(*arrays)
        out = np.full((*shape, len(rows[0]), len(quantities)), np.nan, dtype=dtype)
        # PO2 is computed here and not on the whole arrays, so that a block stays in the processor's cache, and only
        # for columns that have oxygen: on 44 million cells, a third of them dry, that took 40 % off its time.
        wet = np.flatnonzero(np.isfinite(rows[0]).any(axis=1))
        for i in range(0, len(wet), COLUMNS_PER_BLOCK):
            block = wet[i : i + COLUMNS_PER_BLOCK]
            samples = _samples(*(array[block] for array in rows), hydrostatic)
            done = work(samples)
            done[..., np.bincount(samples.column, minlength=samples.columns) == 0, :] = np.nan
            out[..., block, :] = done
        return np.moveaxis(out.reshape(*shape, *lead, len(quantities)), range(len(shape)), range(-len(shape) - 1, -1))

    result = xr.apply_ufunc(
        kernel,
        *_kernel_arrays(columns),
        input_core_dims=[["level"]] * 5 + [[]],
        output_core_dims=[[*extra, "quantity"]],
        dask="parallelized",
        dask_gufunc_kwargs={
            "output_sizes": dict(zip(extra, shape, strict=True)) | {"quantity": len(quantities)},
            "allow_rechunk": True,
        },
        output_dtypes=[dtype],
    )
    result = result.assign_coords({name: list(values) for name, values in extra.items()})
    lead_dims = [dim for dim in columns["oxygen"].dims if dim != "level"]
    variables = {}
    for i, (name, (unit, long_name)) in enumerate(quantities.items()):
        values = result.isel(quantity=i).transpose(*extra, *lead_dims)
        variables[name] = values.assign_attrs(units=unit, long_name=long_name)
    return xr.Dataset(variables)


def _places(columns: xr.Dataset, names: Sequence[str]) -> pd.DataFrame:
    """Label, position and time of each column, in the order of the kernel's columns."""
    lead = columns["oxygen"].isel(level=0, drop=True)
    if names == ["cast"]:
        frame = pd.DataFrame({"cast": columns["cast"].values.astype(str)})
    else:
        sizes = tuple(lead.sizes[name] for name in names)
        frame = pd.DataFrame({"cast": [",".join(map(str, place)) for place in np.ndindex(*sizes)]})
    for name in ("latitude", "longitude", "time"):
        if name in columns.coords:
            frame[name] = columns[name].broadcast_like(lead).transpose(*lead.dims).values.ravel()
        else:
            frame[name] = None
    return frame


# --- what is computed for one activity ---------------------------------------------------------------------------


def _margin(samples: Samples, species: Species, activity: float, quantile: float = 0.5) -> np.ndarray:
    return samples.po2 - activity * species.pcrit(samples.temperature, quantile)


def _totals_at(samples: Samples, species: Species, activity: float, uncertainty: bool) -> np.ndarray:
    """Values of `QUANTITIES` (and `UNCERTAIN_QUANTITIES`), shape (columns, quantities)."""
    bands = find_bands(samples, _margin(samples, species, activity))
    joins = np.bincount(bands.column, bands.joins, minlength=samples.columns)
    outside = np.bincount(bands.column, _outside_range(samples, bands, species), minlength=samples.columns) > 0
    values = [*totals(bands, samples.columns), *least_po2(samples), joins, outside]
    if uncertainty:
        values += _uncertain_totals(samples, species, activity)
    return np.stack(values, axis=-1)


def _uncertain_totals(samples: Samples, species: Species, activity: float) -> list[np.ndarray]:
    def totals_of(quantile: float) -> tuple[np.ndarray, ...]:
        return totals(find_bands(samples, _margin(samples, species, activity, quantile)), samples.columns)

    # A low Pcrit makes the band wide: its upper edge shallow, its lower edge deep.
    (wide_upper, wide_lower, *_), (narrow_upper, narrow_lower, *_) = (totals_of(quantile) for quantile in TAILS)
    return [wide_upper, narrow_upper, narrow_lower, wide_lower, _mean_thickness(samples, species, activity)]


def _mean_thickness(samples: Samples, species: Species, activity: float) -> np.ndarray:
    """Chance of viability integrated over depth [m], one a column.

    At every depth the chance is the share of quantiles viable there, so this is the mean over quantiles of the
    thickness, with the edge rules of the bands. At quantiles up to the lesser chance of two joined samples the water
    between them is viable, up to the greater one it is in part, as far as the margin's zero.
    """
    po2, depth = samples.po2, samples.depth
    needed, deviation = activity * species.pcrit(samples.temperature), species.log_pcrit_sd(samples.temperature)
    chance = species.chance(po2, samples.temperature, activity)
    joined = np.flatnonzero(samples.joined)
    least = np.minimum(chance[joined], chance[joined + 1])
    span = np.maximum(chance[joined], chance[joined + 1]) - least
    share = least.copy()
    partly = np.flatnonzero(span > SAME_CHANCE)
    ends = np.stack([joined[partly], joined[partly] + 1])
    for node, weight in zip(_NODES, _WEIGHTS, strict=True):
        deviates = ndtri(least[partly] + node * span[partly])
        margin = po2[ends] - needed[ends] * np.exp(deviates * deviation[ends])
        viable, lacking = margin.max(axis=0), margin.min(axis=0)
        share[partly] += weight * span[partly] * viable / (viable - lacking)
    beyond = np.where(samples.is_last, samples.bottom[samples.column] - depth, 0.0)
    beyond += np.where(samples.is_first & (depth <= SURFACE_WITHIN), depth, 0.0)
    between = share * (depth[joined + 1] - depth[joined])
    columns = np.concatenate([samples.column[joined], samples.column])
    return np.bincount(columns, np.concatenate([between, chance * beyond]), minlength=samples.columns)


def _outside_range(samples: Samples, bands: Bands, species: Species) -> np.ndarray:
    """Whether each band holds a sample outside the temperatures at which the animal was measured."""
    if species.temperature_range is None:
        return np.zeros(len(bands.column), dtype=bool)
    lowest, highest = species.temperature_range
    outside = (samples.temperature < lowest) | (samples.temperature > highest)
    counted = np.concatenate([[0], np.cumsum(outside)])
    return counted[bands.end + 1] > counted[bands.start]


def _bands_at(samples: Samples, species: Species, activity: float) -> pd.DataFrame:
    """Band table for one activity, with the kernel's column number instead of the place."""
    bands = find_bands(samples, _margin(samples, species, activity))
    kinds = np.array(EDGE_KINDS, dtype=object)
    table = pd.DataFrame(
        {
            "column": bands.column,
            "upper_m": bands.upper,
            "lower_m": bands.lower,
            "thickness_m": bands.lower - bands.upper,
            "upper_edge": kinds[bands.upper_kind],
            "lower_edge": kinds[bands.lower_kind],
            "upper_m_per_kpa": bands.upper_steepness,
            "lower_m_per_kpa": bands.lower_steepness,
        }
    )
    quantiles, flags = _quantile_edges(samples, species, activity, bands)
    table = table.assign(**quantiles)
    flags["outside-temperature-range"] = _outside_range(samples, bands, species)
    words = [[word for word, raised in flags.items() if raised[i]] for i in range(len(table))]
    joined = [[f"joined:{count}"] if count else [] for count in bands.joins]
    table["flags"] = [";".join(first + rest) for first, rest in zip(joined, words, strict=True)]
    table["band"] = table.groupby("column").cumcount() + 1
    return _with_empty_columns(table, samples).assign(activity=float(activity))


def _with_empty_columns(table: pd.DataFrame, samples: Samples) -> pd.DataFrame:
    """Add a row with band = 0 for each column without a band, so that no column is lost."""
    empty = np.setdiff1d(np.arange(samples.columns), table["column"])
    no_sample = np.bincount(samples.column, minlength=samples.columns)[empty] == 0
    rows = pd.DataFrame({"column": empty, "band": 0, "flags": np.where(no_sample, "no-valid-sample", "")})
    table = table if rows.empty else rows if table.empty else pd.concat([table, rows], ignore_index=True)
    table = table.reindex(columns=[*dict.fromkeys([*table.columns, *BAND_COLUMNS[8:19], "column"])])
    table = table.sort_values(["column", "band"], ignore_index=True)
    table["least_po2_kpa"] = least_po2(samples)[0][table["column"].to_numpy(dtype=int)]
    return table


def _quantile_edges(
    samples: Samples, species: Species, activity: float, bands: Bands
) -> tuple[dict[str, np.ndarray], dict[str, np.ndarray]]:
    """5 and 95 % quantiles of the edges of each band, and flags where such an edge does not exist.

    Where the physiology is more favourable each band lies inside one wider band; where it is less so it holds none, one
    or several narrower ones. Their edges are the quantiles.
    """
    count = len(bands.column)
    edges = {name: np.full(count, np.nan) for name in ("upper_m_p05", "upper_m_p95", "lower_m_p05", "lower_m_p95")}
    flags = {word: np.zeros(count, dtype=bool) for word in ("merges-at-p05", "splits-at-p95", "vanishes-at-p95")}
    if species.covariance is None:
        return edges, flags
    wide, narrow = (find_bands(samples, _margin(samples, species, activity, quantile)) for quantile in TAILS)
    around = np.searchsorted(wide.start, bands.start, side="right") - 1
    same_above, same_below = np.diff(around, prepend=-1) == 0, np.diff(around, append=-1) == 0
    edges["upper_m_p05"] = np.where(same_above, np.nan, wide.upper[around])
    edges["lower_m_p95"] = np.where(same_below, np.nan, wide.lower[around])
    parent = np.searchsorted(bands.start, narrow.start, side="right") - 1
    inside = np.bincount(parent, minlength=count)
    edges["upper_m_p95"][parent[::-1]] = narrow.upper[::-1]
    edges["lower_m_p05"][parent] = narrow.lower
    flags = {"merges-at-p05": same_above | same_below, "splits-at-p95": inside > 1, "vanishes-at-p95": inside == 0}
    return edges, flags
