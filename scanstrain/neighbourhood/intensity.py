# SPDX-License-Identifier: MIT
"""Intensity of several set-ups made comparable.

Raw intensity falls with range and incidence, so two set-ups give two levels at one place, and mixing them looks
like noise. Per set-up, a quadratic is fitted to the intensity over a neighbourhood wide against the texture; what
is kept is the relative deviation from it (local normalisation, common practice where no radiometric model is
known). One set-up alone is left as it is: its slow trends go into the local gain and offset of the fit, and taking
them out twice would only add the noise of the level.
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import BLOCK_WIDTH, group, make_cells, tangents, voxel_keys
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.smooth import gather
from scanstrain.neighbourhood.solve import solve_in_place

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

_POSITIVE_SHARE = 0.999
"""Intensities that are positive at this share of points count as linear: their texture scales with their level."""
_FLOOR = 0.05
"""Smallest local level, as a share of the median, that is divided by: darker places carry no usable texture."""
MIN_SHARED = 200
"""Voxels that two set-ups must share before their difference is judged."""
_RIDGE = 0.02
"""Ridge on slopes and curvatures, in neighbourhood radii: keeps narrow strips of points well posed."""
_BLEND = 4
"""Neighbourhoods that are blended at a point, so that the level has no steps."""


@numba.njit(cache=True, nogil=True)
def _terms(
    x: float, y: float, z: float, c: FloatArray, n: FloatArray, radius: float, out: FloatArray
) -> None:  # fmt: skip
    """Quadratic terms of a place in the tangent coordinates of a neighbourhood."""
    ax, ay, az, bx, by, bz = tangents(n[0], n[1], n[2])
    dx, dy, dz = x - c[0], y - c[1], z - c[2]
    s, t = (dx * ax + dy * ay + dz * az) / radius, (dx * bx + dy * by + dz * bz) / radius
    out[0], out[1], out[2], out[3], out[4], out[5] = 1.0, s, t, s * s, s * t, t * t


@numba.njit(cache=True, nogil=True, parallel=True)
def _trends(
    centre: FloatArray, normal: FloatArray, radius: float, key: IntArray, start: IntArray, position: FloatArray,
    intensity: FloatArray, count: FloatArray, out: FloatArray,
) -> None:  # fmt: skip
    """Quadratic of intensity about every block, over one block width."""
    for b in numba.prange(len(centre)):
        cells = np.empty(512, np.int64)
        m = gather(centre[b, 0], centre[b, 1], centre[b, 2], radius, key, start, radius, position, cells)
        A, v, row = np.zeros((6, 6)), np.zeros(6), np.empty(6)
        for r in range(m):
            c = cells[r]
            _terms(position[c, 0], position[c, 1], position[c, 2], centre[b], normal[b], radius, row)
            for i in range(6):
                v[i] += count[c] * row[i] * intensity[c]
                for j in range(i + 1):
                    A[i, j] += count[c] * row[i] * row[j]
        for i in range(1, 6):
            A[i, i] += _RIDGE * A[0, 0]
        solve_in_place(A, v, 6)
        out[b] = v


@numba.njit(cache=True, nogil=True, parallel=True)
def _levels(
    points: FloatArray, near: IntArray, distance: FloatArray, centre: FloatArray, normal: FloatArray, radius: float,
    trend: FloatArray, out: FloatArray,
) -> None:  # fmt: skip
    for p in numba.prange(len(points)):
        row = np.empty(6)
        total = level = 0.0
        for q in range(near.shape[1]):
            b = near[p, q]
            _terms(points[p, 0], points[p, 1], points[p, 2], centre[b], normal[b], radius, row)
            w = 1.0 / (distance[p, q] ** 2 + 0.01 * radius * radius) ** 2
            total += w
            for i in range(6):
                level += w * row[i] * trend[b, i]
        out[p] = level / total


def _local_level(points: FloatArray, values: FloatArray, places: FloatArray, width: float) -> FloatArray:
    """Slow level at `places` of `values` that are known at `points`, over neighbourhoods of radius `width` [m].

    NaN where the places lie farther from the points than a neighbourhood reaches.
    """
    from scipy.spatial import cKDTree

    cells = make_cells(points, width / BLOCK_WIDTH, intensity=values)
    grey = cells.intensity if cells.intensity is not None else np.empty(0)
    trend, level = np.zeros((len(cells.key), 6)), np.empty(len(places))
    _trends(cells.centre, cells.normal, width, cells.key, cells.start, cells.position, grey, cells.count, trend)
    k = min(_BLEND, len(cells.key))
    distance, near = cKDTree(cells.centre).query(places, k=k, workers=-1)
    distance, near = distance.reshape(-1, k), near.reshape(-1, k).astype(np.int64)
    _levels(np.ascontiguousarray(places), near, distance, cells.centre, cells.normal, width, trend, level)
    return np.where(distance[:, 0] <= np.sqrt(3) * width, level, np.nan)


def _remove_offsets(
    points: FloatArray, texture: FloatArray, setup: NDArray[np.uint16], width: float, fine: float
) -> None:
    """Take the slow differences between set-ups out of `texture`, judged in small voxels that several of them share.

    Inside such a voxel the texture is the same, so what differs is level: this is far sharper than comparing
    levels over neighbourhoods that each set-up samples in its own way.
    """
    order, _, start = group(voxel_keys(points, fine))
    voxel = np.empty(len(points), np.int64)
    voxel[order] = np.repeat(np.arange(len(start) - 1), np.diff(start))
    numbers, which = np.unique(setup, return_inverse=True)
    shape = (len(start) - 1, len(numbers))
    flat = voxel * len(numbers) + which
    count = np.bincount(flat, minlength=shape[0] * shape[1]).reshape(shape)
    mean = np.bincount(flat, texture, minlength=shape[0] * shape[1]).reshape(shape) / np.maximum(count, 1)
    centre = np.stack([np.bincount(voxel, points[:, a]) for a in range(3)], axis=1) / np.diff(start)[:, None]
    seen = count > 0
    common = (mean * seen).sum(axis=1) / seen.sum(axis=1)
    shared = seen.sum(axis=1) > 1
    for number in range(len(numbers)):
        pairs = shared & seen[:, number]
        if pairs.sum() < MIN_SHARED:
            continue
        own = np.flatnonzero(which == number)
        offset = _local_level(centre[pairs], (mean[:, number] - common)[pairs], points[own], width)
        texture[own] -= np.nan_to_num(offset)


def comparable_intensity(epoch: Epoch, width: float, fine: float) -> FloatArray | None:
    """Return the intensity of every point, from several set-ups as texture about each one's local level.

    Parameters
    ----------
    epoch : Epoch
        With `setup` numbers where the set-ups are known; otherwise all points count as one set-up.
    width : float
        Radius over which the level is judged [m]: wide against the texture.
    fine : float
        Voxel width in which set-ups are compared with each other [m]: narrow against the texture.

    Returns
    -------
    ndarray of shape (n,) or None
        The intensity itself for one set-up; for several, the relative deviation from the local level [1], or
        the plain deviation where intensities are signed or logarithmic. None without intensity, or where it does
        not vary.
    """
    if epoch.intensity is None:
        return None
    raw = np.asarray(epoch.intensity, np.float64)
    if not np.isfinite(raw).all() or not np.ptp(raw) > 0:
        return None
    setups = [] if epoch.setup is None else list(np.unique(epoch.setup))
    if epoch.setup is None or len(setups) < 2:
        return raw
    linear = float(np.mean(raw > 0)) >= _POSITIVE_SHARE
    out = np.empty(len(raw))
    for setup in setups:
        own = np.flatnonzero(epoch.setup == setup)
        level = _local_level(epoch.points[own], raw[own], epoch.points[own], width)
        if linear:
            level = np.maximum(level, _FLOOR * float(np.median(raw[own])))
            out[own] = raw[own] / level - 1.0
        else:
            out[own] = raw[own] - level
    _remove_offsets(epoch.points, out, epoch.setup, width, fine)
    return out
