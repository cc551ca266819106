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

from scanstrain.cells import BLOCK_WIDTH, KEY_BITS, Cells, find_key, make_cells, pack, tangents
from scanstrain.neighbourhood.solve import accumulate, solve_in_place

FloatArray = NDArray[np.float64]

CURVATURE_PRIOR = 2.0
"""Standard deviation of surface curvature before the data speak [1/m]: keeps one-sided supports well posed."""
KEEP = 3.0
"""Cells farther from the surface than this many robust standard deviations are left out: a pipe, a cable."""
_TRIMS = 6
"""Fits in which cells are dropped and taken back; with a third of clutter the choice settles in four."""
CLEAN = 5.0
"""A surface whose worst cell lies within so many robust standard deviations has no clutter to trim."""
_TURNS = 3
"""Most refits in the frame of the fit before."""
LEVEL = 1e-5
"""Slope left in its own frame at which a fit stands [1]: a hundredth of the noise of a slope."""
REACH = 2
"""Support radius in block widths of the cells it is fitted on: some 200 cells."""


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
    """List the cells within `radius` of a place, as many as `out` holds; returns how many."""
    base = pack(int(np.floor(x / size)), int(np.floor(y / size)), int(np.floor(z / size)))
    reach = int(np.ceil(radius / size - 1e-9))
    m = 0
    for i in range(-reach, reach + 1):
        for j in range(-reach, reach + 1):
            for k in range(-reach, reach + 1):
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
def _terms(
    o: FloatArray, f: FloatArray, cells: NDArray[np.int64], radius: float, position: FloatArray, rows: FloatArray,
    height: FloatArray,
) -> None:  # fmt: skip
    """Quadratic terms (6, m) and height (m,) of the cells in the frame `f` at `o`, in units of `radius`."""
    for r in range(len(cells)):
        c = cells[r]
        dx, dy, dz = position[c, 0] - o[0], position[c, 1] - o[1], position[c, 2] - o[2]
        x = (dx * f[0, 0] + dy * f[1, 0] + dz * f[2, 0]) / radius
        y = (dx * f[0, 1] + dy * f[1, 1] + dz * f[2, 1]) / radius
        rows[0, r], rows[1, r], rows[2, r] = 1.0, x, y
        rows[3, r], rows[4, r], rows[5, r] = 0.5 * x * x, x * y, 0.5 * y * y
        height[r] = (dx * f[0, 2] + dy * f[1, 2] + dz * f[2, 2]) / radius


@numba.njit(cache=True, nogil=True)
def _quadratic(rows: FloatArray, height: FloatArray, weight: FloatArray, ridge: float, q: FloatArray) -> bool:
    """Weighted least squares of height on the six terms; curvatures carry a ridge."""
    if np.count_nonzero(weight) < 6:
        return False
    A = np.zeros((6, 6))
    q[:] = 0.0
    accumulate(rows, height, weight, A, q)
    for i in range(6):
        A[i, i] += 1e-9 * A[0, 0] + (ridge if i > 2 else 0.0)
    return solve_in_place(A, q, 6)


@numba.njit(cache=True, nogil=True)
def _trim(rows: FloatArray, height: FloatArray, count: FloatArray, q: FloatArray, weight: FloatArray) -> bool:
    """Weigh by count the cells within `KEEP` robust standard deviations of `q`, the rest not at all.

    Returns whether the choice is settled: nothing changed, or the surface is clean and the first fit stands.
    """
    off = height.copy()
    for k in range(6):
        for r in range(len(off)):
            off[r] -= q[k] * rows[k, r]
    off = np.abs(off)
    robust = 1.4826 * np.median(off) + 1e-9
    changed, worst = 0, 0.0
    for r in range(len(off)):
        new = count[r] if off[r] <= KEEP * robust else 0.0
        changed += new != weight[r]
        weight[r] = new
        worst = max(worst, off[r])
    return bool(changed == 0 or worst < CLEAN * robust)


