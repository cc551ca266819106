# SPDX-License-Identifier: MIT
"""The surface model that all stages share: blocks with a tangent plane, and small cells inside them.

A cloud is hashed twice. First into cubic *blocks* a few point spacings wide, whose merged moments give a tangent
plane. Then the points of a block are projected onto that plane and averaged in square *cells* about one spacing
wide. Projection comes first so that noise along the normal cannot push a point into another cell: averaging
never selects by the sign of the error. Duplicate points and dense places end up in one cell with a larger count.
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

BLOCK_WIDTH = 4
"""Block width in cells: wide enough that a block and its neighbours hold the 30-60 cells a plane and a local
prediction need, narrow enough that curvature stays small inside one."""

KEY_BITS = 20
"""Bits of one coordinate in a packed voxel index: neighbours are found by adding (i << 2 bits) + (j << bits) + k."""
_BIAS = 1 << (KEY_BITS - 1)
_KEY_LIMIT = _BIAS - 2


@dataclass(frozen=True, slots=True)
class Cells:
    """Blocks and cells of one epoch, cells sorted by block.

    Parameters
    ----------
    resolution : float
        Cell width [m]; blocks are `BLOCK_WIDTH` times as wide.
    key : ndarray of shape (b,), int64
        Packed voxel index of every block, ascending: look up with `find_block`.
    start : ndarray of shape (b + 1,), int64
        Cells of block i are `start[i]:start[i + 1]`.
    centre : ndarray of shape (b, 3)
        Mean of the block's points [m].
    normal : ndarray of shape (b, 3)
        Unit normal of the merged plane (sign arbitrary until `orient` is applied).
    roughness : ndarray of shape (b,)
        Standard deviation of single points about the merged plane [m].
    planarity : ndarray of shape (b,)
        Smallest over middle eigenvalue of the merged scatter: 0 for a plane, towards 1 for an edge or a clump.
    weight : ndarray of shape (b,)
        Number of points in the block.
    position : ndarray of shape (c, 3)
        Mean of the points of each cell [m].
    intensity : ndarray of shape (c,) or None
        Mean intensity of each cell.
    count : ndarray of shape (c,)
        Points in each cell.
    block : ndarray of shape (c,), int64
        Block of each cell.
    """

    resolution: float
    key: IntArray
    start: IntArray
    centre: FloatArray
    normal: FloatArray
    roughness: FloatArray
    planarity: FloatArray
    weight: FloatArray
    position: FloatArray
    intensity: FloatArray | None
    count: FloatArray
    block: IntArray

    @property
    def block_size(self) -> float:
        """Block width [m]."""
        return self.resolution * BLOCK_WIDTH

    def __len__(self) -> int:
        return len(self.position)


@numba.njit(cache=True, nogil=True, inline="always")
def pack(i: int, j: int, k: int) -> int:
    """Pack a voxel index into one ordered integer."""
    return ((i + _BIAS) << (2 * KEY_BITS)) | ((j + _BIAS) << KEY_BITS) | (k + _BIAS)


@numba.njit(cache=True, nogil=True)
def find_key(keys: IntArray, key: int) -> int:
    """Return the position of `key` in ascending `keys`, or -1."""
    low, high = 0, len(keys)
    while low < high:
        middle = (low + high) >> 1
        if keys[middle] < key:
            low = middle + 1
        else:
            high = middle
    if low < len(keys) and keys[low] == key:
        return low
    return -1


@numba.njit(cache=True, nogil=True)
def find_block(keys: IntArray, size: float, x: float, y: float, z: float) -> int:
    """Return the block that contains a place, or -1."""
    return find_key(keys, pack(int(np.floor(x / size)), int(np.floor(y / size)), int(np.floor(z / size))))


@numba.njit(cache=True, nogil=True)
def voxel_keys(points: FloatArray, size: float) -> IntArray:
    """Return the packed voxel index of every point, for voxels of width `size` [m]."""
    keys = np.empty(len(points), np.int64)
    for i in range(len(points)):
        keys[i] = pack(
            int(np.floor(points[i, 0] / size)),
            int(np.floor(points[i, 1] / size)),
            int(np.floor(points[i, 2] / size)),
        )
    return keys


def group(keys: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Sort keys and find the runs of equal ones.

    Returns
    -------
    order : ndarray of shape (n,)
        Stable order that sorts `keys`.
    unique : ndarray of shape (u,)
        Distinct keys, ascending.
    start : ndarray of shape (u + 1,)
        Run i of the sorted keys is `start[i]:start[i + 1]`.
    """
    order = np.argsort(keys, kind="stable")
    ordered = keys[order]
    first = np.flatnonzero(np.r_[True, ordered[1:] != ordered[:-1]])
    return order, ordered[first], np.r_[first, len(keys)].astype(np.int64)


