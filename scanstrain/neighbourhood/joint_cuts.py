# SPDX-License-Identifier: MIT
"""What of a patch lies beyond a joint: the straight way from the gauge crosses a piece of its line.

A crossing is judged in the tangent plane of the gauge, so past the end of a line both sides are one patch again.
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SAME_HEIGHT = 0.2
"""Farthest that a piece of a joint stands from the surface of a gauge, in radii: beyond it is on another sheet."""


WIDEST = 1.5
"""Largest patch that is cut, in radii of a gauge: that on which shared noise is judged."""


@dataclass(frozen=True, slots=True)
class Cuts:
    """The pieces of joints about every gauge, in its own tangent coordinates.

    Parameters
    ----------
    pieces : ndarray of shape (s, 5)
        Both ends (x1, x2, x1, x2), and half the width of the strip about the piece that belongs to neither side [m].
    start : ndarray of shape (g + 1,)
        Pieces of gauge i are `pieces[start[i]:start[i + 1]]`.
    """

    pieces: FloatArray
    start: IntArray


def no_cuts(gauges: int) -> Cuts:
    """Return the cuts of a surface without joints."""
    return Cuts(np.zeros((0, 5)), np.zeros(gauges + 1, np.int64))


def cuts_at(
    origin: FloatArray, frame: FloatArray, curvature: FloatArray, radius: float, ends: FloatArray, half: FloatArray
) -> Cuts:
    """Find the pieces of joints about every gauge.

    Parameters
    ----------
    origin, frame, curvature : ndarray of shape (g, 3), (g, 3, 3), (g, 3)
        Places, frames and surface curvatures of the gauges.
    radius : float
        Of a patch [m].
    ends : ndarray of shape (p, 2, 3)
        Both ends of every piece, on the surface, local coordinates [m].
    half : ndarray of shape (p,)
        Half the width of the strip about a piece that belongs to neither side [m].
    """
    from scipy.spatial import cKDTree

    if not len(ends):
        return no_cuts(len(origin))
    longest = float(np.linalg.norm(ends[:, 1] - ends[:, 0], axis=1).max())
    near = cKDTree(ends.mean(axis=1)).query_ball_point(origin, WIDEST * radius + longest, return_sorted=True)
    gauge = np.repeat(np.arange(len(origin)), [len(found) for found in near])
    piece = np.concatenate([np.asarray(found, np.int64) for found in near])
    local = np.einsum("sea,sab->seb", ends[piece] - origin[gauge][:, None], frame[gauge])
    x, y, z = np.moveaxis(local, -1, 0)
    k = curvature[gauge].T[:, :, None]
    height = z - 0.5 * k[0] * x * x - k[1] * x * y - 0.5 * k[2] * y * y
    same = (np.abs(height) < SAME_HEIGHT * radius).all(axis=1)
    pieces = np.column_stack([local[same][:, 0, :2], local[same][:, 1, :2], half[piece[same]]])
    start = np.searchsorted(gauge[same], np.arange(len(origin) + 1)).astype(np.int64)
    return Cuts(np.ascontiguousarray(pieces), start)


@numba.njit(cache=True, nogil=True)
def beyond(x: float, y: float, pieces: FloatArray, strip: bool) -> bool:
    """Whether the way from the origin to (x, y) crosses a piece, or, with `strip`, ends in the strip about one."""
    for p in range(len(pieces)):
        ax, ay, bx, by, half = pieces[p]
        dx, dy = bx - ax, by - ay
        from_gauge, from_place = dy * ax - dx * ay, dx * (y - ay) - dy * (x - ax)
        if from_gauge * from_place < 0.0 and (x * ay - y * ax) * (x * by - y * bx) <= 0.0:
            return True
        if strip:
            part = ((x - ax) * dx + (y - ay) * dy) / max(dx * dx + dy * dy, 1e-300)
            part = min(max(part, 0.0), 1.0)
            if (x - ax - part * dx) ** 2 + (y - ay - part * dy) ** 2 < half * half:
                return True
    return False


@numba.njit(cache=True, nogil=True)
def keep_own_side(
    o: FloatArray, f: FloatArray, pieces: FloatArray, table: FloatArray, members: IntArray, found: int
) -> int:
    """Drop the members of a patch that lie beyond a joint or in its strip; `table` begins with their places."""
    if len(pieces) == 0:
        return found
    m = 0
    for r in range(found):
        c = members[r]
        d0, d1, d2 = table[c, 0] - o[0], table[c, 1] - o[1], table[c, 2] - o[2]
        x, y = d0 * f[0, 0] + d1 * f[1, 0] + d2 * f[2, 0], d0 * f[0, 1] + d1 * f[1, 1] + d2 * f[2, 1]
        if not beyond(x, y, pieces, True):
            members[m] = c
            m += 1
    return m


@numba.njit(cache=True, nogil=True, parallel=True)
def keep_visible(
    position: FloatArray, nearest: IntArray, origin: FloatArray, frame: FloatArray, pieces: FloatArray, start: IntArray
) -> None:  # fmt: skip
    """Replace those of the nearest gauges of every cell that lie beyond a joint by the first that does not."""
    for c in numba.prange(len(position)):
        first = -1
        hidden = np.zeros(nearest.shape[1], np.bool_)
        for q in range(nearest.shape[1]):
            g = nearest[c, q]
            f, d = frame[g], position[c] - origin[g]
            x, y = d[0] * f[0, 0] + d[1] * f[1, 0] + d[2] * f[2, 0], d[0] * f[0, 1] + d[1] * f[1, 1] + d[2] * f[2, 1]
            hidden[q] = beyond(x, y, pieces[start[g] : start[g + 1]], False)
            if first < 0 and not hidden[q]:
                first = g
        for q in range(nearest.shape[1]):
            if first >= 0 and hidden[q]:
                nearest[c, q] = first
