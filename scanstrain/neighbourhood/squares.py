# SPDX-License-Identifier: MIT
"""Sums over small squares of a patch, and what noise shared over a distance does to them.

Noise with the correlation exp(-(d / length)^2) splits into the two axes, so its effect on all squares of a patch is two
passes of a short filter instead of a sum over all pairs of points.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.solve import inverse

FloatArray = NDArray[np.float64]

REACH = 2.2
"""The filter ends where the correlation is below 1 %, in correlation lengths."""


@numba.njit(cache=True, nogil=True)
def square_of(x: float, radius: float, across: int) -> int:
    """Row or column of a place at `x` in (-radius, radius), of `across` squares."""
    return min(max(int((x / radius + 1.0) * 0.5 * across), 0), across - 1)


@numba.njit(cache=True, nogil=True)
def taps(length: float, width: float) -> FloatArray:
    """Correlation along one axis between the means of squares of `width`, 0, 1, 2 ... squares apart.

    The difference of two places, each evenly spread over its square, has the variance width^2 / 6; a Gaussian
    convolved with it keeps its integral.
    """
    wide = np.sqrt(length * length + width * width / 3.0)
    out = np.empty(int(np.ceil(REACH * wide / width)) + 1)
    for i in range(len(out)):
        out[i] = length / wide * np.exp(-((i * width / wide) ** 2))
    return out


@numba.njit(cache=True, nogil=True)
def spread(values: FloatArray, weights: FloatArray, out: FloatArray) -> None:
    """Filter `values` (n, n, k) along both axes into `out`."""
    size, layers = values.shape[0], values.shape[2]
    half = np.zeros(values.shape)
    # Squares in a row follow each other in memory, so a shift along the row is one long run, and so is a whole row.
    for i in range(size):
        row, into = values[i].reshape(size * layers), half[i].reshape(size * layers)
        add_scaled(weights[0], row, into)
        for d in range(1, min(len(weights), size)):
            add_scaled(weights[d], row[d * layers :], into[: (size - d) * layers])
            add_scaled(weights[d], row[: (size - d) * layers], into[d * layers :])
    out[:] = 0.0
    for i in range(size):
        into = out[i].reshape(size * layers)
        for ii in range(max(0, i - len(weights) + 1), min(size, i + len(weights))):
            add_scaled(weights[abs(ii - i)], half[ii].reshape(size * layers), into)


@numba.njit(cache=True, nogil=True, inline="always")
def add_scaled(factor: float, values: FloatArray, out: FloatArray) -> None:
    """Add a multiple of `values` to `out`."""
    for k in range(len(out)):
        out[k] += factor * values[k]


@numba.njit(cache=True, nogil=True)
def _trace(counts: FloatArray, first: FloatArray, second: FloatArray) -> float:
    """Sum over all pairs of squares of both correlations, weighted by the counts."""
    n = min(len(first), len(second))
    out = np.empty(counts.shape)
    spread(counts, first[:n] * second[:n], out)
    return float((out * counts).sum())


@numba.njit(cache=True, nogil=True)
def quadratic_forms(
    design: FloatArray, residual: FloatArray, counts: FloatArray, width: float, lengths: FloatArray,
    q: FloatArray, T: FloatArray,
) -> None:  # fmt: skip
    """Squared residuals weighed by each correlation, and what unit variance of each noise component adds to them.

    With W the weights, R_0 = W^-1 (noise of its own for every square), R_k the correlations and P = 1 - A (A'WA)^-1 A'W
    what the fit leaves: q_k = e'W R_k W e with the expectation sum_l T_kl theta_l, T_kl = tr(W R_k W P R_l P').
    Matching the two gives the variances without the loss to the fit (minimum norm quadratic estimation, Rao 1971).

    Parameters
    ----------
    design, residual, counts : ndarray of shape (n, n, k), (n, n, 1), (n, n, 1)
        Design and residuals, both times the weights, and the weights; 0 where a square is empty.
    width, lengths : float, ndarray of shape (c,)
        Of a square and of the correlations [m].
    q, T : ndarray of shape (c + 1,), (c + 1, c + 1)
        Filled.
    """
    size, n, components = design.shape[0], design.shape[2], len(lengths) + 1
    z = np.zeros((components, size, size, n))
    smooth = np.empty(residual.shape)
    squares = 0.0
    q[0] = 0.0
    for i in range(size):
        for j in range(size):
            if counts[i, j, 0] > 0:
                squares += 1.0
                q[0] += residual[i, j, 0] ** 2 / counts[i, j, 0]
                z[0, i, j] = design[i, j] / counts[i, j, 0]
    for k in range(1, components):
        weights = taps(lengths[k - 1], width)
        spread(design, weights, z[k])
        spread(residual, weights, smooth)
        q[k] = (smooth * residual).sum()
    A, c = design.reshape(size * size, n), counts.reshape(size * size, 1)
    U, Q = np.zeros((components, n, n)), np.zeros((n, n))
    for k in range(components):
        U[k] = A.T @ z[k].reshape(size * size, n)
    inverse(U[0], n, Q)
    for k in range(components):
        weighted = z[k].reshape(size * size, n) * c
        for m in range(k + 1):
            if k == 0:
                trace = squares
            elif m == 0:
                trace = c.sum() * taps(lengths[k - 1], width)[0] ** 2
            else:
                trace = _trace(counts, taps(lengths[k - 1], width), taps(lengths[m - 1], width))
            both = weighted.T @ z[m].reshape(size * size, n)
            T[k, m] = trace - 2.0 * (Q * both).sum() + ((Q @ U[k]) * (Q @ U[m]).T).sum()
            T[m, k] = T[k, m]
