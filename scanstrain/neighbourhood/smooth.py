# SPDX-License-Identifier: MIT
"""The smooth surface about a place: tangent frame and curvature from a quadratic over a wide support.

Slopes of small patches are mostly noise, and noisy slopes look like relief that could fix tangential motion
(regression dilution). So the slope everywhere comes from a support that is wide against the point spacing, and
what is left over it is treated as a random height whose covariance is measured (`covariance`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, Cells, find_key, pack, tangents
from scanstrain.neighbourhood.solve import solve_in_place

FloatArray = NDArray[np.float64]

CURVATURE_PRIOR = 2.0
"""Standard deviation of surface curvature before the data speak [1/m]: keeps one-sided supports well posed."""
_TRIM = (2.0, 2.5, 3.0, 4.0)
"""Residuals beyond so many standard deviations of one fit are left out of the next. The first cuts are sharp because
a pipe or cable before the surface inflates the first standard deviation; the last one keeps all of the surface."""


@dataclass(frozen=True, slots=True)
class SmoothSurface:
    """Local quadratics.

    Parameters
    ----------
    origin : ndarray of shape (m, 3)
        Place on the smooth surface [m].
    frame : ndarray of shape (m, 3, 3)
        Columns: two unit tangents and the unit normal at `origin`.
    curvature : ndarray of shape (m, 3)
        (k11, k12, k22): second derivatives of the height over the tangent plane [1/m].
    support : ndarray of shape (m,)
        Number of coarse cells behind the fit; below 6 the frame is not to be trusted.
    """

    origin: FloatArray
    frame: FloatArray
    curvature: FloatArray
    support: NDArray[np.int64]


@numba.njit(cache=True, nogil=True)
def gather(
    x: float, y: float, z: float, radius: float, key: NDArray[np.int64], start: NDArray[np.int64], size: float,
    position: FloatArray, out: NDArray[np.int64],
) -> int:  # fmt: skip
    """List the cells within `radius` (at most a block width) of a place; returns how many."""
    base = pack(int(np.floor(x / size)), int(np.floor(y / size)), int(np.floor(z / size)))
    m = 0
    for i in range(-1, 2):
        for j in range(-1, 2):
            for k in range(-1, 2):
                b = find_key(key, base + (i << (2 * KEY_BITS)) + (j << KEY_BITS) + k)
                if b < 0:
                    continue
                for c in range(start[b], start[b + 1]):
                    dx, dy, dz = position[c, 0] - x, position[c, 1] - y, position[c, 2] - z
                    if dx * dx + dy * dy + dz * dz <= radius * radius and m < len(out):
                        out[m] = c
                        m += 1
    return m


@numba.njit(cache=True, nogil=True)
def _quadratic(
    o: FloatArray, f: FloatArray, cells: NDArray[np.int64], m: int, position: FloatArray, count: FloatArray,
    radius: float, previous: FloatArray, limit: float,
) -> tuple[FloatArray, float]:  # fmt: skip
    """Weighted quadratic of height in the frame `f` at `o`; cells farther than `limit` from `previous` are out.

    Returns (height, slope 1, slope 2, k11, k12, k22) in units of `radius` and the residual standard deviation.
    """
    A = np.zeros((6, 6))
    b = np.zeros(6)
    ridge = (0.1 / (CURVATURE_PRIOR * radius)) ** 2
    rows = np.empty((m, 7))
    used = 0
    for r in range(m):
        c = cells[r]
        dx, dy, dz = position[c, 0] - o[0], position[c, 1] - o[1], position[c, 2] - o[2]
        x1 = (dx * f[0, 0] + dy * f[1, 0] + dz * f[2, 0]) / radius
        x2 = (dx * f[0, 1] + dy * f[1, 1] + dz * f[2, 1]) / radius
        h = (dx * f[0, 2] + dy * f[1, 2] + dz * f[2, 2]) / radius
        row = np.array([1.0, x1, x2, 0.5 * x1 * x1, x1 * x2, 0.5 * x2 * x2])
        off = h
        for k in range(6):
            off -= row[k] * previous[k]
        if abs(off) > limit:
            continue
        rows[used, :6] = row
        rows[used, 6] = h
        used += 1
        for i in range(6):
            b[i] += count[c] * row[i] * h
            for j in range(i + 1):
                A[i, j] += count[c] * row[i] * row[j]
    total = A[0, 0]
    for i in range(6):
        A[i, i] += 1e-9 * total + (ridge if i > 2 else 0.0)
    if used < 6 or not solve_in_place(A, b, 6):
        return np.full(6, np.nan), 0.0
    ss = 0.0
    for r in range(used):
        e = rows[r, 6]
        for k in range(6):
            e -= rows[r, k] * b[k]
        ss += e * e
    return b, np.sqrt(ss / max(used - 6, 1))


@numba.njit(cache=True, nogil=True, parallel=True)
def _fit_all(
    places: FloatArray, normals: FloatArray, radius: float, key: NDArray[np.int64], start: NDArray[np.int64],
    size: float, position: FloatArray, count: FloatArray, origin: FloatArray, frame: FloatArray,
    curvature: FloatArray, support: NDArray[np.int64],
) -> None:  # fmt: skip
    for p in numba.prange(len(places)):
        cells = np.empty(512, np.int64)
        o = places[p].copy()
        f = np.empty((3, 3))
        f[0, 0], f[1, 0], f[2, 0], f[0, 1], f[1, 1], f[2, 1] = tangents(normals[p, 0], normals[p, 1], normals[p, 2])
        f[:, 2] = normals[p]
        m = gather(o[0], o[1], o[2], radius, key, start, size, position, cells)
        none = np.zeros(6)
        q, sd = _quadratic(o, f, cells, m, position, count, radius, none, 1e30)
        for trim in _TRIM:
            if np.isnan(q[0]):
                break
            limit = trim * sd + 1e-9
            for a in range(3):
                o[a] += q[0] * radius * f[a, 2]
            n0 = f[0, 2] - q[1] * f[0, 0] - q[2] * f[0, 1]
            n1 = f[1, 2] - q[1] * f[1, 0] - q[2] * f[1, 1]
            n2 = f[2, 2] - q[1] * f[2, 0] - q[2] * f[2, 1]
            s = np.sqrt(n0 * n0 + n1 * n1 + n2 * n2)
            f[0, 2], f[1, 2], f[2, 2] = n0 / s, n1 / s, n2 / s
            f[0, 0], f[1, 0], f[2, 0], f[0, 1], f[1, 1], f[2, 1] = tangents(n0 / s, n1 / s, n2 / s)
            # In the new tangents the old curvatures no longer serve, so the first refit only tests the plane part.
            near = np.zeros(6)
            near[3] = near[5] = 0.5 * (q[3] + q[5])
            spread = 0.5 * np.sqrt((q[3] - q[5]) ** 2 + 4.0 * q[4] * q[4])
            q, sd = _quadratic(o, f, cells, m, position, count, radius, near, limit + 0.5 * spread)
        if np.isnan(q[0]):
            support[p] = 0
            q[:] = 0.0
        else:
            support[p] = m
        for a in range(3):
            o[a] += q[0] * radius * f[a, 2]
        origin[p] = o
        frame[p] = f
        curvature[p] = q[3:] / radius


def smooth_surface(places: FloatArray, normals: FloatArray, cells: Cells) -> SmoothSurface:
    """Fit a quadratic about every place, over a radius of one block width of `cells`.

    Parameters
    ----------
    places : ndarray of shape (m, 3)
        Where to fit, near the surface [m].
    normals : ndarray of shape (m, 3)
        Approximate unit normals; their sign is kept.
    cells : Cells
        Cells whose block width is the wanted support radius.

    Returns
    -------
    SmoothSurface
    """
    m = len(places)
    out = np.empty((m, 3)), np.empty((m, 3, 3)), np.empty((m, 3)), np.zeros(m, np.int64)
    _fit_all(
        np.ascontiguousarray(places), np.ascontiguousarray(normals), cells.block_size, cells.key, cells.start,
        cells.block_size, cells.position, cells.count, *out,
    )  # fmt: skip
    return SmoothSurface(*out)
