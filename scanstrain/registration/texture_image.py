# SPDX-License-Identifier: MIT
"""Returned intensity as an image on the surface: value and slope at any place, and local contrast to search with."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, Cells, find_block, find_key, group, make_cells, pack, tangents, voxel_keys

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

CELL_SPACINGS = 2.0
"""Cell width in point spacings: some four points each."""
KERNEL_CELLS = 2.0
"""Reach of the local lines in cells: about 12 cells, weighted towards the middle."""
LEVEL_WIDTH, LEVEL_CELLS = 0.2, 8.0
"""Voxels over which level and spread are judged: so wide [m], or so many cells. Wide against the usual texture, narrow
against wet patches and the fall of intensity with range."""
SPREAD_FLOOR = 0.2
"""Least local spread over the scan's median that is divided by: duller places carry no usable texture."""
MIN_CELLS = 6
"""Cells that a local line needs."""
MAX_ASIDE = 0.3
"""Farthest mean of the cells from the place, over the reach: beyond it the surface ends here."""


@dataclass(frozen=True, slots=True)
class Image:
    """Intensity of one epoch.

    Parameters
    ----------
    cells : Cells
    grey : ndarray of shape (c,)
        Intensity of every cell, as it stands in the file.
    contrast : ndarray of shape (c,)
        The same about its local level, in units of its local spread [1].
    """

    cells: Cells
    grey: FloatArray
    contrast: FloatArray

    @property
    def reach(self) -> float:
        """Radius of the local lines [m]."""
        return KERNEL_CELLS * self.cells.resolution


@dataclass(frozen=True, slots=True)
class View:
    """An image at given places.

    Parameters
    ----------
    value : ndarray of shape (n,)
    gradient : ndarray of shape (n, 3)
        Along the surface [1/m].
    seen : ndarray of shape (n,), bool
        Cells on all sides.
    """

    value: FloatArray
    gradient: FloatArray
    seen: NDArray[np.bool_]


def make_image(points: FloatArray, intensity: NDArray[np.floating] | None, spacing: float) -> Image | None:
    """Make the image of an epoch.

    For the search, level and spread are taken out locally (common practice where no radiometric model is known), so
    that another setting of the scanner, range, or a wet patch does not look like motion. That depends on where voxels
    are cut, differently in each epoch and by more than the noise: the fit takes level and gain out of aligned images.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        Local coordinates [m].
    intensity : ndarray of shape (n,), optional
    spacing : float
        Point spacing [m], the same for both epochs, so that both images are smoothed alike.

    Returns
    -------
    Image or None
        None without intensity, or where it is not finite or does not vary.
    """
    if intensity is None or not np.isfinite(intensity).all() or not np.ptp(intensity) > 0:
        return None
    cells = make_cells(points, CELL_SPACINGS * spacing, intensity=intensity)
    grey = cells.intensity if cells.intensity is not None else np.empty(0)
    width = level_width(cells.resolution)
    level = _local_means(cells.position, grey, cells.count, width)
    spread = np.sqrt(_local_means(cells.position, (grey - level) ** 2, cells.count, width))
    typical = float(np.median(spread))
    if not typical > 0:
        return None
    return Image(cells, grey, (grey - level) / np.maximum(spread, SPREAD_FLOOR * typical))


def level_width(resolution: float) -> float:
    """Return the width [m] over which level and gain are judged, for cells of a resolution [m]."""
    return max(LEVEL_WIDTH, LEVEL_CELLS * resolution)


def voxel_means(image: Image, width: float) -> tuple[IntArray, FloatArray]:
    """Return ascending voxel keys and the mean contrast in each voxel of a width [m]."""
    order, keys, start = group(voxel_keys(image.cells.position, width))
    count = image.cells.count[order]
    return keys, np.add.reduceat(image.contrast[order] * count, start[:-1]) / np.add.reduceat(count, start[:-1])


def view(image: Image, places: FloatArray, normals: FloatArray) -> View:
    """Fit a weighted line to the cells around every place.

    Parameters
    ----------
    image : Image
    places, normals : ndarray of shape (n, 3)
        In the frame of the image's epoch [m], unit normals.

    Returns
    -------
    View
    """
    cells, out, seen = image.cells, np.zeros((len(places), 4)), np.zeros(len(places), np.bool_)
    _lines(
        np.ascontiguousarray(places),
        np.ascontiguousarray(normals),
        cells.key,
        cells.start,
        cells.block_size,
        cells.position,
        image.grey,
        cells.count,
        image.reach,
        out,
        seen,
    )
    return View(out[:, 0], out[:, 1:], seen)