@numba.njit(cache=True, nogil=True, parallel=True)
def _block_moments(points: FloatArray, order: IntArray, start: IntArray) -> FloatArray:
    """Per run: count, mean (3), central scatter (xx, yy, zz, xy, xz, yz)."""
    out = np.zeros((len(start) - 1, 10))
    for b in numba.prange(len(start) - 1):
        n = start[b + 1] - start[b]
        mx = my = mz = 0.0
        for r in range(start[b], start[b + 1]):
            p = order[r]
            mx += points[p, 0]
            my += points[p, 1]
            mz += points[p, 2]
        mx, my, mz = mx / n, my / n, mz / n
        sxx = syy = szz = sxy = sxz = syz = 0.0
        for r in range(start[b], start[b + 1]):
            p = order[r]
            dx, dy, dz = points[p, 0] - mx, points[p, 1] - my, points[p, 2] - mz
            sxx += dx * dx
            syy += dy * dy
            szz += dz * dz
            sxy += dx * dy
            sxz += dx * dz
            syz += dy * dz
        out[b, 0], out[b, 1], out[b, 2], out[b, 3] = n, mx, my, mz
        out[b, 4], out[b, 5], out[b, 6], out[b, 7], out[b, 8], out[b, 9] = sxx, syy, szz, sxy, sxz, syz
    return out


@numba.njit(cache=True, nogil=True, parallel=True)
def _merge_neighbours(keys: IntArray, moments: FloatArray) -> FloatArray:
    """Merge the moments of every block with those of its 26 neighbours."""
    merged = moments.copy()
    for b in numba.prange(len(keys)):
        n, mx, my, mz = 0.0, 0.0, 0.0, 0.0
        found = np.empty(27, np.int64)
        m = 0
        for i in range(-1, 2):
            for j in range(-1, 2):
                for k in range(-1, 2):
                    other = find_key(keys, keys[b] + (i << (2 * KEY_BITS)) + (j << KEY_BITS) + k)
                    if other >= 0:
                        found[m] = other
                        m += 1
        for f in range(m):
            o = found[f]
            n += moments[o, 0]
            mx += moments[o, 0] * moments[o, 1]
            my += moments[o, 0] * moments[o, 2]
            mz += moments[o, 0] * moments[o, 3]
        mx, my, mz = mx / n, my / n, mz / n
        s = np.zeros(6)
        for f in range(m):
            o = found[f]
            w = moments[o, 0]
            dx, dy, dz = moments[o, 1] - mx, moments[o, 2] - my, moments[o, 3] - mz
            s[0] += moments[o, 4] + w * dx * dx
            s[1] += moments[o, 5] + w * dy * dy
            s[2] += moments[o, 6] + w * dz * dz
            s[3] += moments[o, 7] + w * dx * dy
            s[4] += moments[o, 8] + w * dx * dz
            s[5] += moments[o, 9] + w * dy * dz
        merged[b, 0], merged[b, 1], merged[b, 2], merged[b, 3] = n, mx, my, mz
        merged[b, 4:] = s
    return merged


