# SPDX-License-Identifier: MIT
"""The best that any unbiased method could do with given rows and known noise (Cramér-Rao)."""

from __future__ import annotations

import numpy as np

from scanstrain.synthetic.surfaces import FloatArray


def cramer_rao(rows: FloatArray, variances: FloatArray) -> FloatArray:
    """Return the bound (A' S^-1 A)^-1 on the covariance of the unknowns of linear Gaussian rows.

    Parameters
    ----------
    rows : ndarray of shape (n, k)
        A: the derivative of each observation by each unknown.
    variances : ndarray of shape (n,) or (n, n)
        S: variance of each observation, or their full covariance matrix.

    Returns
    -------
    ndarray of shape (k, k)
        Smallest covariance of an unbiased estimate.
    """
    A, S = np.asarray(rows, dtype=np.float64), np.asarray(variances, dtype=np.float64)
    weighted = np.linalg.solve(S, A) if S.ndim == 2 else A / S[:, None]
    # Columns of very different size (1 and x^2 of a small patch) would cost digits without this scaling.
    scale = 1.0 / np.sqrt((A * weighted).sum(axis=0))
    return np.asarray(np.linalg.inv((A * scale).T @ (weighted * scale)) * np.outer(scale, scale))


def normal_displacement_bound(
    reference: FloatArray,
    current: FloatArray,
    *,
    reference_variance: FloatArray | float,
    current_variance: FloatArray | float,
    order: int = 2,
) -> FloatArray:
    """Return the bound for the normal displacement of one patch, its slope and its second derivatives.

    The surface and its displacement are polynomials in the tangent plane with unknown coefficients. The two epochs
    are independent, so the bound is the sum of the bounds of the two heights: for constants the well-known
    s1^2/n1 + s2^2/n2. A real surface is rougher than a polynomial, which can only make the task harder.

    Parameters
    ----------
    reference, current : ndarray of shape (n, 2) and (m, 2)
        Tangent coordinates of the points of both epochs in the patch, from its centre [m].
    reference_variance, current_variance : float or ndarray of shape (n,) and (m,)
        Variance of the points along the normal [m^2].
    order : int
        0, 1 or 2: constant, plane or quadratic displacement.

    Returns
    -------
    ndarray of shape (k, k), k = 1, 3 or 6
        Covariance of (un, gn1, gn2, h11, h12, h22), or of the first 1 or 3 of them [m, 1, 1/m].
    """
    bounds = []
    for xy, variance in ((reference, reference_variance), (current, current_variance)):
        x, y = np.asarray(xy, dtype=np.float64).T
        A = np.stack([np.ones(len(x)), x, y, x * x / 2, x * y, y * y / 2], axis=1)
        bounds.append(cramer_rao(A[:, : (1, 3, 6)[order]], np.broadcast_to(variance, len(x))))
    return bounds[0] + bounds[1]
