# SPDX-License-Identifier: MIT
"""Compiled kernel of the way back to points: local linear blend of surrounding gauges on the same sheet.

Everything that the kernel calls stands in this file, because numba's cache does not notice edits elsewhere.
It runs without the GIL on a block of points; the caller shares blocks among threads. No sum crosses points, so
results do not depend on how many threads there are.
"""

from __future__ import annotations

from typing import NamedTuple

import numba
import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MAX_NEIGHBOURS = 32
"""Gauges taken into one blend. About ten lie within reach at the nominal spacing; more than this are not needed."""

MIN_LINEAR = 4
"""Fewer gauges than this do not check a local linear fit with three unknowns."""

COS_SHEET = 0.7071
"""Normals of one sheet differ by less than 45 degrees from gauge to point and from gauge to gauge."""

IN_LINE = 1e-6
"""Determinant of the scatter of the gauges, relative to a round one, below which they stand in one line."""

TENSOR_ROWS = 12
"""Rows of the output that come from the tensor: xx yy zz xy xz yz, principal 1 and 2, their difference, uu vv uv."""


class Sheet(NamedTuple):
    """Valid gauges in the order of the keys of their cells."""

    position: FloatArray
    normal: FloatArray
    axes: FloatArray
    keys: IntArray
    corner: FloatArray
    dims: IntArray


class Reach(NamedTuple):
    """Lengths [m]: cell and search radius, radius of the blend, farthest nearest gauge; off-plane limit a + b d^2."""

    search: float
    kernel: float
    farthest: float
    off_plane: float
    off_plane_square: float


class Columns(NamedTuple):
    """What is blended: (uu, vv, uv) and scalar columns in groups; group 0 goes with the tensor.

    `present` has one bit a group for each gauge. Column `bowed` is the normal displacement, whose second derivatives
    `bowing` (uu, vv, uv) the fit knows at every gauge.
    """

    tensor: FloatArray
    values: FloatArray
    bowed: int
    bowing: FloatArray
    bounded: BoolArray
    first: IntArray
    present: IntArray


@numba.njit(cache=True, nogil=True)
def _weights(x: FloatArray, y: FloatArray, w: FloatArray, use: BoolArray, count: int, out: FloatArray) -> bool:
    """Local linear weights at the origin: value there = sum of out * values, exact for linear fields.

    False where the gauges cannot carry a plane (few, in line) or the point lies so far outside of them that the
    blend would be noisier than one gauge alone.
    """
    used = 0
    s, sx, sy, sxx, sxy, syy = 0.0, 0.0, 0.0, 0.0, 0.0, 0.0
    for i in range(count):
        if use[i]:
            used += 1
            s += w[i]
            sx += w[i] * x[i]
            sy += w[i] * y[i]
            sxx += w[i] * x[i] * x[i]
            sxy += w[i] * x[i] * y[i]
            syy += w[i] * y[i] * y[i]
    if used < MIN_LINEAR:
        return False
    # first row of the adjugate of the 3x3 normal matrix, then its determinant
    c0 = sxx * syy - sxy * sxy
    c1 = sy * sxy - sx * syy
    c2 = sx * sxy - sy * sxx
    det = s * c0 + sx * c1 + sy * c2
    if det <= IN_LINE * s * (sxx + syy) ** 2:
        return False
    noise = 0.0
    for i in range(count):
        out[i] = 0.0
        if use[i]:
            out[i] = w[i] * (c0 + c1 * x[i] + c2 * y[i]) / det
            noise += out[i] * out[i]
    return noise <= 1.0


@numba.njit(cache=True, nogil=True)
def _first_at_least(keys: IntArray, key: int) -> int:
    low, high = 0, len(keys)
    while low < high:
        middle = (low + high) // 2
        if keys[middle] < key:
            low = middle + 1
        else:
            high = middle
    return low


@numba.njit(cache=True, nogil=True)
def _find(
    q: FloatArray, qn: FloatArray, aware: bool, sheet: Sheet, reach: Reach, index: IntArray, square: FloatArray
) -> tuple[int, int]:
    """Gauges within the search radius on the point's own sheet: how many, and which of them is nearest."""
    count, nearest = 0, -1
    ix = int(np.floor((q[0] - sheet.corner[0]) / reach.search))
    iy = int(np.floor((q[1] - sheet.corner[1]) / reach.search))
    iz = int(np.floor((q[2] - sheet.corner[2]) / reach.search))
    z0, z1 = max(iz - 1, 0), min(iz + 1, sheet.dims[2] - 1)
    if z0 > z1:
        return 0, -1
    for jx in range(max(ix - 1, 0), min(ix + 1, sheet.dims[0] - 1) + 1):
        for jy in range(max(iy - 1, 0), min(iy + 1, sheet.dims[1] - 1) + 1):
            base = (jx * sheet.dims[1] + jy) * sheet.dims[2]
            j = _first_at_least(sheet.keys, base + z0)
            while j < len(sheet.keys) and sheet.keys[j] <= base + z1:
                dx, dy, dz = q[0] - sheet.position[j, 0], q[1] - sheet.position[j, 1], q[2] - sheet.position[j, 2]
                d2 = dx * dx + dy * dy + dz * dz
                if d2 < reach.search * reach.search and count < MAX_NEIGHBOURS:
                    n0, n1, n2 = sheet.normal[j, 0], sheet.normal[j, 1], sheet.normal[j, 2]
                    off = abs(dx * n0 + dy * n1 + dz * n2)
                    facing = not aware or qn[0] * n0 + qn[1] * n1 + qn[2] * n2 > COS_SHEET
                    if facing and off <= reach.off_plane + reach.off_plane_square * d2:
                        index[count], square[count] = j, d2
                        if nearest < 0 or d2 < square[nearest]:
                            nearest = count
                        count += 1
                j += 1
    return count, nearest