def _planes(merged: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Normal, standard deviation about the plane and planarity from merged moments."""
    n = merged[:, 0]
    xx, yy, zz, xy, xz, yz = merged[:, 4:].T
    scatter = np.stack([xx, xy, xz, xy, yy, yz, xz, yz, zz], axis=1).reshape(-1, 3, 3)
    values, vectors = np.linalg.eigh(scatter)
    roughness = np.sqrt(np.maximum(values[:, 0], 0.0) / np.maximum(n - 3, 1))
    planarity = np.maximum(values[:, 0], 0.0) / np.maximum(values[:, 1], 1e-30)
    return np.ascontiguousarray(vectors[:, :, 0]), roughness, planarity


@numba.njit(cache=True, nogil=True, parallel=True)
def _project(points: FloatArray, block: IntArray, centre: FloatArray, normal: FloatArray) -> FloatArray:
    """Remove from every point its distance to the plane of its block."""
    out = np.empty_like(points)
    for p in numba.prange(len(points)):
        b = block[p]
        d = 0.0
        for a in range(3):
            d += (points[p, a] - centre[b, a]) * normal[b, a]
        for a in range(3):
            out[p, a] = points[p, a] - d * normal[b, a]
    return out


@numba.njit(cache=True, nogil=True)
def tangents(nx: float, ny: float, nz: float) -> tuple[float, float, float, float, float, float]:
    """Two unit tangents that make (t1, t2, n) right-handed (Duff et al. 2017, orthonormal basis revisited)."""
    sign = 1.0 if nz >= 0 else -1.0
    a = -1.0 / (sign + nz)
    b = nx * ny * a
    return 1.0 + sign * nx * nx * a, sign * b, -sign * nx, b, sign + ny * ny * a, -ny


@numba.njit(cache=True, nogil=True, parallel=True)
def _cell_keys(points: FloatArray, block: IntArray, centre: FloatArray, normal: FloatArray, width: float) -> IntArray:
    """Key of every point: block number, then row and column of its square in the block's plane."""
    keys = np.empty(len(points), np.int64)
    for p in numba.prange(len(points)):
        b = block[p]
        ax, ay, az, bx, by, bz = tangents(normal[b, 0], normal[b, 1], normal[b, 2])
        dx, dy, dz = points[p, 0] - centre[b, 0], points[p, 1] - centre[b, 1], points[p, 2] - centre[b, 2]
        row = int(np.floor((dx * ax + dy * ay + dz * az) / width)) + 512
        column = int(np.floor((dx * bx + dy * by + dz * bz) / width)) + 512
        keys[p] = (b << 20) | (row << 10) | column
    return keys


@numba.njit(cache=True, nogil=True, parallel=True)
def _average(
    points: FloatArray, values: FloatArray, order: IntArray, start: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Mean position, mean value and count of every run."""
    m = len(start) - 1
    position, mean, count = np.zeros((m, 3)), np.zeros(m), np.empty(m)
    for c in numba.prange(m):
        n = start[c + 1] - start[c]
        for r in range(start[c], start[c + 1]):
            p = order[r]
            position[c, 0] += points[p, 0]
            position[c, 1] += points[p, 1]
            position[c, 2] += points[p, 2]
            if len(values):
                mean[c] += values[p]
        position[c] /= n
        mean[c] /= n
        count[c] = n
    return position, mean, count


def make_cells(points: FloatArray, resolution: float, *, intensity: NDArray[np.floating] | None = None) -> Cells:
    """Build blocks and cells of a cloud.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        Local coordinates [m].
    resolution : float
        Cell width [m].
    intensity : ndarray of shape (n,), optional
        One value a point, averaged per cell.

    Returns
    -------
    Cells

    Raises
    ------
    ValueError
        The cloud is more than half a million blocks wide: the coordinates are no local ones.
    """
    size = resolution * BLOCK_WIDTH
    if np.abs(points).max() / size > _KEY_LIMIT:
        raise ValueError("the cloud is too wide for this resolution: use local coordinates or a larger resolution")
    points = np.ascontiguousarray(points, dtype=np.float64)
    order, keys, start = group(voxel_keys(points, size))
    merged = _merge_neighbours(keys, _block_moments(points, order, start))
    normal, _, _ = _planes(merged)
    block = np.empty(len(points), np.int64)
    block[order] = np.repeat(np.arange(len(keys)), np.diff(start))
    flat = _project(points, block, np.ascontiguousarray(merged[:, 1:4]), normal)

    # Again with the projected places: now membership does not depend on the noise along the normal.
    order, keys, start = group(voxel_keys(flat, size))
    moments = _block_moments(points, order, start)
    normal, roughness, planarity = _planes(_merge_neighbours(keys, moments))
    block[order] = np.repeat(np.arange(len(keys)), np.diff(start))
    centre = np.ascontiguousarray(moments[:, 1:4])
    values = np.empty(0) if intensity is None else np.asarray(intensity, np.float64)
    order, cell_keys, start = group(_cell_keys(flat, block, centre, normal, resolution))
    position, mean, count = _average(points, values, order, start)
    cell_block = cell_keys >> 20
    return Cells(
        resolution=resolution,
        key=keys,
        start=np.searchsorted(cell_block, np.arange(len(keys) + 1)).astype(np.int64),
        centre=centre,
        normal=normal,
        roughness=roughness,
        planarity=planarity,
        weight=moments[:, 0].copy(),
        position=position,
        intensity=None if intensity is None else mean,
        count=count,
        block=cell_block,
    )


def median_spacing(points: FloatArray, *, sample: int = 5000) -> float:
    """Return the median point spacing [m]: the side of the square that holds one point.

    From the distance r to the k-th distinct neighbour, k / (pi r^2) being the local density (k = 8). Exact
    duplicates, frequent in merged scans, count once. The sample is drawn by a hash of the coordinates, so the
    order of points does not matter.
    """
    from scipy.spatial import cKDTree

    wanted = 8
    drawn = points[point_hashes(points) % np.uint64(max(1, len(points) // sample)) == 0]
    if len(drawn) == 0:
        drawn = points
    # few queries against many points: the plain tree is built in a third of the time
    tree = cKDTree(points, balanced_tree=False, compact_nodes=False)
    distance, _ = tree.query(drawn, k=min(4 * wanted, len(points)), workers=-1)
    fresh = np.diff(distance, axis=1, prepend=0.0) > 0
    rank = np.cumsum(fresh, axis=1)
    reached = rank[:, -1] >= wanted
    if not reached.any():
        return 0.0
    radius = distance[reached][np.arange(reached.sum()), (rank[reached] == wanted).argmax(axis=1)]
    return float(np.median(radius) * np.sqrt(np.pi / wanted))


def point_hashes(points: FloatArray) -> NDArray[np.uint64]:
    """Mix the bits of every point's coordinates (multiplicative hashing, Knuth)."""
    bits = np.ascontiguousarray(points, np.float64).view(np.uint64)
    mixed = np.zeros(len(points), np.uint64)
    for column in range(3):
        mixed = (mixed ^ bits[:, column]) * np.uint64(0x9E3779B97F4A7C15)
        mixed ^= mixed >> np.uint64(29)
    return mixed
