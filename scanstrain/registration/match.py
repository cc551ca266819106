# SPDX-License-Identifier: MIT
"""Matches between the blocks of two surfaces and the observation rows that follow from them."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import pack
from scanstrain.registration.rigid import inverse
from scanstrain.registration.surfaces import BORDER, UNUSABLE, Surface

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

UNKNOWNS = 7
"""Rotation x lever arm (3), translation (3), scale x lever arm."""
MIN_COSINE = 0.94
"""Normals that differ by more than 20 degrees do not belong to one surface."""
MAX_OFFSET, BORDER_OFFSET = 0.75, 0.3
"""Farthest partner along the surface, in block widths: inside it, and at its border."""


@dataclass(frozen=True, slots=True)
class Metric:
    """Where rotations are taken about and the length that turns them into metres.

    Parameters
    ----------
    pivot : ndarray of shape (3,)
        Local point [m].
    arm : float
        Distance of the farthest used point from the pivot [m].
    """

    pivot: FloatArray
    arm: float


@dataclass(frozen=True, slots=True)
class Rows:
    """Linearised symmetric point-to-plane rows: `residual = row @ unknowns + noise`.

    Parameters
    ----------
    row : ndarray of shape (m, 7)
        For the unknowns in metres: rotation times arm, translation, scale times arm.
    half : ndarray of shape (m, 7)
        The same with half the difference of the two normals in place of their mean. The noise of the normals is the
        same in both, the surface itself is only in `row`.
    residual : ndarray of shape (m,)
        Reference minus current along the mean normal, whose largest component is positive [m].
    sd : ndarray of shape (m,)
        A-priori standard deviation of the residual [m].
    place, normal : ndarray of shape (m, 3)
        Reference block centre [m] and its normal.
    block : ndarray of shape (m,), int64
        Reference block.
    """

    row: FloatArray
    half: FloatArray
    residual: FloatArray
    sd: FloatArray
    place: FloatArray
    normal: FloatArray
    block: IntArray


@numba.njit(cache=True, nogil=True)
def _first_at_least(keys: IntArray, key: int) -> int:
    low, high = 0, len(keys)
    while low < high:
        middle = (low + high) >> 1
        if keys[middle] < key:
            low = middle + 1
        else:
            high = middle
    return low


@numba.njit(cache=True, nogil=True)
def _nearest(
    centre: FloatArray,
    normal: FloatArray,
    state: NDArray[np.uint8],
    keys: IntArray,
    size: float,
    other_centre: FloatArray,
    other_normal: FloatArray,
    other_state: NDArray[np.uint8],
    min_cosine: float,
) -> IntArray:
    """For every block, in the other's frame, the nearest compatible block of the other, -1 without one."""
    out = np.full(len(centre), -1, np.int64)
    for b in range(len(centre)):
        if state[b] == UNUSABLE:
            continue
        x, y, z = centre[b, 0], centre[b, 1], centre[b, 2]
        i0, j0, k0 = int(np.floor(x / size)), int(np.floor(y / size)), int(np.floor(z / size))
        best = np.inf
        for i in range(i0 - 1, i0 + 2):
            for j in range(j0 - 1, j0 + 2):
                # The three voxels along z have consecutive keys: one search finds them all.
                last = pack(i, j, k0 + 1)
                o = _first_at_least(keys, last - 2)
                while o < len(keys) and keys[o] <= last:
                    cosine = 0.0
                    distance = 0.0
                    for a in range(3):
                        cosine += normal[b, a] * other_normal[o, a]
                        distance += (centre[b, a] - other_centre[o, a]) ** 2
                    if other_state[o] != UNUSABLE and distance < best and abs(cosine) >= min_cosine:
                        best = distance
                        out[b] = o
                    o += 1
    return out


