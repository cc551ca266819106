# SPDX-License-Identifier: MIT
"""Covariance of the fitted motion from patches, so that errors which neighbours share are counted."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import leave_one_out, pooled
from scanstrain.registration.fit import TUKEY, Fit, sums
from scanstrain.registration.match import Metric

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

RESOLUTION = 1e-9
"""Standard error [m] that no result goes below: rounding of coordinates."""


def estimate(fit: Fit, patch: IntArray, count: int, basis: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Solve for unknowns about the fitted motion and estimate their covariance.

    Leave-one-patch-out (`linalg.leave_one_out`), whatever the correlation inside a patch. Rows are weighted robustly,
    so it is divided by the square of the mean slope of the score over the mean weight (Huber 1981; formula from
    memory). With few patches it scatters, so it is pooled with the covariance of independent blocks from the same
    residuals (`linalg.pooled`).

    Parameters
    ----------
    fit : Fit
    patch : ndarray of shape (b,), int64
        Patch of every reference block.
    count : int
        Number of patches.
    basis : ndarray of shape (7, k)
        Unknowns to solve for, in metric unknowns with scale last.

    Returns
    -------
    step : ndarray of shape (k,)
        Estimate about the present motion [m].
    covariance : ndarray of shape (k, k)
        [m^2].
    information : ndarray of shape (k, k)
        Weighted sum of the rows [1/m^2].
    """
    rows, used = fit.rows, fit.weight > 0
    group = patch[rows.block]
    N_P, _, g_P = sums(rows.row, rows.half, rows.residual, fit.weight, group, count)
    N_P = np.einsum("ai,gab,bj->gij", basis, N_P, basis)
    g_P = g_P @ basis
    N = N_P.sum(axis=0)
    step = np.linalg.solve(N, g_P.sum(axis=0))
    g_P = g_P - N_P @ step
    present = np.unique(group[used])
    clustered = leave_one_out(N_P[present], g_P[present])
    k = len(N)

    a = rows.row[used] @ basis
    e = fit.weight[used] * (rows.residual[used] - a @ step)
    inverse = np.linalg.inv(N)
    m = len(e)
    independent = inverse @ ((a * (e**2)[:, None]).T @ a) @ inverse * m / max(m - k, 1)
    both = pooled(clustered, independent, len(present)) / _score_ratio(fit) ** 2
    return step, both + RESOLUTION**2 * np.eye(k), N


def _score_ratio(fit: Fit) -> float:
    """Mean slope of the biweight's score over its mean weight: 0.83 on normal errors, 1 where nothing is cut."""
    rows, used = fit.rows, fit.weight > 0
    u = rows.residual[used] / (rows.sd[used] * TUKEY * fit.scale)
    slope = (1 - u**2) * (1 - 5 * u**2) / rows.sd[used] ** 2
    return float(max(slope.sum() / fit.weight[used].sum(), 0.5))


def physical(covariance: FloatArray, metric: Metric) -> FloatArray:
    """Turn a 6x6 covariance of metric unknowns into one of (rotation [rad], translation [m]) at the pivot."""
    scale = np.r_[np.full(3, 1 / metric.arm), np.ones(3)]
    out = covariance * scale[:, None] * scale[None, :]
    return np.asarray((out + out.T) / 2)


def full_covariance(solved: FloatArray, strong: FloatArray, weak: FloatArray, held: FloatArray) -> FloatArray:
    """Put the 6x6 covariance together: estimated where solved for, the start's uncertainty where held.

    Parameters
    ----------
    solved : ndarray of shape (r, r)
        Covariance in the strong directions [m^2].
    strong, weak : ndarray of shape (6, r), (6, k)
        Orthonormal bases of the two parts.
    held : ndarray of shape (k, k)
        Covariance of the start in the weak directions [m^2].
    """
    return np.asarray(strong @ solved @ strong.T + weak @ held @ weak.T)
