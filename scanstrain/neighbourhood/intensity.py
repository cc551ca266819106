# SPDX-License-Identifier: MIT
"""Intensity of several set-ups made comparable.

Raw intensity falls with range and incidence, so two set-ups give two levels at one place, and mixing them looks
like noise. Per set-up, a quadratic is fitted to the intensity over a neighbourhood wide against the texture; what
is kept is the relative deviation from it (local normalisation, common practice where no radiometric model is
known). One set-up alone is left as it is: its slow trends go into the local gain and offset of the fit, and taking
them out twice would only add the noise of the level.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

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
_BLEND, _FARTHEST = 4, 1.5
"""Neighbourhoods that are blended at a point, so that the level has no steps, and how far away they may be [radii]: a
piece of a scan holds no others."""
SURVEYED = 2_000_000
"""Points that are looked at to judge the intensity of a whole epoch."""


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
            if q > 0 and distance[p, q] > _FARTHEST * radius:
                break
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


@dataclass(frozen=True, slots=True)
class _Shared:
    """Small voxels of a cloud and what each set-up shows in them."""

    which: IntArray
    centre: FloatArray
    mean: FloatArray
    seen: NDArray[np.bool_]

    def pairs(self, number: int) -> NDArray[np.bool_]:
        """Voxels that a set-up shares with another one."""
        return np.asarray((self.seen.sum(axis=1) > 1) & self.seen[:, number])


def _share(
    points: FloatArray, texture: FloatArray, setup: NDArray[np.uint16], numbers: NDArray[np.uint16], fine: float
) -> _Shared:
    """Average every set-up in small voxels: inside one the texture is the same, so what differs is level.

    This is far sharper than comparing levels over neighbourhoods that each set-up samples in its own way.
    """
    order, _, start = group(voxel_keys(points, fine))
    voxel = np.empty(len(points), np.int64)
    voxel[order] = np.repeat(np.arange(len(start) - 1), np.diff(start))
    which = np.searchsorted(numbers, setup)
    shape = (len(start) - 1, len(numbers))
    flat = voxel * len(numbers) + which
    count = np.bincount(flat, minlength=shape[0] * shape[1]).reshape(shape)
    mean = np.bincount(flat, texture, minlength=shape[0] * shape[1]).reshape(shape) / np.maximum(count, 1)
    centre = np.stack([np.bincount(voxel, points[:, a]) for a in range(3)], axis=1) / np.diff(start)[:, None]
    return _Shared(which, centre, mean, count > 0)


@dataclass(frozen=True, slots=True)
class Survey:
    """What must be known of the intensity of a whole epoch before any piece of it can be used.

    Parameters
    ----------
    setups : ndarray of shape (k,)
        Numbers of the set-ups, ascending; fewer than two where the intensity serves as it is.
    linear : bool
        Whether texture scales with its level.
    floors : ndarray of shape (k,)
        Smallest level that is divided by, for each set-up.
    """

    setups: NDArray[np.uint16]
    linear: bool
    floors: FloatArray


def survey(intensity: NDArray[np.floating] | None, setup: NDArray[np.uint16] | None) -> Survey | None:
    """Judge the intensity (n,) and the set-ups (n,) of a whole epoch; None where there is nothing to see."""
    if intensity is None or not np.isfinite(intensity).all() or not np.ptp(intensity) > 0:
        return None
    every = max(1, len(intensity) // SURVEYED)
    raw = np.asarray(intensity[::every], np.float64)
    linear = float(np.mean(raw > 0)) >= _POSITIVE_SHARE
    if setup is None:
        return Survey(np.zeros(0, np.uint16), linear, np.zeros(0))
    numbers, of = np.unique(setup), setup[::every]
    medians = [float(np.median(raw[of == number])) if (of == number).any() else 0.0 for number in numbers]
    return Survey(numbers, linear, _FLOOR * np.array(medians))


def texture_of(epoch: Epoch, known: Survey, width: float) -> FloatArray:
    """Intensity of a piece of an epoch; from several set-ups the deviation from each one's local level."""
    raw = np.asarray(epoch.intensity, np.float64)
    if epoch.setup is None or len(known.setups) < 2:
        return raw
    out = np.empty(len(raw))
    for setup, floor in zip(known.setups, known.floors, strict=True):
        own = np.flatnonzero(epoch.setup == setup)
        if not len(own):
            continue
        level = _local_level(epoch.points[own], raw[own], epoch.points[own], width)
        out[own] = raw[own] / np.maximum(level, floor) - 1.0 if known.linear else raw[own] - level
    return out


def comparable_setups(
    pieces: Sequence[Epoch], textures: Sequence[FloatArray], known: Survey, fine: float
) -> NDArray[np.uint16]:
    """Numbers of the set-ups that share enough with others to be compared, over all pieces."""
    total = np.zeros(len(known.setups), np.int64)
    for epoch, texture in zip(pieces, textures, strict=True):
        if epoch.setup is not None and len(known.setups) > 1 and len(epoch):
            shared = _share(epoch.points, texture, epoch.setup, known.setups, fine)
            total += [int(shared.pairs(number).sum()) for number in range(len(known.setups))]
    return known.setups[total >= MIN_SHARED]


def remove_offsets(
    epoch: Epoch, texture: FloatArray, known: Survey, compared: NDArray[np.uint16], width: float, fine: float
) -> None:
    """Take the slow differences between set-ups out of `texture`, judged where several of them see the same."""
    if epoch.setup is None or len(known.setups) < 2 or not len(epoch):
        return
    shared = _share(epoch.points, texture, epoch.setup, known.setups, fine)
    common = (shared.mean * shared.seen).sum(axis=1) / shared.seen.sum(axis=1)
    for number in np.flatnonzero(np.isin(known.setups, compared)).tolist():
        pairs, own = shared.pairs(number), np.flatnonzero(shared.which == number)
        if not pairs.any() or not len(own):
            continue
        offset = _local_level(shared.centre[pairs], (shared.mean[:, number] - common)[pairs], epoch.points[own], width)
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
    known = survey(epoch.intensity, epoch.setup)
    if known is None:
        return None
    out = texture_of(epoch, known, width)
    remove_offsets(epoch, out, known, comparable_setups([epoch], [out], known, fine), width, fine)
    return out
