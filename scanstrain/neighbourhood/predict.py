# SPDX-License-Identifier: MIT
"""Best linear prediction of an epoch's height and intensity, block by block.

Every block solves two small kriging systems (height over the smooth surface; intensity), with an unknown constant,
from the cells of the block and a margin around it. The solution depends only on its own epoch, so predicting
at a moved point costs one pass over the block's cells, however often the fit iterates. The gradient comes from the
same weights: being a prediction (Berkson type) and not a measurement of the slope, it does not dilute the regression
on it (Rasmussen & Williams 2006, ch. 2 and 9.4; Carroll et al. 2006 for the error type).
"""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import BLOCK_WIDTH, KEY_BITS, Cells, find_key, pack
from scanstrain.neighbourhood.covariance import Covariance
from scanstrain.neighbourhood.smooth import SmoothSurface
from scanstrain.neighbourhood.solve import back_rows, reduce_rows

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MAX_NEIGHBOURS = 64
PROBES = 4
"""Places, one cell apart, at which the error of a prediction is judged."""
MARGIN = 1.5
"""Cells kept around a block so that its border is predicted from both sides, in cells."""
_CONSTANT = 100.0
"""Prior variance of the unknown constant, relative to sill plus noise: large enough to leave it free."""
_FILLED = 0.7
"""Share of cells that hold a point where cells are as wide as the point spacing (Poisson: 0.63)."""
_SAME_SHEET = 0.8
"""Cosine between normals above which a neighbouring block counts as the same sheet."""


@dataclass(frozen=True, slots=True)
class Predictor:
    """Solved prediction systems of one epoch.

    Parameters
    ----------
    start : ndarray of shape (b + 1,)
        Neighbours of block i are `start[i]:start[i + 1]`.
    st : ndarray of shape (k, 2)
        Their tangent coordinates in the block's frame [m].
    height, intensity : ndarray of shape (k,)
        Their prediction weights (solution of the kriging system); intensity may be empty.
    constant : ndarray of shape (b, 2)
        Fitted constants of height [m] and intensity.
    variance, unresolved : ndarray of shape (b, 2)
        Prediction variance, and the part of it that is structure between the points rather than noise.
    through : ndarray of shape (b, 2)
        The rest of the prediction variance: noise of the neighbours that passes through the prediction.
    noise : ndarray of shape (b, 2)
        Noise variance of a single point in height [m^2] and intensity.
    sill : ndarray of shape (b, 2)
        Variance of the structure that is predicted; where it is 0 the prediction is the local mean.
    """

    cells: Cells
    surface: SmoothSurface
    start: IntArray
    st: FloatArray
    height: FloatArray
    intensity: FloatArray
    constant: FloatArray
    variance: FloatArray
    unresolved: FloatArray
    through: FloatArray
    noise: FloatArray
    sill: FloatArray
    height_table: FloatArray
    intensity_table: FloatArray
    table_step: float


@numba.njit(cache=True, nogil=True, inline="always")
def lookup(table: FloatArray, column: int, q: float, step: float) -> float:
    """Linear interpolation in a table over squared distance."""
    place = q / step
    i = int(place)
    if i >= len(table) - 1:
        return 0.0
    part = place - i
    return table[i, column] * (1.0 - part) + table[i + 1, column] * part


@numba.njit(cache=True, nogil=True)
def _neighbours(
    b: int, reach: float, gate: float, key: IntArray, start: IntArray, origin: FloatArray, frame: FloatArray,
    curvature: FloatArray, position: FloatArray, cells: IntArray, s: FloatArray, t: FloatArray, h: FloatArray,
) -> int:  # fmt: skip
    """Cells within `reach` of a block in its tangent plane, on its sheet; keeps the nearest if there are too many."""
    limit = len(cells)
    o0, o1, o2 = origin[b, 0], origin[b, 1], origin[b, 2]
    m = 0
    far = reach * reach
    for i in range(-1, 2):
        for j in range(-1, 2):
            for k in range(-1, 2):
                other = find_key(key, key[b] + (i << (2 * KEY_BITS)) + (j << KEY_BITS) + k)
                if other < 0:
                    continue
                dot = 0.0
                for a in range(3):
                    dot += frame[b, a, 2] * frame[other, a, 2]
                if abs(dot) < _SAME_SHEET:
                    continue
                for c in range(start[other], start[other + 1]):
                    d0, d1, d2 = position[c, 0] - o0, position[c, 1] - o1, position[c, 2] - o2
                    x = d0 * frame[b, 0, 0] + d1 * frame[b, 1, 0] + d2 * frame[b, 2, 0]
                    y = d0 * frame[b, 0, 1] + d1 * frame[b, 1, 1] + d2 * frame[b, 2, 1]
                    if x * x + y * y >= far:
                        continue
                    z = d0 * frame[b, 0, 2] + d1 * frame[b, 1, 2] + d2 * frame[b, 2, 2]
                    z -= 0.5 * curvature[b, 0] * x * x + curvature[b, 1] * x * y + 0.5 * curvature[b, 2] * y * y
                    if abs(z) > gate:
                        continue
                    if m < limit:
                        cells[m], s[m], t[m], h[m] = c, x, y, z
                        m += 1
                        if m == limit:
                            worst = np.argmax(s * s + t * t)
                            far = s[worst] ** 2 + t[worst] ** 2
                    else:
                        worst = np.argmax(s * s + t * t)
                        cells[worst], s[worst], t[worst], h[worst] = c, x, y, z
                        worst = np.argmax(s * s + t * t)
                        far = s[worst] ** 2 + t[worst] ** 2
    return m


