# SPDX-License-Identifier: MIT
"""Small least-squares systems for compiled code: normal equations, Cholesky solution and inverse."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

PIECE = 256
"""Columns that are summed at a time: fourteen rows of them stay in the nearest cache (32 kB)."""


LANES = 8
"""Partial sums of a product of rows: so many can be taken at the same time."""


@numba.njit(cache=True, nogil=True)
def dot(a: FloatArray, b: FloatArray) -> float:
    """Sum of products of two rows of one length, in a fixed order that processors can take several steps of at once.

    Leaving the order to the compiler is faster still, but what it makes of a loop then depends on where the loop is
    inlined, and a first run, which compiles, would differ in the last digits from the next one, which does not.
    """
    s0 = s1 = s2 = s3 = s4 = s5 = s6 = s7 = 0.0
    whole = len(a) // LANES
    for r in range(whole):
        x, y = a[LANES * r : LANES * r + LANES], b[LANES * r : LANES * r + LANES]
        s0 += x[0] * y[0]
        s1 += x[1] * y[1]
        s2 += x[2] * y[2]
        s3 += x[3] * y[3]
        s4 += x[4] * y[4]
        s5 += x[5] * y[5]
        s6 += x[6] * y[6]
        s7 += x[7] * y[7]
    for r in range(LANES * whole, len(a)):
        s0 += a[r] * b[r]
    return ((s0 + s4) + (s1 + s5)) + ((s2 + s6) + (s3 + s7))


@numba.njit(cache=True, nogil=True)
def forward(L: FloatArray, b: FloatArray, n: int) -> None:
    """Solve L y = b in place."""
    for i in range(n):
        v = b[i]
        for k in range(i):
            v -= L[i, k] * b[k]
        b[i] = v / L[i, i]


@numba.njit(cache=True, nogil=True)
def backward(L: FloatArray, b: FloatArray, n: int) -> None:
    """Solve L' x = b in place."""
    for i in range(n - 1, -1, -1):
        v = b[i] / L[i, i]
        b[i] = v
        for k in range(i):
            b[k] -= L[i, k] * v


@numba.njit(cache=True, nogil=True)
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


@numba.njit(cache=True, nogil=True)
def accumulate(rows: FloatArray, rhs: FloatArray, w: FloatArray, N: FloatArray, b: FloatArray) -> None:
    """Add the weighted normal equations of `rows` (n, m) to the lower triangle of `N` and to `b`."""
    n, m = rows.shape
    weighted = np.empty(PIECE)
    for low in range(0, m, PIECE):
        size = min(PIECE, m - low)
        weight, right = w[low : low + size], rhs[low : low + size]
        product = weighted[:size]
        for i in range(n):
            row = rows[i, low : low + size]
            for r in range(size):
                product[r] = weight[r] * row[r]
            b[i] += dot(product, right)
            for j in range(i + 1):
                N[i, j] += dot(product, rows[j, low : low + size])


@numba.njit(cache=True, nogil=True)
def reduce_rows(W: FloatArray, m: int, extra: int) -> bool:
    """Cholesky factor of the upper triangle of `W[:m, :m]`, and what it makes of the right sides behind it.

    With K = U'U, the triangle becomes U and the columns m to m + extra become U'^-1 times them, row by row in one
    pass. False where K is not positive.
    """
    wide = m + extra
    for i in range(m):
        row = W[i, i:wide]
        k = 0
        while k + 3 < i:
            r0, r1, r2, r3 = W[k, i:wide], W[k + 1, i:wide], W[k + 2, i:wide], W[k + 3, i:wide]
            f0, f1, f2, f3 = r0[0], r1[0], r2[0], r3[0]
            for j in range(len(row)):
                row[j] -= f0 * r0[j] + f1 * r1[j] + f2 * r2[j] + f3 * r3[j]
            k += 4
        while k < i:
            r0 = W[k, i:wide]
            f0 = r0[0]
            for j in range(len(row)):
                row[j] -= f0 * r0[j]
            k += 1
        if not row[0] > 0.0:
            return False
        f0 = 1.0 / np.sqrt(row[0])
        for j in range(len(row)):
            row[j] *= f0
    return True


@numba.njit(cache=True, nogil=True)
def back_rows(W: FloatArray, m: int, x: FloatArray) -> None:
    """Solve U x' = y for the right sides that `reduce_rows` left behind the factor, into the rows of `x` (extra, m)."""
    for i in range(m - 1, -1, -1):
        row = W[i, i + 1 : m]
        inverse_pivot = 1.0 / W[i, i]
        for p in range(len(x)):
            x[p, i] = (W[i, m + p] - dot(row, x[p, i + 1 : m])) * inverse_pivot
