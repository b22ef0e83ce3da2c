"""Viable bands: the depths between which the water's oxygen partial pressure meets the animal's need.

The oxygen margin is ``m = PO2 - f Pcrit(T)``, f the activity factor; a sample is viable where m >= 0. Between two
adjacent valid samples m is linear in depth, so an edge lies at ``z0 + (z1 - z0) m0 / (m0 - m1)``.

This is the numeric kernel, on plain arrays: the valid samples of many columns are laid end to end, so that every rule
is one vector operation and nothing loops over columns. `habitat.viability` brings water columns and species to it.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

EDGE_KINDS = ("crossing", "surface", "seabed", "shallowest sample", "deepest sample", "gap")
CROSSING, SURFACE, SEABED, SHALLOWEST, DEEPEST, GAP = range(6)

SURFACE_WITHIN = 10.0
"""A shallowest valid sample at this depth or above stands for the water up to the surface [m]."""

JOIN_WITHIN = 200.0
"""Valid samples on either side of missing ones are joined up to this distance [m]."""

SEABED_WITHIN = 50.0
"""A seabed this far below the deepest valid sample, or inside its cell, ends the band [m]."""


@dataclass(frozen=True)
class Samples:
    """The valid samples of a block of columns, laid end to end: column by column, downward.

    Attributes
    ----------
    columns : int
        Number of columns in the block, those without a valid sample included.
    column : numpy.ndarray of int
        Column of each sample; all other arrays have this shape, unless said otherwise.
    depth, po2, temperature : numpy.ndarray
        [m], [kPa], [degC]
    joined : numpy.ndarray of bool
        Whether the sample is joined to the next one; never across columns.
    skips : numpy.ndarray of bool
        Whether that join passes over missing samples.
    bottom : numpy.ndarray
        Depth at which a band that includes the deepest valid sample ends [m], one a column.
    bottom_kind : numpy.ndarray of int
        SEABED or DEEPEST, one a column.
    """

    columns: int
    column: np.ndarray
    depth: np.ndarray
    po2: np.ndarray
    temperature: np.ndarray
    joined: np.ndarray
    skips: np.ndarray
    bottom: np.ndarray
    bottom_kind: np.ndarray

    @cached_property
    def first(self) -> np.ndarray:
        """Positions of the shallowest valid sample of each column that has one."""
        return np.flatnonzero(self.is_first)

    @cached_property
    def is_first(self) -> np.ndarray:
        """Whether each sample is the shallowest valid one of its column."""
        return np.diff(self.column, prepend=-1) != 0

    @cached_property
    def is_last(self) -> np.ndarray:
        """Whether each sample is the deepest valid one of its column."""
        return np.diff(self.column, append=self.columns) != 0

    @cached_property
    def skipped(self) -> np.ndarray:
        """Number of joins over missing samples before each sample, in the whole block; one entry more at the end."""
        return np.concatenate([[0], np.cumsum(self.skips)])

    @cached_property
    def joined_above(self) -> np.ndarray:
        """Whether each sample is joined to the one before it."""
        return np.concatenate([[False], self.joined[:-1]]) if self.joined.size else self.joined


@dataclass(frozen=True)
class Bands:
    """Viable bands of a block of columns, column by column and downward; every array has one entry a band.

    Attributes
    ----------
    column : numpy.ndarray of int
    start, end : numpy.ndarray of int
        Positions in `Samples` of the shallowest and the deepest viable sample.
    upper, lower : numpy.ndarray
        Edges [m].
    upper_kind, lower_kind : numpy.ndarray of int
        Places in `EDGE_KINDS`.
    upper_steepness, lower_steepness : numpy.ndarray
        How far the edge moves with the margin, |dz/dm| [m/kPa]: 0 at surface and seabed, which do not move; NaN where
        the data end, since nothing is known beyond.
    joins : numpy.ndarray of int
        Joins over missing samples inside the band or across its edges.
    """

    column: np.ndarray
    start: np.ndarray
    end: np.ndarray
    upper: np.ndarray
    lower: np.ndarray
    upper_kind: np.ndarray
    lower_kind: np.ndarray
    upper_steepness: np.ndarray
    lower_steepness: np.ndarray
    joins: np.ndarray


def gather(depth: np.ndarray, po2: np.ndarray, temperature: np.ndarray, seabed: np.ndarray) -> Samples:
    """Lay the valid samples of many columns end to end.

    Levels may come in any order: each column is sorted by depth, and samples at one depth are averaged, so the order in
    the input does not matter. Where the seabed cuts the cell of the deepest valid sample above the sample's own depth,
    the sample stands at the seabed.

    Parameters
    ----------
    depth, po2, temperature : numpy.ndarray
        Shape (columns, levels) [m, kPa, degC]; NaN is missing.
    seabed : numpy.ndarray
        Shape (columns,) [m]; NaN where unknown.
    """
    depth, po2, temperature = _sorted_by_depth(depth, po2, temperature)
    new_depth = np.ones(depth.shape, dtype=bool)
    new_depth[:, 1:] = depth[:, 1:] != depth[:, :-1]  # a missing depth is new, since NaN differs from all
    rank = np.cumsum(new_depth, axis=1)
    valid = np.isfinite(depth) & np.isfinite(po2) & np.isfinite(temperature)
    column, _ = np.nonzero(valid)
    z, p, t, r = depth[valid], po2[valid], temperature[valid], rank[valid]
    repeated = (np.diff(column, append=-1) == 0) & (np.diff(r, append=-1) == 0)
    if repeated.any():
        group = np.cumsum(~np.concatenate([[False], repeated[:-1]])) - 1
        size = np.bincount(group)
        p, t = np.bincount(group, p) / size, np.bincount(group, t) / size
        last = ~repeated
        column, z, r = column[last], z[last], r[last]
    same = np.diff(column, append=-1) == 0
    next_to = same & (np.diff(r, append=-1) == 1)
    joined = next_to | (same & (np.diff(z, append=np.inf) <= JOIN_WITHIN))
    bottom, bottom_kind = _bottoms(depth, column[~same], z[~same], seabed)
    z[~same] = np.minimum(z[~same], bottom[column[~same]])  # nothing lies beneath the seabed
    return Samples(len(depth), column, z, p, t, joined, joined & ~next_to, bottom, bottom_kind)


def _sorted_by_depth(depth: np.ndarray, *fields: np.ndarray) -> list[np.ndarray]:
    """Sort each row by depth, missing depths last; rows already in order are not touched."""
    filled = np.where(np.isnan(depth), np.inf, depth)
    if not (filled[:, 1:] < filled[:, :-1]).any():
        return [depth, *fields]
    order = np.argsort(depth, axis=1, kind="stable")
    return [np.take_along_axis(values, order, axis=1) for values in (depth, *fields)]


def _bottoms(
    depth: np.ndarray, column: np.ndarray, deepest: np.ndarray, seabed: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Where a band that includes the deepest valid sample of its column ends, and whether that is the seabed.

    The sample's cell reaches half-way to the neighbouring depths of the input, valid or not; where there is no
    neighbour on one side, the cell is as thick there as on the other.
    """
    depths, z = depth[column], deepest[:, None]
    upward = (deepest - np.max(depths, axis=1, initial=-np.inf, where=depths < z)) / 2
    downward = (np.min(depths, axis=1, initial=np.inf, where=depths > z) - deepest) / 2
    reach_up, reach_down = (
        np.nan_to_num(np.where(np.isinf(reach), other, reach), posinf=0.0)
        for reach, other in ((upward, downward), (downward, upward))
    )
    floor = seabed[column]
    on_seabed = (floor >= deepest - reach_up) & (floor <= deepest + np.maximum(reach_down, SEABED_WITHIN))
    bottom, kind = np.full(len(depth), np.nan), np.full(len(depth), DEEPEST)
    bottom[column] = np.where(on_seabed, floor, deepest)
    kind[column] = np.where(on_seabed, SEABED, DEEPEST)
    return bottom, kind


