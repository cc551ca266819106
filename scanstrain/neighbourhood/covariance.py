# SPDX-License-Identifier: MIT
"""How height and intensity vary over the surface: covariances measured on the scan itself, place by place.

Pairs of neighbouring cells give the empirical semivariogram of intensity, and of height over the smooth surface
(Matheron's estimator). A nugget (noise of one point) plus one structured term is fitted. Family and length of the
structured term are common to the scan; noise and sill are local, since range and incidence change the noise, and a
textured wall may stand on a bare floor: with the wall's covariance the floor's noise would pass for texture.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.neighbourhood.smooth import SmoothSurface, gather

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LAGS = 6.0
"""Longest lag of the variogram, in cells: the distances over which a local prediction weighs its neighbours."""
BINS = 10
_SHORT, _LONG = 3, 4
"""Bins at the two ends of the variogram whose difference shows structure."""
_TABLE = 512
SIGNIFICANT = 4.0
"""A structured term counts where the rise of the variogram exceeds this many of its standard errors."""
_FEWEST = 6
"""Blocks that a region needs before its own variogram is believed."""
SAMPLED = 20_000
"""About so many blocks give their pairs: enough for the local variograms of any scan that fits in memory."""
FLOOR = 1e-6
"""Least noise variance over sill: keeps the prediction well conditioned where a scan has no noise at all."""
_LEAST_GAMMA = 1e-6
"""Semivariance, over the scan's own variance, below which a bin gains no more weight."""
LEAST_NOISE = 0.3
"""Least local noise variance over the scan's median: what falls below is an error of a local variogram."""

# All families are differentiable in the mean square (Stein 1999, ch. 2). The slope of a rougher process is not
# defined, and predicting one would count the noise of its slope as knowledge about tangential motion.
FAMILIES: dict[str, Callable[[FloatArray], FloatArray]] = {
    "matern32": lambda q: (1 + np.sqrt(3) * q) * np.exp(-np.sqrt(3) * q),
    "matern52": lambda q: (1 + np.sqrt(5) * q + 5 * q**2 / 3) * np.exp(-np.sqrt(5) * q),
    "squared_exponential": lambda q: np.exp(-0.5 * q**2),
}


@dataclass(frozen=True, slots=True)
class Covariance:
    """Local nugget and sill with a common correlation function.

    Parameters
    ----------
    family : str
        One of `FAMILIES`.
    length : float
        Its length scale [m].
    noise : ndarray of shape (b,)
        At every block: variance of a single point that is not shared with its neighbours.
    sill : ndarray of shape (b,)
        At every block: variance of the structured term; 0 where none shows.
    """

    family: str
    length: float
    noise: FloatArray
    sill: FloatArray

    def table(self, reach: float) -> tuple[FloatArray, float]:
        """Correlation at equally spaced squared distances up to `reach` squared.

        Returns
        -------
        values : ndarray of shape (n, 2)
            Correlation k and (dk/dr)/r, so that the gradient is that times the offset vector.
        step : float
            Spacing in squared distance [m^2].
        """
        step = reach**2 / (_TABLE - 1)
        r = np.sqrt(np.arange(_TABLE) * step)
        correlation = FAMILIES[self.family]
        small = 1e-3 * np.sqrt(step)
        r = np.maximum(r, small)
        slope = (correlation((r + small) / self.length) - correlation((r - small) / self.length)) / (2 * small)
        values = np.stack([correlation(r / self.length), slope / r], axis=1)
        values[0, 0] = 1.0
        return values, step


