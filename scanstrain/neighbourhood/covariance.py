# SPDX-License-Identifier: MIT
"""How height and intensity vary over the surface: covariances measured on the scan itself, place by place.

Pairs of neighbouring cells give the empirical semivariogram of intensity, and of height over the smooth surface
(Matheron's estimator). A nugget (noise of one point) plus one structured term is fitted. Family and length of the
structured term are common to the scan; noise and sill are local, since range and incidence change the noise, and a
textured wall may stand on a bare floor: with the wall's covariance the floor's noise would pass for texture.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.pairs import Pairs, pool

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_SHORT, _LONG = 3, 4
"""Bins at the two ends of the variogram whose difference shows structure."""
_TABLE = 512
SIGNIFICANT = 4.0
"""A structured term counts where the rise of the variogram exceeds this many of its standard errors."""
_FEWEST = 6
"""Blocks that a region needs before its own variogram is believed."""
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
    n, total, squares = pool(np.stack([known, value, value**2], axis=1).astype(float), region, neighbours).T
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


@dataclass(frozen=True, slots=True)
class Structure:
    """What height or intensity have in common over the whole scan.

    Parameters
    ----------
    family, length : str, float
        Of the correlation function; the length in m.
    unit : float
        Variance of the scan: in units of it no weight can overflow.
    farthest : float
        Longest mean lag [m].
    least : float
        Least noise variance that is believed, in units.
    """

    family: str
    length: float
    unit: float = 1.0
    farthest: float = 1.0
    least: float = 0.0


def measure_structure(parts: Sequence[Pairs], column: int) -> Structure:
    """Common correlation from the places that show structure, and the bounds on what is local.

    Parameters
    ----------
    parts : sequence of Pairs
        Pieces of one scan.
    column : int
        `HEIGHT` or `GREY`.
    """
    structured = [_structured(part, column) for part in parts]
    anywhere = any(each.any() for each in structured)
    total = np.sum(
        [
            part.sums[some[part.region]].sum(axis=0) if anywhere else part.sums.sum(axis=0)
            for part, some in zip(parts, structured, strict=True)
        ],
        axis=0,
    )
    used = total[:, 0] > 50
    family, length = "matern32", 1.0
    if anywhere and used.sum() >= 4:
        pairs = total[used, 0]
        lag, gamma = total[used, 4] / pairs, total[used, column] / pairs
        # In units of the largest semivariance, so that a scan without noise cannot make a weight infinite.
        gamma = gamma / max(float(gamma.max()), 1e-300)
        weight = pairs / np.maximum(gamma, _LEAST_GAMMA) ** 2 / lag
        family, length = fit_correlation(lag, total[used, 1] / pairs, gamma, weight)
    pooled = np.concatenate([part.pooled for part in parts])
    known = pooled[pooled[:, :, 0].any(axis=1)]
    if not len(known):
        return Structure(family, length)
    unit = max(float(np.median(known[:, :, column].sum(axis=1) / known[:, :, 1].sum(axis=1))), 1e-30)
    farthest = float((pooled[:, :, 4] / np.maximum(pooled[:, :, 0], 1.0)).max())
    common = Structure(family, length, unit, farthest)
    noise = _solve(pooled, column, np.concatenate(structured), common)[0]
    believed = noise[(noise > 0) & pooled[:, :, 0].any(axis=1)]
    least = LEAST_NOISE * float(np.median(believed)) if len(believed) else 0.0
    return Structure(family, length, unit, farthest, least)


def _structured(part: Pairs, column: int) -> NDArray[np.bool_]:
    return _significant(_rise(part.sums, column), part.region, part.neighbours)


def _solve(
    pooled: FloatArray, column: int, structured: NDArray[np.bool_], common: Structure
) -> tuple[FloatArray, FloatArray, FloatArray, NDArray[np.bool_]]:
    """Noise of every region, noise without structure, and what the sill follows from, all in units."""
    known = pooled[:, :, 0] > 0
    pairs = np.where(known, pooled[:, :, 0], 1.0)
    share, lag = pooled[:, :, 1] / pairs, pooled[:, :, 4] / pairs
    some = known.any(axis=1)
    gamma = pooled[:, :, column] / pairs / common.unit
    rise = 1.0 - FAMILIES[common.family](lag / common.length)
    weight = np.where(
        known, pairs / np.maximum(gamma, _LEAST_GAMMA) ** 2 / np.maximum(lag / common.farthest, 1e-3), 0.0
    )
    square = np.where(some, (pooled[:, :, 0] * share**2).sum(axis=1), 1.0)
    flat = (pooled[:, :, 0] * share * gamma).sum(axis=1) / square
    ss, sr, rr = (weight * share**2).sum(1), (weight * share * rise).sum(1), (weight * rise**2).sum(1)
    sg, rg = (weight * share * gamma).sum(1), (weight * rise * gamma).sum(1)
    determinant = ss * rr - sr**2
    use = structured & (determinant > 1e-12 * ss * rr)
    noise = np.where(use, (sg * rr - rg * sr) / np.where(use, determinant, 1.0), flat)
    return noise, flat, np.stack([rg, sr, rr]), use


def local_covariance(part: Pairs, column: int, common: Structure) -> Covariance:
    """Noise and sill about every block by weighted least squares; sill 0 where no structure shows."""
    noise, flat, (rg, sr, rr), use = _solve(part.pooled, column, _structured(part, column), common)
    noise = np.maximum(noise, common.least)
    sill = np.where(use, np.maximum((rg - noise * sr) / np.where(use, rr, 1.0), 0.0), 0.0)
    noise = np.where(sill > 0, np.maximum(noise, FLOOR * sill), np.maximum(flat, common.least))
    return Covariance(
        common.family, common.length, (noise * common.unit)[part.region], (sill * common.unit)[part.region]
    )