@numba.njit(cache=True, nogil=True)
def _lay_out(
    q: FloatArray, anchor: int, sheet: Sheet, kernel: float, index: IntArray, square: FloatArray, count: int,
    x: FloatArray, y: FloatArray, w: FloatArray, c: FloatArray, s: FloatArray,
) -> int:  # fmt: skip
    """Plane coordinates, weights and turn (c, s) of the neighbours, as seen from the nearest gauge's axes."""
    kept = 0
    for i in range(count):
        j = index[i]
        cosine = 0.0
        for k in range(3):
            cosine += sheet.normal[j, k] * sheet.normal[anchor, k]
        r2 = square[i] / (kernel * kernel)
        if r2 >= 1.0 or cosine <= COS_SHEET:
            continue
        px, py, along, across = 0.0, 0.0, 0.0, 0.0
        for k in range(3):
            u, v = sheet.axes[anchor, k, 0], sheet.axes[anchor, k, 1]
            d = sheet.position[j, k] - q[k]
            px += d * u
            py += d * v
            along += u * sheet.axes[j, k, 0] + v * sheet.axes[j, k, 1]
            across += v * sheet.axes[j, k, 0] - u * sheet.axes[j, k, 1]
        # with the normals brought together by the shortest rotation, the axes still differ by this planar angle
        length = np.sqrt(along * along + across * across)
        index[kept] = j
        x[kept], y[kept], w[kept] = px, py, (1.0 - r2) ** 2
        c[kept], s[kept] = along / length, across / length
        kept += 1
    return kept


@numba.njit(cache=True, nogil=True)
def _tensor(
    index: IntArray, count: int, weight: FloatArray, c: FloatArray, s: FloatArray,
    anchor: int, sheet: Sheet, tensor: FloatArray, out: NDArray[np.float32], p: int,
) -> None:  # fmt: skip
    """Blend (uu, vv, uv) in the nearest gauge's axes; write the tensor in them, turned to the blended normal."""
    uu, vv, uv = 0.0, 0.0, 0.0
    n0, n1, n2 = 0.0, 0.0, 0.0
    for i in range(count):
        if weight[i] == 0.0:
            continue
        j = index[i]
        a, b, h = tensor[j, 0], tensor[j, 1], tensor[j, 2]
        cc, ss, cs = c[i] * c[i], s[i] * s[i], c[i] * s[i]
        uu += weight[i] * (cc * a + ss * b - 2.0 * cs * h)
        vv += weight[i] * (ss * a + cc * b + 2.0 * cs * h)
        uv += weight[i] * (cs * (a - b) + (cc - ss) * h)
        n0 += weight[i] * sheet.normal[j, 0]
        n1 += weight[i] * sheet.normal[j, 1]
        n2 += weight[i] * sheet.normal[j, 2]
    size = np.sqrt(n0 * n0 + n1 * n1 + n2 * n2)
    n0, n1, n2 = n0 / size, n1 / size, n2 / size
    m, axes = sheet.normal[anchor], sheet.axes[anchor]
    # shortest rotation m -> n of a vector t that is square to m: t - (n.t) (m + n) / (1 + n.m)
    one = 1.0 + n0 * m[0] + n1 * m[1] + n2 * m[2]
    fu = (n0 * axes[0, 0] + n1 * axes[1, 0] + n2 * axes[2, 0]) / one
    fv = (n0 * axes[0, 1] + n1 * axes[1, 1] + n2 * axes[2, 1]) / one
    u0, u1, u2 = axes[0, 0] - fu * (m[0] + n0), axes[1, 0] - fu * (m[1] + n1), axes[2, 0] - fu * (m[2] + n2)
    v0, v1, v2 = axes[0, 1] - fv * (m[0] + n0), axes[1, 1] - fv * (m[1] + n1), axes[2, 1] - fv * (m[2] + n2)
    out[0, p] = uu * u0 * u0 + vv * v0 * v0 + 2.0 * uv * u0 * v0
    out[1, p] = uu * u1 * u1 + vv * v1 * v1 + 2.0 * uv * u1 * v1
    out[2, p] = uu * u2 * u2 + vv * v2 * v2 + 2.0 * uv * u2 * v2
    out[3, p] = uu * u0 * u1 + vv * v0 * v1 + uv * (u0 * v1 + u1 * v0)
    out[4, p] = uu * u0 * u2 + vv * v0 * v2 + uv * (u0 * v2 + u2 * v0)
    out[5, p] = uu * u1 * u2 + vv * v1 * v2 + uv * (u1 * v2 + u2 * v1)
    centre, radius = 0.5 * (uu + vv), np.sqrt((0.5 * (uu - vv)) ** 2 + uv * uv)
    out[6, p], out[7, p], out[8, p] = centre + radius, centre - radius, 2.0 * radius
    out[9, p], out[10, p], out[11, p] = uu, vv, uv