def find_bands(samples: Samples, margin: np.ndarray) -> Bands:
    """Find all viable bands of a block of columns.

    Parameters
    ----------
    samples : Samples
    margin : numpy.ndarray
        Oxygen margin of each sample [kPa].
    """
    viable = margin >= 0
    viable_above = np.concatenate([[False], viable[:-1]]) if viable.size else viable
    viable_below = np.concatenate([viable[1:], [False]]) if viable.size else viable
    start = np.flatnonzero(viable & ~(samples.joined_above & viable_above))
    end = np.flatnonzero(viable & ~(samples.joined & viable_below))
    column = samples.column[start]
    from_above, to_below = samples.joined_above[start], samples.joined[end]

    upper, upper_steepness = samples.depth[start], np.full(len(start), np.nan)
    upper_kind = np.where(samples.is_first[start], SHALLOWEST, GAP)
    at_surface = (upper_kind == SHALLOWEST) & (upper <= SURFACE_WITHIN)
    upper[at_surface], upper_kind[at_surface], upper_steepness[at_surface] = 0.0, SURFACE, 0.0
    crossing, slope = _crossing(samples.depth, margin, start[from_above], -1)
    upper[from_above], upper_kind[from_above], upper_steepness[from_above] = crossing, CROSSING, slope

    lower, lower_steepness = samples.depth[end], np.full(len(end), np.nan)
    lower_kind = np.full(len(end), GAP)
    ends = samples.is_last[end]
    lower_kind[ends] = samples.bottom_kind[column[ends]]
    lower[ends] = samples.bottom[column[ends]]
    lower_steepness[lower_kind == SEABED] = 0.0
    crossing, slope = _crossing(samples.depth, margin, end[to_below], +1)
    lower[to_below], lower_kind[to_below], lower_steepness[to_below] = crossing, CROSSING, slope

    joins = samples.skipped[end + to_below] - samples.skipped[start - from_above]
    return Bands(column, start, end, upper, lower, upper_kind, lower_kind, upper_steepness, lower_steepness, joins)


