# SPDX-License-Identifier: MIT
"""Clusters of small p-values on the map and the p-value of each, with its neighbours' dependence counted.

Overlapping gauges share points, so small p-values come side by side even where nothing changed. Maps without change are
simulated on the same gauges, with the correlation that the p-values of this map show; a cluster is judged by its mass
against the clusters of those maps, and false discoveries are controlled over clusters (topological inference, Chumbley
et al. 2010; cluster mass after Bullmore et al. 1999).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.strain.regions import BESIDE
from scanstrain.strain.significance import benjamini_hochberg

if TYPE_CHECKING:
    from scipy.sparse import csr_array

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

FORMING = 0.01
"""p-value below which gauges form clusters [1]: low enough that clusters of chance are small, and they stay frequent
enough that simulation knows how large they get."""
SIMULATED = 60_000
"""Gauges simulated at least, in whole maps: some 200 clusters of chance to compare with."""
FEWEST_MAPS, MOST_MAPS = 20, 400
"""Limits to the number of maps that this asks for."""
TAIL = 0.1
"""Share of the clusters of chance that shows how fast large masses get rare: beyond it their p-value falls
exponentially, as it does for excursions of Gaussian fields (Adler 1981), and needs no more maps."""
SMALLEST_P = 1e-15
"""Smaller p-values count as this one: their logarithm says nothing more."""
LAGS = (0.75, 1.25, 1.75, 2.25, 2.75, 3.25, 4.25)
"""Edges of the distances over which correlation is measured [gauge spacings]."""
CERTAIN = 4.0
"""Score beyond which a gauge changed for sure: such gauges say nothing about correlation without change. A lower one
would cut off what chance does."""
FEWEST_PAIRS = 200
"""Pairs of gauges without change that a correlation is believed from."""
MOST_BESIDE = 300
"""Gauges within the longest of those distances, on average, beyond which they are a crowd and no map: on an even grid
there are 57, and links between all of a crowd would fill the memory."""
SEED = 20_310_913
"""Of the simulated maps: the same scans give the same p-values."""


@dataclass(frozen=True, slots=True)
class Clusters:
    """Clusters of a map.

    Parameters
    ----------
    label : ndarray of shape (g,), intp
        Cluster of each gauge, -1 where its p-value is not below `FORMING`.
    p : ndarray of shape (c,)
        p-value of each cluster: the share of clusters of chance with as much mass.
    found : ndarray of shape (c,), bool
        Whether it survives false-discovery control over clusters.
    """

    label: NDArray[np.intp]
    p: FloatArray
    found: BoolArray

    def at_gauges(self) -> tuple[FloatArray, BoolArray]:
        """p-value and survival of the cluster of each gauge; NaN and False where it belongs to none."""
        inside = self.label >= 0
        p, found = np.full(len(self.label), np.nan), np.zeros(len(self.label), np.bool_)
        p[inside], found[inside] = self.p[self.label[inside]], self.found[self.label[inside]]
        return p, found


def find_clusters(
    position: FloatArray, p: FloatArray, *, spacing: float, gauge_length: float, rate: float, seed: int = SEED
) -> Clusters:
    """Find clusters of small p-values and judge them.

    Parameters
    ----------
    position : ndarray of shape (g, 3)
        Places of the gauges [m].
    p : ndarray of shape (g,)
        p-values of "nothing changed here", NaN where there is no test.
    spacing, gauge_length : float
        Of the gauges [m].
    rate : float
        Accepted share of false ones among the clusters that are found.
    seed : int
        Of the simulation.

    Returns
    -------
    Clusters
    """
    tested = np.flatnonzero(np.isfinite(p))
    label = np.full(len(p), -1, np.intp)
    score = _scores(p[tested])
    low = score > _forming()
    if not low.any() or _crowded(position[tested], LAGS[-1] * spacing):
        return Clusters(label, np.zeros(0), np.zeros(0, np.bool_))
    beside = _links(position[tested], BESIDE * spacing)
    groups, mass = _masses(score, low, beside)
    label[tested[low]] = groups
    length = _correlation_length(position[tested], score, spacing, gauge_length)
    chance = _chance(position[tested], beside, length, np.random.default_rng(seed))
    cluster_p = _shares(chance, mass)
    return Clusters(label, cluster_p, benjamini_hochberg(cluster_p, rate))


def _crowded(position: FloatArray, reach: float) -> bool:
    from scipy.spatial import cKDTree

    tree = cKDTree(position)
    return bool(tree.count_neighbors(tree, reach) > MOST_BESIDE * len(position))


def _shares(chance: FloatArray, mass: FloatArray) -> FloatArray:
    """Share of the clusters of chance (sorted) that reach each mass."""
    larger = len(chance) - np.searchsorted(chance, mass, side="left")
    share = (1.0 + larger) / (1.0 + len(chance))
    top = chance[len(chance) - int(TAIL * len(chance)) :]
    if len(top) < 2:
        return np.asarray(share)
    fall = float(top.mean() - top[0])
    beyond = TAIL * np.exp(-(mass - top[0]) / fall)
    return np.asarray(np.where(mass > top[0], np.maximum(beyond, SMALLEST_P), share))


def _forming() -> float:
    from scipy.special import ndtri

    return float(-ndtri(FORMING))


def _scores(p: FloatArray) -> FloatArray:
    """p-values as quantiles of the normal distribution, large where p is small."""
    from scipy.special import ndtri

    return np.asarray(-ndtri(np.clip(p, SMALLEST_P, 1.0 - SMALLEST_P)))


def _links(position: FloatArray, reach: float) -> csr_array:
    """Which gauges are neighbours."""
    from scipy.sparse import coo_array
    from scipy.spatial import cKDTree

    first, second = cKDTree(position).query_pairs(reach, output_type="ndarray").T
    rows, columns = np.r_[first, second], np.r_[second, first]
    return coo_array((np.ones(len(rows), np.int8), (rows, columns)), shape=(len(position), len(position))).tocsr()


def _masses(score: FloatArray, low: BoolArray, beside: csr_array) -> tuple[NDArray[np.intp], FloatArray]:
    """Clusters of the gauges in `low`, and how far each lies beyond the forming score in sum."""
    from scipy.sparse.csgraph import connected_components

    rows = np.flatnonzero(low)
    groups = connected_components(beside[rows][:, rows], directed=False)[1]
    return np.asarray(groups, np.intp), np.asarray(np.bincount(groups, score[rows] - _forming()), np.float64)


def _correlation_length(position: FloatArray, score: FloatArray, spacing: float, gauge_length: float) -> float:
    """Length l of the correlation exp(-(d / l)^2) between the scores of gauges at a distance d [m].

    From gauges that did not change for sure; where these are too few, half a gauge length, over which two patches
    share 39 % of their area.
    """
    from scipy.spatial import cKDTree

    quiet = np.flatnonzero(np.abs(score) < CERTAIN)
    first, second = cKDTree(position[quiet]).query_pairs(LAGS[-1] * spacing, output_type="ndarray").T
    if len(first) < FEWEST_PAIRS:
        return gauge_length / 2
    z = score[quiet] - score[quiet].mean()
    distance = np.linalg.norm(position[quiet[first]] - position[quiet[second]], axis=1)
    lag = np.digitize(distance, spacing * np.array(LAGS)) - 1
    inside = (lag >= 0) & (lag < len(LAGS) - 1)
    products = z[first] * z[second] / z.var()
    pairs = np.bincount(lag[inside], minlength=len(LAGS) - 1)
    measured = np.bincount(lag[inside], products[inside], len(LAGS) - 1) / np.maximum(pairs, 1)
    middle = np.bincount(lag[inside], distance[inside], len(LAGS) - 1) / np.maximum(pairs, 1)
    tried = np.linspace(0.3 * spacing, max(gauge_length, spacing), 60)
    misfit = ((np.exp(-((middle / tried[:, None]) ** 2)) - measured) ** 2 * pairs).sum(axis=1)
    return float(tried[np.argmin(misfit)])


def _chance(position: FloatArray, beside: csr_array, length: float, rng: np.random.Generator) -> FloatArray:
    """Masses of the clusters in maps without change, sorted.

    White noise on the gauges, smoothed by exp(-2 (d / l)^2), has the correlation exp(-(d / l)^2).
    """
    from scipy.sparse import diags_array, eye_array
    from scipy.spatial import cKDTree

    count = len(position)
    near = cKDTree(position).sparse_distance_matrix(cKDTree(position), 1.5 * length, output_type="coo_matrix").tocsr()
    near.data = np.exp(-2.0 * (near.data / length) ** 2)
    near = near.maximum(eye_array(count, format="csr"))
    smooth = diags_array(1.0 / np.sqrt(np.asarray(near.multiply(near).sum(axis=1)).ravel())) @ near
    maps = int(np.clip(np.ceil(SIMULATED / count), FEWEST_MAPS, MOST_MAPS))
    found = []
    for _ in range(maps):
        score = np.asarray(smooth @ rng.standard_normal(count))
        low = score > _forming()
        if low.any():
            found.append(_masses(score, low, beside)[1])
    return np.sort(np.concatenate(found)) if found else np.zeros(0)
