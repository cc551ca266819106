# SPDX-License-Identifier: MIT
"""Gauges that changed, side by side: the regions of a map, the strongest first."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

BESIDE = 1.6
"""Gauges nearer than this many spacings are neighbours: their places vary by a tenth about an even grid, whose
diagonal is 1.4 spacings."""
FEWEST = 3
"""Gauges side by side that make a region; the few false discoveries that are allowed stand alone or in pairs."""
NORMAL_95 = 1.96
"""Half width of a 95 % interval in standard errors of a normal distribution."""
NONE = -1
"""Stands for a gauge where there is none."""


@dataclass(frozen=True, slots=True)
class Region:
    """Gauges that changed and touch one another.

    Parameters
    ----------
    gauges : ndarray of shape (m,), intp
        Which ones.
    area : float
        Surface that they stand for, a square of one spacing each [m^2].
    highest, lowest : ndarray of shape (k,), intp
        For each quantity the gauge with the largest value above zero and that with the smallest one below it, among
        those whose value exceeds its own 95 % interval; -1 where there is none.
    strength : float
        Largest ratio of a value to its standard error, over gauges and quantities [1].
    """

    gauges: NDArray[np.intp]
    area: float
    highest: NDArray[np.intp]
    lowest: NDArray[np.intp]
    strength: float


def find_regions(
    position: FloatArray,
    discovery: BoolArray,
    values: FloatArray,
    sd: FloatArray,
    *,
    spacing: float,
    beside: float = BESIDE,
    fewest: int = FEWEST,
) -> tuple[tuple[Region, ...], NDArray[np.intp]]:
    """Group the gauges that changed: single linkage over a distance.

    Parameters
    ----------
    position : ndarray of shape (g, 3)
        Places of the gauges [m].
    discovery : ndarray of shape (g,), bool
        Which gauges changed.
    values, sd : ndarray of shape (g, k)
        Quantities and their standard errors, each in a unit of its own; NaN where not observable.
    spacing : float
        Gauge spacing [m].
    beside : float
        Distance below which two gauges are neighbours [gauge spacings].
    fewest : int
        Gauges that make a region.

    Returns
    -------
    regions : tuple of Region
        By falling strength.
    isolated : ndarray of shape (i,), intp
        Gauges that changed and belong to none of them.
    """
    rows = np.flatnonzero(discovery)
    group = _groups(position[rows], beside * spacing)
    members = [rows[group == each] for each in np.unique(group)]
    found = [_region(each, values, sd, spacing) for each in members if len(each) >= fewest]
    alone = [each for each in members if len(each) < fewest]
    isolated = np.sort(np.concatenate(alone)) if alone else np.empty(0, np.intp)
    return tuple(sorted(found, key=lambda region: -region.strength)), isolated


def _groups(position: FloatArray, reach: float) -> NDArray[np.intp]:
    """Number the groups of places (m, 3) that are linked by steps below `reach` [m]."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    count = len(position)
    if not count:
        return np.empty(0, np.intp)
    first, second = cKDTree(position).query_pairs(reach, output_type="ndarray").T
    links = coo_array((np.ones(len(first)), (first, second)), shape=(count, count))
    return np.asarray(connected_components(links, directed=False)[1], np.intp)


def _region(gauges: NDArray[np.intp], values: FloatArray, sd: FloatArray, spacing: float) -> Region:
    value, error = values[gauges], sd[gauges]
    known = np.isfinite(value) & np.isfinite(error) & (error > 0)
    ratio = np.where(known, np.abs(value) / np.where(known, error, 1.0), 0.0)
    clear = ratio > NORMAL_95
    ends = []
    for side in (1.0, -1.0):
        size = np.where(clear & (side * value > 0), side * value, 0.0)
        ends.append(np.where((size > 0).any(axis=0), gauges[size.argmax(axis=0)], NONE))
    return Region(gauges, len(gauges) * spacing**2, ends[0], ends[1], float(ratio.max()))