@numba.njit(cache=True, nogil=True, parallel=True)
def _pair_sums(
    origin: FloatArray, frame: FloatArray, curvature: FloatArray, support: IntArray, reach: float, gate: float,
    key: IntArray, start: IntArray, size: float, position: FloatArray, intensity: FloatArray, count: FloatArray,
    out: FloatArray,
) -> None:  # fmt: skip
    """Per block and lag bin: pairs, noise share, half squared differences of height and of intensity, lag (sums).

    A pair has its first cell in the block, the second anywhere within a block width.
    """
    bins = out.shape[1]
    stride = max(1, len(key) // SAMPLED)
    for turn in numba.prange((len(key) + stride - 1) // stride):
        b = turn * stride
        if support[b] < 6:
            continue
        cells = np.empty(1024, np.int64)
        s, t, h, own = np.empty(1024), np.empty(1024), np.empty(1024), np.empty(1024, np.bool_)
        found = gather(origin[b, 0], origin[b, 1], origin[b, 2], size, key, start, size, position, cells)
        m = 0
        for r in range(found):
            c = cells[r]
            d0, d1, d2 = position[c, 0] - origin[b, 0], position[c, 1] - origin[b, 1], position[c, 2] - origin[b, 2]
            x = d0 * frame[b, 0, 0] + d1 * frame[b, 1, 0] + d2 * frame[b, 2, 0]
            y = d0 * frame[b, 0, 1] + d1 * frame[b, 1, 1] + d2 * frame[b, 2, 1]
            z = d0 * frame[b, 0, 2] + d1 * frame[b, 1, 2] + d2 * frame[b, 2, 2]
            z -= 0.5 * curvature[b, 0] * x * x + curvature[b, 1] * x * y + 0.5 * curvature[b, 2] * y * y
            if abs(z) < gate:
                cells[m], s[m], t[m], h[m] = c, x, y, z
                own[m] = start[b] <= c < start[b + 1]
                m += 1
        for i in range(m):
            if not own[i]:
                continue
            for j in range(m):
                if i == j or (own[j] and j > i):
                    continue
                r = np.sqrt((s[i] - s[j]) ** 2 + (t[i] - t[j]) ** 2)
                k = int(r / reach * bins)
                if k >= bins:
                    continue
                ci, cj = cells[i], cells[j]
                out[b, k, 0] += 1.0
                out[b, k, 1] += 0.5 * (1.0 / count[ci] + 1.0 / count[cj])
                out[b, k, 2] += 0.5 * (h[i] - h[j]) ** 2
                if len(intensity):
                    out[b, k, 3] += 0.5 * (intensity[ci] - intensity[cj]) ** 2
                out[b, k, 4] += r


def _regions(centre: FloatArray, normal: FloatArray, width: float) -> tuple[IntArray, IntArray]:
    """Number the region of every block, and list the neighbours of every region.

    A region is a voxel of `width` and one of three main directions of the normal, so that a floor is not judged
    together with the wall that stands on it. Neighbours, shape (r, 27), hold -1 where there is none.
    """
    facing = np.abs(normal).argmax(axis=1)
    place = np.floor(centre / width).astype(np.int64)
    place -= place.min(axis=0) - 1
    extent = place.max(axis=0) + 2
    code = ((facing * extent[0] + place[:, 0]) * extent[1] + place[:, 1]) * extent[2] + place[:, 2]
    unique, region = np.unique(code, return_inverse=True)
    steps = [(i * extent[1] + j) * extent[2] + k for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]
    wanted = unique[:, None] + np.array(steps)
    found = np.minimum(np.searchsorted(unique, wanted), len(unique) - 1)
    return region, np.where(unique[found] == wanted, found, -1)


def _pool(values: FloatArray, region: IntArray, neighbours: IntArray) -> FloatArray:
    """Sum block values over regions and their neighbours."""
    flat = values.reshape(len(values), -1)
    sums = np.stack([np.bincount(region, column, len(neighbours)) for column in flat.T], axis=1)
    padded = np.vstack([sums, np.zeros(sums.shape[1])])
    return padded[neighbours].sum(axis=1).reshape(len(neighbours), *values.shape[1:])


def _rise(sums: FloatArray, column: int) -> FloatArray:
    """Rise of each block's variogram from short to long lags, per unit noise share; NaN where pairs are missing."""
    short, long = sums[:, :_SHORT].sum(axis=1), sums[:, -_LONG:].sum(axis=1)
    enough = (short[:, 0] >= 3) & (long[:, 0] >= 3)
    with np.errstate(divide="ignore", invalid="ignore"):
        rise = long[:, column] / long[:, 1] - short[:, column] / short[:, 1]
    return np.where(enough, rise, np.nan)


def _significant(rise: FloatArray, region: IntArray, neighbours: IntArray) -> NDArray[np.bool_]:
    """Regions where the mean rise over the blocks exceeds `SIGNIFICANT` of its standard errors."""
    known = np.isfinite(rise)
    value = np.where(known, rise, 0.0)
    n, total, squares = _pool(np.stack([known, value, value**2], axis=1).astype(float), region, neighbours).T
    mean = total / np.maximum(n, 1)
    error = np.sqrt(np.maximum(squares / np.maximum(n, 1) - mean**2, 0.0) / np.maximum(n, 1))
    return (n >= _FEWEST) & (mean > SIGNIFICANT * error)


def fit_correlation(lag: FloatArray, share: FloatArray, gamma: FloatArray, weight: FloatArray) -> tuple[str, float]:
    """Fit family and length of the structured term to a pooled semivariogram.

    Non-negative least squares for nugget and sill at every length of a scan; the family with the least weighted
    misfit wins.

    Parameters
    ----------
    lag, share, gamma, weight : ndarray of shape (k,)
        Mean lag [m], mean noise share (1 for single points), semivariance and weight of each bin.

    Returns
    -------
    family : str
    length : float
        Length scale [m].
    """
    from scipy.optimize import nnls

    root = np.sqrt(weight)
    best = (np.inf, "matern32", float(lag[-1]))
    for family, correlation in FAMILIES.items():
        for length in np.geomspace(0.5 * lag[0], 8.0 * lag[-1], 60):
            design = np.stack([share, 1.0 - correlation(lag / length)], axis=1)
            _, misfit = nnls(design * root[:, None], gamma * root)
            best = min(best, (misfit, family, float(length)))
    return best[1], best[2]


def _local(
    pooled: FloatArray, column: int, family: str, length: float, structured: NDArray[np.bool_]
) -> tuple[FloatArray, FloatArray]:
    """Noise and sill of every region by weighted least squares; sill 0 where no structure shows."""
    known = pooled[:, :, 0] > 0
    pairs = np.where(known, pooled[:, :, 0], 1.0)
    share, lag = pooled[:, :, 1] / pairs, pooled[:, :, 4] / pairs
    some = known.any(axis=1)
    if not some.any():
        return np.zeros(len(pooled)), np.zeros(len(pooled))
    # In units of the scan's own variance and lag, no weight can overflow.
    unit = max(float(np.median(pooled[some, :, column].sum(axis=1) / pooled[some, :, 1].sum(axis=1))), 1e-30)
    gamma = pooled[:, :, column] / pairs / unit
    rise = 1.0 - FAMILIES[family](lag / length)
    weight = np.where(known, pairs / np.maximum(gamma, _LEAST_GAMMA) ** 2 / np.maximum(lag / lag.max(), 1e-3), 0.0)
    square = np.where(some, (pooled[:, :, 0] * share**2).sum(axis=1), 1.0)
    flat = (pooled[:, :, 0] * share * gamma).sum(axis=1) / square
    ss, sr, rr = (weight * share**2).sum(1), (weight * share * rise).sum(1), (weight * rise**2).sum(1)
    sg, rg = (weight * share * gamma).sum(1), (weight * rise * gamma).sum(1)
    determinant = ss * rr - sr**2
    use = structured & (determinant > 1e-12 * ss * rr)
    noise = np.where(use, (sg * rr - rg * sr) / np.where(use, determinant, 1.0), flat)
    believed = noise[(noise > 0) & some]
    least = LEAST_NOISE * float(np.median(believed)) if len(believed) else 0.0
    noise = np.maximum(noise, least)
    sill = np.where(use, np.maximum((rg - noise * sr) / np.where(use, rr, 1.0), 0.0), 0.0)
    noise = np.where(sill > 0, np.maximum(noise, FLOOR * sill), np.maximum(flat, least))
    return noise * unit, sill * unit


def measure_covariance(
    cells: Cells, surface: SmoothSurface, *, gate: float, region_width: float
) -> tuple[Covariance, Covariance | None]:
    """Measure the covariance of height over the smooth surface and of intensity.

    Parameters
    ----------
    cells : Cells
        One epoch.
    surface : SmoothSurface
        Smooth surface at the blocks of `cells`.
    gate : float
        Heights beyond this are clutter and left out [m].
    region_width : float
        Noise and sill are pooled over about three times this width [m].

    Returns
    -------
    height, intensity : Covariance
        Variances in m^2 and in squared intensity units; intensity is None where the cells have none.
    """
    grey = cells.intensity if cells.intensity is not None else np.empty(0)
    sums = np.zeros((len(cells.key), BINS, 5))
    _pair_sums(
        surface.origin, surface.frame, surface.curvature, surface.support, LAGS * cells.resolution, gate, cells.key,
        cells.start, cells.block_size, cells.position, grey, cells.count, sums,
    )  # fmt: skip
    region, neighbours = _regions(cells.centre, surface.frame[:, :, 2], region_width)
    pooled = _pool(sums, region, neighbours)
    models = [_model(sums, pooled, region, neighbours, column) for column in ((2, 3) if len(grey) else (2,))]
    return models[0], models[1] if len(grey) else None


def _model(sums: FloatArray, pooled: FloatArray, region: IntArray, neighbours: IntArray, column: int) -> Covariance:
    """Common correlation from the places that show structure, then local noise and sill."""
    structured = _significant(_rise(sums, column), region, neighbours)
    total = sums[structured[region]].sum(axis=0) if structured.any() else sums.sum(axis=0)
    used = total[:, 0] > 50
    family, length = "matern32", 1.0
    if structured.any() and used.sum() >= 4:
        pairs = total[used, 0]
        lag, gamma = total[used, 4] / pairs, total[used, column] / pairs
        # In units of the largest semivariance, so that a scan without noise cannot make a weight infinite.
        gamma = gamma / max(float(gamma.max()), 1e-300)
        weight = pairs / np.maximum(gamma, _LEAST_GAMMA) ** 2 / lag
        family, length = fit_correlation(lag, total[used, 1] / pairs, gamma, weight)
    noise, sill = _local(pooled, column, family, length, structured)
    return Covariance(family, length, noise[region], sill[region])
