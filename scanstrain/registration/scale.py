# SPDX-License-Identifier: MIT
"""Scale of current over reference: a diagnostic that is reported and never applied."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.covariance import estimate
from scanstrain.registration.fit import MIN_SCALE, TUKEY, Fit, biweight, robust_scale, total
from scanstrain.registration.match import UNKNOWNS, Metric
from scanstrain.registration.weak import MIN_RELIABILITY

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

ROUNDS = 10
"""Rounds of weighting: ground returns from the middle outwards."""
WORTHLESS = 1e4
"""Standard error [ppm] beyond which the scale is not reported: a per cent says nothing about an instrument."""


def with_scale(strong: FloatArray) -> FloatArray:
    """Add the scale to a basis of motions: (6, r) to (7, r + 1)."""
    basis = np.zeros((UNKNOWNS, strong.shape[1] + 1))
    basis[:6, :-1] = strong
    basis[6, -1] = 1.0
    return basis


def determined(fit: Fit, strong: FloatArray) -> bool:
    """Say whether the two epochs agree on what fixes the scale, with the solved motions eliminated (see `weak`)."""
    full, shared, _ = total(fit.rows, fit.weight)
    basis = with_scale(strong)
    left = []
    for matrix in (shared, full):
        M = basis.T @ matrix @ basis
        left.append(float(M[-1, -1] - M[-1, :-1] @ np.linalg.solve(M[:-1, :-1], M[:-1, -1])))
    return left[1] > 0 and left[0] > MIN_RELIABILITY * left[1]


def scale_ppm(fit: Fit, patch: IntArray, count: int, metric: Metric, strong: FloatArray) -> tuple[float, float]:
    """Fit a seventh parameter about the result.

    On all matches, with weights of its own: a scale moves the far ends most, and ground that is stable but for the
    scale would be left out there.

    Parameters
    ----------
    fit : Fit
        The finished alignment.
    patch : ndarray of shape (b,), int64
        Patch of every reference block.
    count : int
        Number of patches.
    metric : Metric
    strong : ndarray of shape (6, r)
        Motions that are solved for.

    Returns
    -------
    scale, sd : float
        Current over reference minus one and its standard error [ppm]; NaN where the surfaces do not fix it.
    """
    basis = with_scale(strong)
    moved = np.zeros(UNKNOWNS)
    for _ in range(ROUNDS):
        step, covariance, _ = estimate(fit, patch, count, basis)
        moved += basis @ step
        rows = replace(fit.rows, residual=fit.rows.residual - fit.rows.row @ (basis @ step))
        z = rows.residual / rows.sd
        spread = max(MIN_SCALE, min(fit.scale, robust_scale(z[fit.weight > 0])))
        fit = replace(fit, rows=rows, scale=spread, weight=biweight(z / (TUKEY * spread)) / rows.sd**2)
    sd = float(np.sqrt(covariance[-1, -1])) / metric.arm * 1e6
    if not sd < WORTHLESS:
        return np.nan, np.nan
    return float(moved[-1]) / metric.arm * 1e6, sd