@numba.njit(cache=True, nogil=True)
def _covariances(
    s: FloatArray, t: FloatArray, a: float, c: float, table: FloatArray, step: float, sill: float, constant: float,
    out: FloatArray,
) -> None:  # fmt: skip
    """Covariances of the values at the places (s, t) with that at (a, c)."""
    for i in range(len(out)):
        dx, dy = s[i] - a, t[i] - c
        out[i] = sill * lookup(table, 0, dx * dx + dy * dy, step) + constant


@numba.njit(cache=True, nogil=True)
def krige(
    s: FloatArray, t: FloatArray, values: FloatArray, share: FloatArray, m: int, table: FloatArray, step: float,
    noise: float, sill: float, probe: float, weights: FloatArray, W: FloatArray,
) -> tuple[float, float, float, float]:  # fmt: skip
    """Solve one ordinary kriging system.

    Fills `weights` with the sill times K^-1 (values), to be multiplied with correlations; returns the constant and
    what `_prediction_error` says for probes at (+-probe, +-probe). The values and the probes' covariances stand as
    right sides behind K in `W`, which holds at least m rows of m + 5, so that one pass factors and solves.
    """
    constant = _CONSTANT * (sill + noise)
    for i in range(m):
        _covariances(s[i:m], t[i:m], s[i], t[i], table, step, sill, constant, W[i, i:m])
        W[i, i] = sill + constant + noise * share[i]
        W[i, m] = values[i]
    side = np.empty(m)
    for p in range(PROBES):
        a, b = probe * (2 * (p % 2) - 1), probe * (2 * (p // 2) - 1)
        _covariances(s[:m], t[:m], a, b, table, step, sill, constant, side)
        for i in range(m):
            W[i, m + 1 + p] = side[i]
    if not reduce_rows(W, m, 1 + PROBES):
        weights[:m] = 0.0
        return values[:m].mean(), np.inf, np.inf, np.inf
    solved = np.empty((1 + PROBES, m))
    back_rows(W, m, solved)
    offset = 0.0
    for i in range(m):
        offset += solved[0, i]
        weights[i] = sill * solved[0, i]
    return (constant * offset, *_prediction_error(share, m, table, step, noise, sill, constant, probe, W, solved))


@numba.njit(cache=True, nogil=True)
def _prediction_error(
    share: FloatArray, m: int, table: FloatArray, step: float, noise: float, sill: float, constant: float,
    probe: float, W: FloatArray, solved: FloatArray,
) -> tuple[float, float, float]:  # fmt: skip
    """Prediction variance, what unresolved structure adds per row to the variance of a sum over many rows, noise alone.

    Judged at four probes one cell apart. Neighbouring rows miss the same structure, so to the variance of one row
    come its covariances with the four nearest and four diagonal neighbours, as far as these cells are filled.
    """
    variance = own = side = diagonal = 0.0
    for p in range(PROBES):
        ours = solved[1 + p]
        for q in range(p + 1):
            apart = (p % 2 != q % 2) + (p // 2 != q // 2)
            total = sill * lookup(table, 0, 4.0 * apart * probe * probe, step) + constant
            through = 0.0
            theirs = solved[1 + q]
            for i in range(m):
                total -= W[i, m + 1 + p] * W[i, m + 1 + q]
                through += ours[i] * theirs[i] * share[i]
            through *= noise
            if apart == 0:
                variance += 0.25 * max(total, through)
                own += 0.25 * max(total - through, 0.0)
            elif apart == 1:
                side += 0.25 * (total - through)
            else:
                diagonal += 0.5 * (total - through)
    return variance, max(own + _FILLED * 4.0 * (side + diagonal), 0.3 * own), variance - own


@numba.njit(cache=True, nogil=True, parallel=True)
def _count_neighbours(
    reach: float, gate: float, key: IntArray, start: IntArray, origin: FloatArray, frame: FloatArray,
    curvature: FloatArray, position: FloatArray, support: IntArray, out: IntArray,
) -> None:  # fmt: skip
    for b in numba.prange(len(key)):
        cells = np.empty(MAX_NEIGHBOURS, np.int64)
        s, t, h = np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS)
        out[b] = 0
        if support[b] >= 6:
            out[b] = _neighbours(b, reach, gate, key, start, origin, frame, curvature, position, cells, s, t, h)


@numba.njit(cache=True, nogil=True, parallel=True)
def _solve_blocks(
    reach: float, gate: float, key: IntArray, start: IntArray, origin: FloatArray, frame: FloatArray,
    curvature: FloatArray, position: FloatArray, size: float, intensity: FloatArray, count: FloatArray, first: IntArray,
    height_table: FloatArray, intensity_table: FloatArray, step: float, noise: FloatArray,
    sill: FloatArray, st: FloatArray, weights_h: FloatArray, weights_i: FloatArray, constant: FloatArray,
    variance: FloatArray, unresolved: FloatArray, through: FloatArray,
) -> None:  # fmt: skip
    for b in numba.prange(len(key)):
        m = first[b + 1] - first[b]
        if m == 0:
            variance[b, :] = through[b, :] = np.inf
            continue
        cells = np.empty(MAX_NEIGHBOURS, np.int64)
        s, t, h = np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS), np.empty(MAX_NEIGHBOURS)
        W = np.empty((m, m + 1 + PROBES))
        _neighbours(b, reach, gate, key, start, origin, frame, curvature, position, cells, s, t, h)
        share, grey, w = np.empty(m), np.empty(m), np.empty(m)
        for i in range(m):
            share[i] = 1.0 / count[cells[i]]
            st[first[b] + i, 0], st[first[b] + i, 1] = s[i], t[i]
        probe = 0.5 * size / BLOCK_WIDTH
        constant[b, 0], variance[b, 0], unresolved[b, 0], through[b, 0] = krige(
            s, t, h, share, m, height_table, step, noise[b, 0], sill[b, 0], probe, w, W
        )
        weights_h[first[b] : first[b] + m] = w
        if len(intensity):
            for i in range(m):
                grey[i] = intensity[cells[i]]
            constant[b, 1], variance[b, 1], unresolved[b, 1], through[b, 1] = krige(
                s, t, grey, share, m, intensity_table, step, noise[b, 1], sill[b, 1], probe, w, W
            )
            weights_i[first[b] : first[b] + m] = w


def build_predictor(
    cells: Cells, surface: SmoothSurface, height: Covariance, intensity: Covariance | None, *, gate: float
) -> Predictor:
    """Solve the prediction systems of every block.

    Parameters
    ----------
    cells, surface
        An epoch and its smooth surface at the blocks.
    height, intensity : Covariance
        Measured covariances; without `intensity` only height is predicted.
    gate : float
        Cells farther than this from the smooth surface are clutter [m].
    """
    blocks = len(cells.key)
    reach = cells.resolution * (BLOCK_WIDTH * 0.5 * np.sqrt(2) * 1.15 + MARGIN)
    height_table, step = height.table(2.2 * reach)
    intensity_table, _ = (intensity or height).table(2.2 * reach)
    grey = cells.intensity if intensity is not None and cells.intensity is not None else np.empty(0)
    other = intensity or height
    noise = np.maximum(np.stack([height.noise, other.noise], axis=1), 1e-18)
    sill = np.stack([height.sill, other.sill], axis=1)
    shared = (
        reach, gate, cells.key, cells.start, surface.origin, surface.frame, surface.curvature, cells.position,
    )  # fmt: skip
    found = np.zeros(blocks, np.int64)
    _count_neighbours(*shared, surface.support, found)
    first = np.r_[0, np.cumsum(found)].astype(np.int64)
    total = int(first[-1])
    st, weights_h = np.empty((total, 2)), np.empty(total)
    weights_i = np.empty(total if len(grey) else 0)
    constant, variance, unresolved, through = (np.zeros((blocks, 2)) for _ in range(4))
    _solve_blocks(
        *shared, cells.block_size, grey, cells.count, first, height_table, intensity_table, step, noise, sill,
        st, weights_h, weights_i, constant, variance, unresolved, through,
    )  # fmt: skip
    return Predictor(
        cells, surface, first, st, weights_h, weights_i, constant, variance, unresolved, through, noise, sill,
        height_table, intensity_table, step,
    )  # fmt: skip


@numba.njit(cache=True, nogil=True)
def choose_block(x: float, y: float, z: float, key: IntArray, first: IntArray, size: float, origin: FloatArray) -> int:
    """Block that serves a place: the one it lies in, or else the nearest of the 26 around it; -1 if none."""
    base = pack(int(np.floor(x / size)), int(np.floor(y / size)), int(np.floor(z / size)))
    own = find_key(key, base)
    if own >= 0 and first[own + 1] - first[own] >= 6:
        return own
    best, nearest = -1, 1e300
    for i in range(-1, 2):
        for j in range(-1, 2):
            for k in range(-1, 2):
                b = find_key(key, base + (i << (2 * KEY_BITS)) + (j << KEY_BITS) + k)
                if b < 0 or first[b + 1] - first[b] < 6:
                    continue
                d = (origin[b, 0] - x) ** 2 + (origin[b, 1] - y) ** 2 + (origin[b, 2] - z) ** 2
                if d < nearest:
                    best, nearest = b, d
    return best


@numba.njit(cache=True, nogil=True)
def _weighted(
    places: FloatArray, weights: FloatArray, s: float, t: float, table: FloatArray, step: float
) -> tuple[float, float, float, float]:
    """Sum of weights times correlations with (s, t), its two derivatives, and the nearest place's squared distance."""
    last = len(table) - 1
    value = along = across = 0.0
    nearest = 1e300
    for r in range(len(weights)):
        a, c = s - places[r, 0], t - places[r, 1]
        q = a * a + c * c
        nearest = min(nearest, q)
        place = q / step
        row = min(int(place), last - 1)
        part = place - row
        w = weights[r] if place < last else 0.0
        value += w * (table[row, 0] * (1.0 - part) + table[row + 1, 0] * part)
        slope = w * (table[row, 1] * (1.0 - part) + table[row + 1, 1] * part)
        along += slope * a
        across += slope * c
    return value, along, across, nearest


@numba.njit(cache=True, nogil=True)
def predict_at(
    b: int, x: float, y: float, z: float, origin: FloatArray, frame: FloatArray, curvature: FloatArray, first: IntArray,
    st: FloatArray, weights_h: FloatArray, weights_i: FloatArray, constant: FloatArray, height_table: FloatArray,
    intensity_table: FloatArray, step: float, out: FloatArray,
) -> bool:  # fmt: skip
    """Predict at a place; False outside the block's support.

    Fills `out` with: height above the predicted surface [m], its gradient in local axes (3), intensity, its
    gradient (3).
    """
    d0, d1, d2 = x - origin[b, 0], y - origin[b, 1], z - origin[b, 2]
    s = d0 * frame[b, 0, 0] + d1 * frame[b, 1, 0] + d2 * frame[b, 2, 0]
    t = d0 * frame[b, 0, 1] + d1 * frame[b, 1, 1] + d2 * frame[b, 2, 1]
    h = d0 * frame[b, 0, 2] + d1 * frame[b, 1, 2] + d2 * frame[b, 2, 2]
    k11, k12, k22 = curvature[b, 0], curvature[b, 1], curvature[b, 2]
    m = constant[b, 0] + 0.5 * k11 * s * s + k12 * s * t + 0.5 * k22 * t * t
    ms, mt = k11 * s + k12 * t, k12 * s + k22 * t
    low, high = first[b], first[b + 1]
    places, mine = st[low:high], weights_h[low:high]
    du, dus, dut, nearest = _weighted(places, mine, s, t, height_table, step)
    m, ms, mt = m + du, ms + dus, mt + dut
    grey, gs, gt = constant[b, 1], 0.0, 0.0
    if len(weights_i) > 0:
        du, gs, gt, _ = _weighted(places, weights_i[low:high], s, t, intensity_table, step)
        grey += du
    out[0] = h - m
    for a in range(3):
        out[1 + a] = frame[b, a, 2] - ms * frame[b, a, 0] - mt * frame[b, a, 1]
        out[5 + a] = gs * frame[b, a, 0] + gt * frame[b, a, 1]
    out[4] = grey
    # A place farther from every cell than this is a hole or lies beyond the border: no prediction there.
    return nearest <= height_table.shape[0] * step * 0.08
