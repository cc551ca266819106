# SPDX-License-Identifier: MIT
"""Polynomials of two tangent coordinates: terms, derivatives, and what a fit of too low an order makes of them.

With rows A of the terms that are fitted and Q of those that are left out, least squares returns (A'A)^-1 A'Q c beside
the fitted ones, where c are the coefficients left out. Over a full disc of radius R that is the transfer function of an
affine fit, 1 - (k R)^2 / 12 for a strain of wavenumber k; over a one-sided patch lower orders come in, too.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_RIDGE = 1e-9
"""Added to unit diagonals [1]: keeps the equations of a degenerate patch solvable."""


def exponents(order: int) -> IntArray:
    """Powers (p, q) of all terms x^p y^q up to a total order, by rising order; shape (k, 2)."""
    return np.array([(n - q, q) for n in range(order + 1) for q in range(n + 1)])


def terms(x: FloatArray, y: FloatArray, order: int, *, dx: int = 0, dy: int = 0) -> FloatArray:
    """Evaluate every term, or its derivative.

    Parameters
    ----------
    x, y : ndarray of shape (...)
        Tangent coordinates [1].
    order : int
        Highest total order.
    dx, dy : int
        How often to differentiate by each.

    Returns
    -------
    ndarray of shape (..., k)
    """
    along, across = _powers(x, order, dx), _powers(y, order, dy)
    return np.stack([along[p] * across[q] for p, q in exponents(order).tolist()], axis=-1)


def _powers(x: FloatArray, order: int, times: int) -> list[FloatArray]:
    """Derivatives of x^0, x^1, ... up to an order, taken so many times each."""
    plain = [np.ones_like(x)]
    for _ in range(order):
        plain.append(plain[-1] * x)
    out = []
    for power in range(order + 1):
        factor = float(np.prod([power - k for k in range(times)]))
        out.append(factor * plain[max(power - times, 0)])
    return out


def moments(x: FloatArray, y: FloatArray, patch: IntArray, count: int, order: int) -> FloatArray:
    """Mean of x^p y^q over the points of each patch, for p + q up to `order`.

    Parameters
    ----------
    x, y : ndarray of shape (n,)
        Coordinates of the points from the centre of their patch, in radii [1].
    patch : ndarray of shape (n,)
        Patch of each point.
    count : int
        Number of patches.
    order : int
        Highest total order.

    Returns
    -------
    ndarray of shape (count, order + 1, order + 1)
        NaN for p + q above `order`, and where a patch has no point.
    """
    out = np.full((count, order + 1, order + 1), np.nan)
    total = np.bincount(patch, minlength=count)
    for p, q in exponents(order).tolist():
        sums = np.bincount(patch, x**p * y**q, minlength=count)
        out[:, p, q] = np.where(total > 0, sums / np.maximum(total, 1), np.nan)
    return out


def leakage(moment: FloatArray, fitted: int, order: int) -> FloatArray:
    """Say what a fit up to order `fitted` returns for each term above it, up to `order`.

    Parameters
    ----------
    moment : ndarray of shape (n, m, m)
        As of `moments`, up to order `fitted + order` or more.
    fitted, order : int
        Highest order in the fit and highest order considered.

    Returns
    -------
    ndarray of shape (n, k, l)
        Change of each of the k fitted coefficients for a unit coefficient of each of the l terms left out.
    """
    powers = exponents(order)
    inside = exponents(fitted)
    outside = powers[len(inside) :]
    A, Q = (
        moment[:, inside[:, None, 0] + other[None, :, 0], inside[:, None, 1] + other[None, :, 1]]
        for other in (inside, outside)
    )
    scale = 1.0 / np.sqrt(np.maximum(np.einsum("nii->ni", A), 1e-12))
    A = A * scale[:, :, None] * scale[:, None, :] + _RIDGE * np.eye(len(inside))
    return np.asarray(np.linalg.solve(A, Q * scale[:, :, None]) * scale[:, :, None])