def _crossing(depth: np.ndarray, margin: np.ndarray, viable: np.ndarray, step: int) -> tuple[np.ndarray, np.ndarray]:
    """Depth at which the margin crosses zero between each of the samples `viable` and the next in direction `step`.

    Also gives |dz/dm| there. Counted from the viable sample, a margin of exactly 0 puts the edge exactly on it, and the
    edges of a band never change places by rounding.
    """
    z0, z1, m0, m1 = depth[viable], depth[viable + step], margin[viable], margin[viable + step]
    return z0 + (z1 - z0) * (m0 / (m0 - m1)), np.abs((z1 - z0) / (m1 - m0))


def totals(bands: Bands, columns: int) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """First upper edge, deepest lower edge, total thickness [m] and number of bands of each column."""
    upper, lower = np.full(columns, np.nan), np.full(columns, np.nan)
    upper[bands.column[::-1]] = bands.upper[::-1]  # the last one written stays: the shallowest
    lower[bands.column] = bands.lower
    thickness = np.bincount(bands.column, bands.lower - bands.upper, minlength=columns)
    return upper, lower, thickness, np.bincount(bands.column, minlength=columns)


def least_po2(samples: Samples) -> tuple[np.ndarray, np.ndarray]:
    """Least PO2 of each column [kPa] and its depth [m], the shallower one of equals; NaN without a valid sample."""
    least, where = np.full(samples.columns, np.nan), np.full(samples.columns, np.nan)
    if samples.first.size:
        least[samples.column[samples.first]] = np.minimum.reduceat(samples.po2, samples.first)
        lowest = np.flatnonzero(samples.po2 == least[samples.column])[::-1]
        where[samples.column[lowest]] = samples.depth[lowest]
    return least, where