@numba.njit(cache=True, nogil=True)
def blocks_of(places: FloatArray, keys: IntArray, width: float) -> IntArray:
    """Voxel of every place (n, 3) among ascending keys of voxels of a width [m], -1 without one."""
    out = np.empty(len(places), np.int64)
    for p in range(len(places)):
        out[p] = find_block(keys, width, places[p, 0], places[p, 1], places[p, 2])
    return out


def _local_means(position: FloatArray, value: FloatArray, count: FloatArray, width: float) -> FloatArray:
    """Weighted mean of values around every cell, from the means of voxels of a width [m]."""
    order, keys, start = group(voxel_keys(position, width))
    n = count[order]
    total = np.add.reduceat(n, start[:-1])
    columns = [*position.T, value]
    mean = np.stack([np.add.reduceat(c[order] * n, start[:-1]) / total for c in columns], axis=1)
    voxel = np.empty(len(position), np.int64)
    voxel[order] = np.repeat(np.arange(len(keys)), np.diff(start))
    out = np.empty(len(position))
    _blend(position, voxel, keys, mean, total, 1.5 * width, out)
    return out


@numba.njit(cache=True, nogil=True, parallel=True)
def _blend(
    position: FloatArray,
    voxel: IntArray,
    keys: IntArray,
    mean: FloatArray,
    total: FloatArray,
    radius: float,
    out: FloatArray,
) -> None:
    """Blend the means of a place's voxel and its 26 neighbours, weights falling to zero at the radius."""
    around = np.empty((len(keys), 27), np.int64)
    for v in numba.prange(len(keys)):
        for s in range(27):
            shift = ((s // 9 - 1) << (2 * KEY_BITS)) + ((s // 3 % 3 - 1) << KEY_BITS) + (s % 3 - 1)
            around[v, s] = find_key(keys, keys[v] + shift)
    for p in numba.prange(len(position)):
        above, below = 0.0, 0.0
        for s in range(27):
            o = around[voxel[p], s]
            if o < 0:
                continue
            q = 0.0
            for a in range(3):
                q += ((position[p, a] - mean[o, a]) / radius) ** 2
            w = total[o] * max(1.0 - q, 0.0) ** 2
            above += w * mean[o, 3]
            below += w
        out[p] = above / below if below > 0 else mean[voxel[p], 3]


@numba.njit(cache=True, nogil=True, parallel=True)
def _lines(
    places: FloatArray,
    normals: FloatArray,
    keys: IntArray,
    start: IntArray,
    size: float,
    position: FloatArray,
    value: FloatArray,
    count: FloatArray,
    reach: float,
    out: FloatArray,
    seen: NDArray[np.bool_],
) -> None:
    """Value and gradient of the weighted line at every place; biweight in the distance."""
    for p in numba.prange(len(places)):
        x, y, z = places[p, 0], places[p, 1], places[p, 2]
        ax, ay, az, bx, by, bz = tangents(normals[p, 0], normals[p, 1], normals[p, 2])
        m, n, ns, nt, ss, st, tt, v, vs, vt = 0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
        for i in range(int(np.floor((x - reach) / size)), int(np.floor((x + reach) / size)) + 1):
            for j in range(int(np.floor((y - reach) / size)), int(np.floor((y + reach) / size)) + 1):
                for k in range(int(np.floor((z - reach) / size)), int(np.floor((z + reach) / size)) + 1):
                    b = find_key(keys, pack(i, j, k))
                    if b < 0:
                        continue
                    for c in range(start[b], start[b + 1]):
                        dx, dy, dz = position[c, 0] - x, position[c, 1] - y, position[c, 2] - z
                        q = (dx * dx + dy * dy + dz * dz) / (reach * reach)
                        if q >= 1.0:
                            continue
                        w = count[c] * (1.0 - q) ** 2
                        s, t = dx * ax + dy * ay + dz * az, dx * bx + dy * by + dz * bz
                        m += 1
                        n += w
                        ns += w * s
                        nt += w * t
                        ss += w * s * s
                        st += w * s * t
                        tt += w * t * t
                        v += w * value[c]
                        vs += w * value[c] * s
                        vt += w * value[c] * t
        if m < MIN_CELLS or ns * ns + nt * nt > (MAX_ASIDE * reach * n) ** 2:
            continue
        s, t, v = ns / n, nt / n, v / n
        ss, st, tt = ss / n - s * s, st / n - s * t, tt / n - t * t
        vs, vt = vs / n - v * s, vt / n - v * t
        det = ss * tt - st * st
        if det < 0.1 * (ss + tt) ** 2 / 4:
            continue
        gs, gt = (tt * vs - st * vt) / det, (ss * vt - st * vs) / det
        out[p, 0] = v - gs * s - gt * t
        out[p, 1], out[p, 2], out[p, 3] = gs * ax + gt * bx, gs * ay + gt * by, gs * az + gt * bz
        seen[p] = True
