# SPDX-License-Identifier: MIT
"""How height and intensity vary over the surface: covariance models measured on the scan itself.

From a sample of places, all pairs of cells give the empirical semivariogram of intensity, and of height over the
smooth surface. A nugget (noise of one point) plus one structured term is fitted; of three common families the one
with the least weighted misfit is taken (Matheron's estimator; families as in Stein 1999, common practice). All
three are differentiable in the mean square: the slope of a rougher process is not defined, and predicting one would
count the noise of its slope as knowledge about tangential motion.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.neighbourhood.smooth import SmoothSurface, _gather

FloatArray = NDArray[np.float64]

LAGS = 6.0
"""Longest lag of the variogram, in cells: the distances over which a local prediction weighs its neighbours."""
_BINS = 16
_SAMPLES = 3000
_TABLE = 512
SIGNIFICANT_SHARE = 4.0
"""A structured term smaller than this many times its own standard error counts as absent."""

FAMILIES: dict[str, Callable[[FloatArray], FloatArray]] = {
    "matern32": lambda q: (1 + np.sqrt(3) * q) * np.exp(-np.sqrt(3) * q),
    "matern52": lambda q: (1 + np.sqrt(5) * q + 5 * q**2 / 3) * np.exp(-np.sqrt(5) * q),
    "squared_exponential": lambda q: np.exp(-0.5 * q**2),
}


@dataclass(frozen=True, slots=True)
class CovarianceModel:
    """Nugget plus one structured term.

    Parameters
    ----------
    noise : float
        Variance of a single point that is not shared with its neighbours.
    sill : float
        Variance of the structured term; 0 where none was found.
    length : float
        Its length scale [m].
    family : str
        One of `FAMILIES`.
    """

    noise: float
    sill: float
    length: float
    family: str

    def table(self, reach: float) -> tuple[FloatArray, float]:
        """Covariance at equally spaced squared distances up to `reach` squared.

        Returns
        -------
        values : ndarray of shape (n, 2)
            Covariance k and (dk/dr)/r, so that the gradient is that times the offset vector.
        step : float
            Spacing in squared distance [m^2].
        """
        step = reach**2 / (_TABLE - 1)
        r = np.sqrt((np.arange(_TABLE) * step))
        small = 1e-3 * np.sqrt(step)
        k = self.sill * FAMILIES[self.family](r / self.length)
        r = np.maximum(r, small)
        dk = self.sill * (
            FAMILIES[self.family]((r + small) / self.length) - FAMILIES[self.family]((r - small) / self.length)
        )
        return np.stack([k, dk / (2 * small) / r], axis=1), step


@numba.njit(cache=True, nogil=True)
def _pair_sums(
    sample: NDArray[np.int64], origin: FloatArray, frame: FloatArray, curvature: FloatArray, reach: float,
    gate: float, key: NDArray[np.int64], start: NDArray[np.int64], size: float, position: FloatArray,
    intensity: FloatArray, count: FloatArray, bins: int,
) -> FloatArray:  # fmt: skip
    """Sums over pairs, per patch and lag bin: pairs, noise share, half squared differences of height, intensity, lag."""
    out = np.zeros((len(sample), bins, 5))
    cells = np.empty(1024, np.int64)
    s, t, h = np.empty(1024), np.empty(1024), np.empty(1024)
    for p in range(len(sample)):
        b = sample[p]
        found = _gather(origin[b, 0], origin[b, 1], origin[b, 2], size, key, start, size, position, cells)
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
                m += 1
        for i in range(m):
            for j in range(i):
                r = np.sqrt((s[i] - s[j]) ** 2 + (t[i] - t[j]) ** 2)
                k = int(r / reach * bins)
                if k >= bins:
                    continue
                ci, cj = cells[i], cells[j]
                out[p, k, 0] += 1.0
                out[p, k, 1] += 0.5 * (1.0 / count[ci] + 1.0 / count[cj])
                out[p, k, 2] += 0.5 * (h[i] - h[j]) ** 2
                if len(intensity):
                    out[p, k, 3] += 0.5 * (intensity[ci] - intensity[cj]) ** 2
                out[p, k, 4] += r
    return out


def _fit_family(
    family: str, lag: FloatArray, share: FloatArray, gamma: FloatArray, weight: FloatArray
) -> tuple[float, CovarianceModel]:
    """Best nugget, sill and length of one family by a scan over length and non-negative least squares."""
    from scipy.optimize import nnls

    root = np.sqrt(weight)
    best = (np.inf, CovarianceModel(0.0, 0.0, 1.0, family))
    for length in np.geomspace(0.5 * lag[0] + 1e-12, 8.0 * lag[-1], 40):
        design = np.stack([share, 1.0 - FAMILIES[family](lag / length)], axis=1)
        (noise, sill), misfit = nnls(design * root[:, None], gamma * root)
        if misfit < best[0]:
            best = (misfit, CovarianceModel(float(noise), float(sill), float(length), family))
    return best


def fit_covariance(
    lag: FloatArray, share: FloatArray, gamma: FloatArray, patches: FloatArray, weight: FloatArray
) -> CovarianceModel:
    """Fit noise and structured term to a semivariogram.

    Parameters
    ----------
    lag, share, gamma, weight : ndarray of shape (k,)
        Mean lag [m], mean noise share (1 for single points), semivariance, and weight per bin.
    patches : ndarray of shape (p, k)
        The semivariance of each sampled patch, for the standard error of `gamma`.
    """
    flat = float(np.sum(weight * share * gamma) / np.sum(weight * share**2))
    if flat <= 0:
        return CovarianceModel(0.0, 0.0, float(lag[-1]), "matern32")
    _, model = min((_fit_family(family, lag, share, gamma, weight) for family in FAMILIES), key=lambda item: item[0])
    # The structured term shows as a rise of the variogram from short to long lags; test that rise itself.
    third = max(len(lag) // 3, 1)
    ratio = patches / share
    whole = np.isfinite(ratio).all(axis=1)
    rise = ratio[whole, -third:].mean(axis=1) - ratio[whole, :third].mean(axis=1)
    if len(rise) < 4 or np.mean(rise) < SIGNIFICANT_SHARE * np.std(rise) / np.sqrt(len(rise)):
        return CovarianceModel(flat, 0.0, float(lag[-1]), "matern32")
    # A noise floor keeps the prediction well conditioned where a scan has no noise at all.
    return CovarianceModel(max(model.noise, 1e-8 * model.sill), model.sill, model.length, model.family)


def measure_covariance(
    cells: Cells, surface: SmoothSurface, *, gate: float
) -> tuple[CovarianceModel, CovarianceModel | None]:
    """Measure the covariance of height over the smooth surface and of intensity.

    Parameters
    ----------
    cells : Cells
        One epoch.
    surface : SmoothSurface
        Smooth surface at the blocks of `cells`.
    gate : float
        Heights beyond this are clutter and left out [m].

    Returns
    -------
    height, intensity : CovarianceModel
        Variances in m^2 and in squared intensity units; intensity is None where the cells have none.
    """
    trusted = np.flatnonzero(surface.support >= 6)
    sample = trusted[:: max(1, len(trusted) // _SAMPLES)]
    has_intensity = cells.intensity is not None
    sums = _pair_sums(
        sample, surface.origin, surface.frame, surface.curvature, LAGS * cells.resolution, gate, cells.key, cells.start,
        cells.block_size, cells.position,
        cells.intensity if cells.intensity is not None else np.empty(0), cells.count, _BINS,
    )  # fmt: skip
    total = sums.sum(axis=0)
    used = total[:, 0] > 50
    if used.sum() < 4:
        noise = float(np.median(cells.roughness) ** 2)
        return CovarianceModel(noise, 0.0, cells.block_size, "matern32"), None
    pairs = np.where(sums[:, used, 0] > 0, sums[:, used, 0], np.nan)
    count = total[used, 0]
    lag, share = total[used, 4] / count, total[used, 1] / count
    models = []
    for column in (2, 3) if has_intensity else (2,):
        gamma = total[used, column] / count
        weight = count / np.maximum(gamma, 1e-30) ** 2 / lag
        models.append(fit_covariance(lag, share, gamma, sums[:, used, column] / pairs, weight))
    return models[0], models[1] if has_intensity else None