@numba.njit(cache=True, nogil=True)
def _settle(
    o: FloatArray, f: FloatArray, cells: NDArray[np.int64], radius: float, position: FloatArray, count: FloatArray,
    q: FloatArray,
) -> bool:  # fmt: skip
    """Fit the surface to the cells that belong to it, and move `o` and turn `f` onto it."""
    rows, height = np.empty((6, len(cells))), np.empty(len(cells))
    own = count[cells]
    weight = own.copy()
    ridge = (0.1 / (CURVATURE_PRIOR * radius)) ** 2
    _terms(o, f, cells, radius, position, rows, height)
    for _ in range(_TRIMS):
        if not _quadratic(rows, height, weight, ridge, q):
            return False
        if _trim(rows, height, own, q, weight):
            break
    for _ in range(_TURNS):
        for a in range(3):
            o[a] += q[0] * radius * f[a, 2]
        n = f[:, 2] - q[1] * f[:, 0] - q[2] * f[:, 1]
        n /= np.sqrt(np.sum(n * n))
        f[0, 0], f[1, 0], f[2, 0], f[0, 1], f[1, 1], f[2, 1] = tangents(n[0], n[1], n[2])
        f[:, 2] = n
        _terms(o, f, cells, radius, position, rows, height)
        if not _quadratic(rows, height, weight, ridge, q):
            return False
        if q[1] * q[1] + q[2] * q[2] < LEVEL * LEVEL:
            break
    for a in range(3):
        o[a] += q[0] * radius * f[a, 2]
    return True


@numba.njit(cache=True, nogil=True, parallel=True)
def _fit_all(
    places: FloatArray, normals: FloatArray, radius: float, key: NDArray[np.int64], start: NDArray[np.int64],
    size: float, position: FloatArray, count: FloatArray, origin: FloatArray, frame: FloatArray,
    curvature: FloatArray, support: NDArray[np.int64],
) -> None:  # fmt: skip
    for p in numba.prange(len(places)):
        cells = np.empty(512, np.int64)
        q = np.zeros(6)
        origin[p] = places[p]
        f = frame[p]
        f[0, 0], f[1, 0], f[2, 0], f[0, 1], f[1, 1], f[2, 1] = tangents(normals[p, 0], normals[p, 1], normals[p, 2])
        f[:, 2] = normals[p]
        m = gather(places[p, 0], places[p, 1], places[p, 2], radius, key, start, size, position, cells)
        fitted = m >= 6 and _settle(origin[p], f, cells[:m], radius, position, count, q)
        support[p] = m if fitted else 0
        curvature[p] = q[3:] / radius if fitted else np.zeros(3)


def smooth_surface(places: FloatArray, normals: FloatArray, cells: Cells) -> SmoothSurface:
    """Fit a quadratic about every place, over a radius of `REACH` block widths of `cells`.

    Parameters
    ----------
    places : ndarray of shape (m, 3)
        Where to fit, near the surface [m].
    normals : ndarray of shape (m, 3)
        Approximate unit normals; their sign is kept.
    cells : Cells
        Cells whose block width is half of the wanted support radius; see `support_cells`.

    Returns
    -------
    SmoothSurface
    """
    m = len(places)
    out = np.empty((m, 3)), np.empty((m, 3, 3)), np.empty((m, 3)), np.zeros(m, np.int64)
    _fit_all(
        np.ascontiguousarray(places), np.ascontiguousarray(normals), REACH * cells.block_size, cells.key, cells.start,
        cells.block_size, cells.position, cells.count, *out,
    )  # fmt: skip
    return SmoothSurface(*out)


@numba.njit(cache=True, nogil=True)
def heights(
    position: FloatArray, block: NDArray[np.int64], origin: FloatArray, frame: FloatArray, curvature: FloatArray
) -> FloatArray:
    """Height of every cell over the smooth surface of its block [m]."""
    out = np.empty(len(position))
    for c in range(len(position)):
        b = block[c]
        d = position[c] - origin[b]
        x = d[0] * frame[b, 0, 0] + d[1] * frame[b, 1, 0] + d[2] * frame[b, 2, 0]
        y = d[0] * frame[b, 0, 1] + d[1] * frame[b, 1, 1] + d[2] * frame[b, 2, 1]
        z = d[0] * frame[b, 0, 2] + d[1] * frame[b, 1, 2] + d[2] * frame[b, 2, 2]
        out[c] = z - 0.5 * curvature[b, 0] * x * x - curvature[b, 1] * x * y - 0.5 * curvature[b, 2] * y * y
    return out


def support_cells(position: FloatArray, radius: float) -> Cells:
    """Make the cells on which `smooth_surface` fits over a radius [m]."""
    return make_cells(position, radius / (REACH * BLOCK_WIDTH))
