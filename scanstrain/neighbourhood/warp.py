# SPDX-License-Identifier: MIT
"""From gauges to cells: the present displacement of every cell, blended from the affine maps of nearby gauges."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_NEAREST = 4


def nearest_gauges(position: FloatArray, origin: FloatArray) -> IntArray:
    """Return the few nearest gauges of every cell, shape (c, k); missing ones hold len(origin)."""
    from scipy.spatial import cKDTree

    k = min(_NEAREST, len(origin))
    _, index = cKDTree(origin).query(position, k=k, workers=-1)
    return np.ascontiguousarray(index.reshape(len(position), k), dtype=np.int64)


@numba.njit(cache=True, nogil=True, parallel=True)
def blend(
    position: FloatArray, nearest: IntArray, origin: FloatArray, frame: FloatArray, held: FloatArray, radius: float,
    spacing: float, out: FloatArray,
) -> None:  # fmt: skip
    """Fill `out` (c, 3) with the displacement of every cell [m], smooth inverse-square weights."""
    for c in numba.prange(len(position)):
        total = 0.0
        u = np.zeros(3)
        for q in range(nearest.shape[1]):
            g = nearest[c, q]
            f, v = frame[g], held[g]
            d0, d1, d2 = position[c, 0] - origin[g, 0], position[c, 1] - origin[g, 1], position[c, 2] - origin[g, 2]
            x1 = (d0 * f[0, 0] + d1 * f[1, 0] + d2 * f[2, 0]) / radius
            x2 = (d0 * f[0, 1] + d1 * f[1, 1] + d2 * f[2, 1]) / radius
            x3 = (d0 * f[0, 2] + d1 * f[1, 2] + d2 * f[2, 2]) / radius
            w = 1.0 / (d0 * d0 + d1 * d1 + d2 * d2 + 0.04 * spacing * spacing) ** 2
            u0 = v[0] + v[3] * x1 + v[4] * x2 - v[7] * x3
            u1 = v[1] + v[5] * x1 + v[6] * x2 - v[8] * x3
            u2 = v[2] + v[7] * x1 + v[8] * x2 + 0.5 * v[9] * x1 * x1 + v[10] * x1 * x2 + 0.5 * v[11] * x2 * x2
            for a in range(3):
                u[a] += w * (u0 * f[a, 0] + u1 * f[a, 1] + u2 * f[a, 2])
            total += w
        for a in range(3):
            out[c, a] = u[a] / total