@numba.njit(cache=True, nogil=True)
def _rows(
    pairs: IntArray,
    place: FloatArray,
    normal: FloatArray,
    moved: FloatArray,
    moved_normal: FloatArray,
    pivot: FloatArray,
    arm: float,
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Rows, half-difference rows, residuals and squared tangential offsets of (reference, current) pairs."""
    m = len(pairs)
    row, half = np.empty((m, 7)), np.empty((m, 7))
    residual, offset = np.empty(m), np.empty(m)
    n, d, g, c = np.empty(3), np.empty(3), np.empty(3), np.empty(3)
    for i in range(m):
        p, q = pairs[i, 0], pairs[i, 1]
        cosine = 0.0
        for a in range(3):
            cosine += normal[p, a] * moved_normal[q, a]
        # One sign per facing, so that rows of a patch can be averaged: the largest component is positive.
        side = 0
        for a in range(1, 3):
            if abs(normal[p, a]) > abs(normal[p, side]):
                side = a
        flip = 1.0 if normal[p, side] >= 0 else -1.0
        sign = flip if cosine >= 0 else -flip
        length = np.sqrt(2.0 + 2.0 * abs(cosine))
        across = 0.0
        squared = 0.0
        for a in range(3):
            n[a] = (flip * normal[p, a] + sign * moved_normal[q, a]) / length
            d[a] = (flip * normal[p, a] - sign * moved_normal[q, a]) / length
            g[a] = place[p, a] - moved[q, a]
            c[a] = ((place[p, a] + moved[q, a]) / 2 - pivot[a]) / arm
            across += n[a] * g[a]
            squared += g[a] * g[a]
        residual[i] = across
        offset[i] = max(squared - across * across, 0.0)
        for a in range(3):
            e, f = (a + 1) % 3, (a + 2) % 3
            row[i, a] = c[e] * n[f] - c[f] * n[e]
            half[i, a] = c[e] * d[f] - c[f] * d[e]
            row[i, 3 + a] = n[a]
            half[i, 3 + a] = d[a]
        # A current epoch that is larger by s lies s (x - pivot) outside, which the residual sees with a minus.
        row[i, 6] = -(c[0] * n[0] + c[1] * n[1] + c[2] * n[2])
        half[i, 6] = -(c[0] * d[0] + c[1] * d[1] + c[2] * d[2])
    return row, half, residual, offset


def nearest(
    reference: Surface, current: Surface, T_ref_grid: FloatArray, *, min_cosine: float = MIN_COSINE
) -> IntArray:
    """Return for every reference block the nearest compatible current block, or -1, shape (b,)."""
    T = inverse(T_ref_grid)
    centre = reference.cells.centre @ T[:3, :3].T + T[:3, 3]
    normal = reference.cells.normal @ T[:3, :3].T
    theirs = current.cells
    found: IntArray = _nearest(
        centre,
        normal,
        reference.state,
        theirs.key,
        current.width,
        theirs.centre,
        theirs.normal,
        current.state,
        min_cosine,
    )
    return found


def pair(reference: Surface, current: Surface, T_ref_grid: FloatArray) -> IntArray:
    """Return matches as rows of (reference block, current block), shape (m, 2).

    Pairs that lie too far apart along the surface are left out. At the border of a cloud the limit is narrow: there
    the nearest block may be near only because the cloud ends.
    """
    other = nearest(reference, current, T_ref_grid)
    p = np.flatnonzero(other >= 0)
    q = other[p]
    R, t = T_ref_grid[:3, :3], T_ref_grid[:3, 3]
    gap = reference.cells.centre[p] - (current.cells.centre[q] @ R.T + t)
    normal = reference.cells.normal[p]
    along = np.linalg.norm(gap - normal * (gap * normal).sum(axis=1, keepdims=True), axis=1)
    border = (reference.state[p] == BORDER) | (current.state[q] == BORDER)
    near = along < np.where(border, BORDER_OFFSET, MAX_OFFSET) * reference.width
    return np.stack([p[near], q[near]], axis=1)


def observe(reference: Surface, current: Surface, pairs: IntArray, T_ref_grid: FloatArray, metric: Metric) -> Rows:
    """Make the observation rows of matches at a pose.

    Each row is n.(p - q) with n the mean of the two unit normals (Chen & Medioni 1992; symmetric form of Rusinkiewicz
    2019, both from memory): two places on one circle give zero at any distance, so curvature leaves no bias.

    Parameters
    ----------
    reference, current : Surface
    pairs : ndarray of shape (m, 2)
        Blocks that match.
    T_ref_grid : ndarray of shape (4, 4)
        Takes the current surface's grid frame to the reference frame.
    metric : Metric

    Returns
    -------
    Rows
    """
    R, t = T_ref_grid[:3, :3], T_ref_grid[:3, 3]
    mine, theirs = reference.cells, current.cells
    row, half, residual, offset = _rows(
        pairs,
        mine.centre,
        mine.normal,
        theirs.centre @ R.T + t,
        theirs.normal @ R.T,
        metric.pivot,
        metric.arm,
    )
    p, q = pairs.T
    variance = reference.variance[p] + current.variance[q]
    variance = variance + offset * (reference.tilt[p] + current.tilt[q]) / 4
    return Rows(
        row=row,
        half=half,
        residual=residual,
        sd=np.sqrt(variance),
        place=mine.centre[p],
        normal=mine.normal[p],
        block=p,
    )
