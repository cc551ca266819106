# SPDX-License-Identifier: MIT
"""Small least-squares systems for compiled code: normal equations, Cholesky solution and inverse."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

# Sums over contiguous rows may be taken in vector lanes (reassoc): several times faster, and still the same on every
# run and for any number of threads, since each system is summed by one thread. NaN keeps its meaning.
LANES = {"reassoc", "contract", "nsz"}


@numba.njit(cache=True, nogil=True, fastmath=LANES)
def forward(L: FloatArray, b: FloatArray, n: int) -> None:
    """Solve L y = b in place."""
    for i in range(n):
        v = b[i]
        for k in range(i):
            v -= L[i, k] * b[k]
        b[i] = v / L[i, i]


@numba.njit(cache=True, nogil=True, fastmath=LANES)
def backward(L: FloatArray, b: FloatArray, n: int) -> None:
    """Solve L' x = b in place."""
    for i in range(n - 1, -1, -1):
        v = b[i] / L[i, i]
        b[i] = v
        for k in range(i):
            b[k] -= L[i, k] * v


@numba.njit(cache=True, nogil=True, fastmath=LANES)
def factor(A: FloatArray, n: int) -> bool:
    """Turn the lower triangle of `A` into its Cholesky factor; False where it is not positive."""
    for j in range(n):
        d = A[j, j]
        for k in range(j):
            d -= A[j, k] * A[j, k]
        if not d > 0.0:
            return False
        d = np.sqrt(d)
        A[j, j] = d
        for i in range(j + 1, n):
            v = A[i, j]
            for k in range(j):
                v -= A[i, k] * A[j, k]
            A[i, j] = v / d
    return True


@numba.njit(cache=True, nogil=True)
def solve_in_place(A: FloatArray, b: FloatArray, n: int) -> bool:
    """Solve A x = b by Cholesky on the lower triangle; `A` becomes the factor and `b` the solution."""
    if not factor(A, n):
        return False
    forward(A, b, n)
    backward(A, b, n)
    return True


@numba.njit(cache=True, nogil=True)
def inverse(A: FloatArray, n: int, out: FloatArray) -> bool:
    """Inverse of a symmetric positive matrix, given by its lower triangle, into `out` (n, n)."""
    L = A.copy()
    if not factor(L, n):
        return False
    for column in range(n):
        e = np.zeros(n)
        e[column] = 1.0
        forward(L, e, n)
        backward(L, e, n)
        out[:n, column] = e
    return True


@numba.njit(cache=True, nogil=True, fastmath=LANES)
def accumulate(rows: FloatArray, rhs: FloatArray, w: FloatArray, N: FloatArray, b: FloatArray) -> None:
    """Add the weighted normal equations of `rows` (n, m) to the lower triangle of `N` and to `b`."""
    n, m = rows.shape
    weighted = np.empty(m)
    for i in range(n):
        for r in range(m):
            weighted[r] = w[r] * rows[i, r]
        s = 0.0
        for r in range(m):
            s += weighted[r] * rhs[r]
        b[i] += s
        for j in range(i + 1):
            s = 0.0
            for r in range(m):
                s += weighted[r] * rows[j, r]
            N[i, j] += s