@numba.njit(cache=True, nogil=True)
def _scalars(
    index: IntArray, count: int, weight: FloatArray, columns: Columns, start: int, stop: int, total: FloatArray
) -> None:
    """Blend the columns start..stop; errors and magnitudes stay within the range of their neighbours."""
    total[start:stop] = 0.0
    negative = False
    for i in range(count):
        if weight[i] != 0.0:
            negative = negative or weight[i] < 0.0
            for column in range(start, stop):
                total[column] += weight[i] * columns.values[index[i], column]
    if not negative:
        return
    for column in range(start, stop):
        if columns.bounded[column]:
            low, high = np.inf, -np.inf
            for i in range(count):
                if weight[i] != 0.0:
                    value = columns.values[index[i], column]
                    low, high = min(low, value), max(high, value)
            total[column] = min(max(total[column], low), high)


@numba.njit(cache=True, nogil=True)
def _sagitta(
    index: IntArray, count: int, weight: FloatArray, x: FloatArray, y: FloatArray, c: FloatArray, s: FloatArray,
    bowing: FloatArray,
) -> float:  # fmt: skip
    """What a blend that is exact for linear fields adds to a bowed one: half the second derivatives over its reach."""
    total = 0.0
    for i in range(count):
        if weight[i] == 0.0:
            continue
        a, b, h = bowing[index[i], 0], bowing[index[i], 1], bowing[index[i], 2]
        along, across = c[i] * x[i] + s[i] * y[i], c[i] * y[i] - s[i] * x[i]
        total += 0.5 * weight[i] * (a * along * along + b * across * across + 2.0 * h * along * across)
    return total


@numba.njit(cache=True, nogil=True)
def blend(
    points: FloatArray, point_normals: FloatArray, aware: bool, sheet: Sheet, reach: Reach, columns: Columns,
    out: NDArray[np.float32], nearest: IntArray,
) -> None:  # fmt: skip
    """Fill `out` (TENSOR_ROWS + columns, n) and `nearest` (n, -1 where no gauge serves) for one block of points.

    `aware` says whether there are point normals, one a point. A group is given where the nearest gauge has it.
    Groups that all neighbours have share one set of weights; the others get their own.
    """
    index, square = np.empty(MAX_NEIGHBOURS, np.int64), np.empty(MAX_NEIGHBOURS)
    x, y, w = np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS)
    c, s, use = np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS, np.bool_)
    shared, own = np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS)
    alone, unit, zero = np.zeros(1, np.int64), np.ones(1), np.zeros(1)
    width = len(columns.bounded)
    total, total_own = np.empty(width), np.empty(width)
    for p in range(len(points)):
        q, qn = points[p], point_normals[p if aware else 0]
        count, near = _find(q, qn, aware, sheet, reach, index, square)
        out[:, p] = np.nan
        nearest[p] = -1
        if near < 0 or square[near] > reach.farthest * reach.farthest:
            continue
        anchor = index[near]
        nearest[p], alone[0] = anchor, anchor
        count = _lay_out(q, anchor, sheet, reach.kernel, index, square, count, x, y, w, c, s)
        use[:count] = True
        common = columns.present[anchor]
        for i in range(count):
            common &= columns.present[index[i]]
        shared_linear = _weights(x, y, w, use, count, shared)
        if shared_linear:
            # columns that are not common come out NaN here and are not used
            _scalars(index, count, shared, columns, 0, width, total)
        for group in range(len(columns.first) - 1):
            if not columns.present[anchor] >> group & 1:
                continue
            start, stop = columns.first[group], columns.first[group + 1]
            if common >> group & 1:
                linear, weight, blended = shared_linear, shared, total
            else:
                for i in range(count):
                    use[i] = columns.present[index[i]] >> group & 1
                linear, weight, blended = _weights(x, y, w, use, count, own), own, total_own
                if linear:
                    _scalars(index, count, own, columns, start, stop, total_own)
            if linear and group == 0:
                _tensor(index, count, weight, c, s, anchor, sheet, columns.tensor, out, p)
            elif group == 0:
                _tensor(alone, 1, unit, unit, zero, anchor, sheet, columns.tensor, out, p)
            for column in range(start, stop):
                value = blended[column] if linear else columns.values[anchor, column]
                if linear and column == columns.bowed:
                    value -= _sagitta(index, count, weight, x, y, c, s, columns.bowing)
                out[TENSOR_ROWS + column, p] = value
