# SPDX-License-Identifier: MIT
"""Differences of neighbouring cells, summed by place and distance: what variograms are made of."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.neighbourhood.smooth import SmoothSurface, gather

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LAGS = 6.0
"""Longest lag of the variogram, in cells: the distances over which a local prediction weighs its neighbours."""
BINS = 10
SAMPLED = 20_000
"""About so many blocks give their pairs: enough for the local variograms of any scan that fits in memory."""
HEIGHT, GREY = 2, 3
"""Columns of the sums over pairs."""


@dataclass(frozen=True, slots=True)
class Pairs:
    """Differences of neighbouring cells of one piece of a scan.

    Parameters
    ----------
    sums : ndarray of shape (b, k, 5)
        As of `_pair_sums`.
    region : ndarray of shape (b,)
        Region of every block.
    neighbours : ndarray of shape (r, 27)
        As of `_regions`.
    pooled : ndarray of shape (r, k, 5)
        Sums over every region and its neighbours.
    """

    sums: FloatArray
    region: IntArray
    neighbours: IntArray
    pooled: FloatArray


@numba.njit(cache=True, nogil=True, parallel=True)
def _pair_sums(
    origin: FloatArray, frame: FloatArray, curvature: FloatArray, support: IntArray, reach: float, gate: float,
    key: IntArray, start: IntArray, size: float, position: FloatArray, intensity: FloatArray, count: FloatArray,
    chosen: IntArray, out: FloatArray,
) -> None:  # fmt: skip
    """Per block and lag bin: pairs, noise share, half squared differences of height and of intensity, lag (sums).

    A pair has its first cell in one of the blocks `chosen`, the second anywhere within a block width.
    """
    bins = out.shape[1]
    for turn in numba.prange(len(chosen)):
        b = chosen[turn]
        if support[b] < 6:
            continue
        cells = np.empty(1024, np.int64)
        s, t, h, own = np.empty(1024), np.empty(1024), np.empty(1024), np.empty(1024, np.bool_)
        found = gather(origin[b, 0], origin[b, 1], origin[b, 2], size, key, start, size, position, cells)
        m = 0
        for r in range(found):
            c = cells[r]
            d0, d1, d2 = position[c, 0] - origin[b, 0], position[c, 1] - origin[b, 1], position[c, 2] - origin[b, 2]
            x = d0 * frame[b, 0, 0] + d1 * frame[b, 1, 0] + d2 * frame[b, 2, 0]
            y = d0 * frame[b, 0, 1] + d1 * frame[b, 1, 1] + d2 * frame[b, 2, 1]
            z = d0 * frame[b, 0, 2] + d1 * frame[b, 1, 2] + d2 * frame[b, 2, 2]
            z -= 0.5 * curvature[b, 0] * x * x + curvature[b, 1] * x * y + 0.5 * curvature[b, 2] * y * y
            if abs(z) < gate:
                cells[m], s[m], t[m], h[m] = c, x, y, z
                own[m] = start[b] <= c < start[b + 1]
                m += 1
        for i in range(m):
            if not own[i]:
                continue
            for j in range(m):
                if i == j or (own[j] and j > i):
                    continue
                r = np.sqrt((s[i] - s[j]) ** 2 + (t[i] - t[j]) ** 2)
                k = int(r / reach * bins)
                if k >= bins:
                    continue
                ci, cj = cells[i], cells[j]
                out[b, k, 0] += 1.0
                out[b, k, 1] += 0.5 * (1.0 / count[ci] + 1.0 / count[cj])
                out[b, k, 2] += 0.5 * (h[i] - h[j]) ** 2
                if len(intensity):
                    out[b, k, 3] += 0.5 * (intensity[ci] - intensity[cj]) ** 2
                out[b, k, 4] += r


def _regions(centre: FloatArray, normal: FloatArray, width: float) -> tuple[IntArray, IntArray]:
    """Number the region of every block, and list the neighbours of every region.

    A region is a voxel of `width` and one of three main directions of the normal, so that a floor is not judged
    together with the wall that stands on it. Neighbours, shape (r, 27), hold -1 where there is none.
    """
    facing = np.abs(normal).argmax(axis=1)
    place = np.floor(centre / width).astype(np.int64)
    place -= place.min(axis=0) - 1
    extent = place.max(axis=0) + 2
    code = ((facing * extent[0] + place[:, 0]) * extent[1] + place[:, 1]) * extent[2] + place[:, 2]
    unique, region = np.unique(code, return_inverse=True)
    steps = [(i * extent[1] + j) * extent[2] + k for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]
    wanted = unique[:, None] + np.array(steps)
    found = np.minimum(np.searchsorted(unique, wanted), len(unique) - 1)
    return region, np.where(unique[found] == wanted, found, -1)


def pool(values: FloatArray, region: IntArray, neighbours: IntArray) -> FloatArray:
    """Sum block values over regions and their neighbours."""
    flat = values.reshape(len(values), -1)
    sums = np.stack([np.bincount(region, column, len(neighbours)) for column in flat.T], axis=1)
    padded = np.vstack([sums, np.zeros(sums.shape[1])])
    return padded[neighbours].sum(axis=1).reshape(len(neighbours), *values.shape[1:])


def count_pairs(cells: Cells, surface: SmoothSurface, *, gate: float, region_width: float, stride: int) -> Pairs:
    """Sum the differences of neighbouring cells.

    Parameters
    ----------
    cells : Cells
    surface : SmoothSurface
        Smooth surface at the blocks of `cells`.
    gate : float
        Heights beyond this are clutter and left out [m].
    region_width : float
        Noise and sill are pooled over about three times this width [m].
    stride : int
        One in so many blocks is judged, whichever piece of a scan it is seen in.
    """
    grey = cells.intensity if cells.intensity is not None else np.empty(0)
    sums = np.zeros((len(cells.key), BINS, 5))
    chosen = np.flatnonzero(_scattered(cells.key) % np.uint64(stride) == 0)
    _pair_sums(
        surface.origin, surface.frame, surface.curvature, surface.support, LAGS * cells.resolution, gate, cells.key,
        cells.start, cells.block_size, cells.position, grey, cells.count, chosen, sums,
    )  # fmt: skip
    region, neighbours = _regions(cells.centre, surface.frame[:, :, 2], region_width)
    return Pairs(sums, region, neighbours, pool(sums, region, neighbours))


def stride_of(blocks: int) -> int:
    """One in how many of so many blocks is judged."""
    return max(1, blocks // SAMPLED)


def _scattered(key: IntArray) -> NDArray[np.uint64]:
    """Numbers that follow from the keys of blocks but in no regular way (multiplicative hashing, Knuth)."""
    mixed = key.astype(np.uint64) * np.uint64(0x9E3779B97F4A7C15)
    return np.asarray(mixed ^ (mixed >> np.uint64(29)))
