# SPDX-License-Identifier: MIT
"""The noise of both epochs as it stands in their difference: points averaged in small squares, motion taken out.

One epoch alone cannot tell noise that neighbours share from relief or texture; the difference of two can. Points are
taken as they are, over the predicted reference, since predictions share noise with their neighbours by themselves.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, group, voxel_keys
from scanstrain.neighbourhood.fit import members_of, placed, turned
from scanstrain.neighbourhood.joint_cuts import keep_own_side
from scanstrain.neighbourhood.rows import LEAST_NOISE
from scanstrain.neighbourhood.solve import solve_in_place
from scanstrain.neighbourhood.squares import quadratic_forms, square_of
from scanstrain.neighbourhood.warp import blend, nearest_gauges

if TYPE_CHECKING:
    from scanstrain.neighbourhood.level import Estimate, Level

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

PATCH = 1.5
"""Diameter of the patches whose differences are judged, in gauge lengths: a fit leaves little of noise shared over
half of its own width, while more than this would mistake motion for noise."""
OUTLYING = 4.5
"""Squares beyond this many standard deviations are clutter or change."""
_FEWEST = 6
"""Squares for each unknown below which a patch says nothing."""

# Columns of the tables of differences; the first two are those of the fit.
_POSITION, _NORMAL, _VALUE, _NOISE, _UNIT, _BRIGHTNESS, _MOTION, _COLUMNS = 0, 3, 6, 8, 10, 12, 13, 16
# Columns of the sums over a square: count, values, noise, units, brightness.
_SUMS = 8


def unit_noise(level: Level) -> FloatArray:
    """Noise variance of a single reference point about every cell, shape (c, 2): the unit of correlated noise."""
    return np.asarray(level.comparison.noise + np.array([LEAST_NOISE**2, 1e-18]))


def _near(position: FloatArray, places: FloatArray, radius: float) -> NDArray[np.bool_]:
    """Positions in the voxels of width `radius` around the places: all those within that radius, and some more."""
    steps = [(i << (2 * KEY_BITS)) + (j << KEY_BITS) + k for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]
    wanted = np.unique(voxel_keys(places, radius)[:, None] + np.array(steps))
    return np.isin(voxel_keys(position, radius), wanted)


def _shown(state: Estimate) -> FloatArray:
    """Present motion of the gauges (g, 12) without the slides that nothing shows.

    Those are each gauge's own chance, and between gauges of a curved surface their differences would look like height.
    """
    held = state.held.copy()
    for i in (0, 1, 3, 4, 5, 6):
        held[~(state.data_sd[:, i] <= state.required[i]), i] = 0.0
    return held


def _tables(level: Level, state: Estimate, places: FloatArray, radius: float) -> tuple[FloatArray, FloatArray]:
    """Both epochs about the places: reference cells, and current cells moved back."""
    comparison, g = level.comparison, level.gauges
    ours, theirs = comparison.cells, comparison.current.cells
    here = np.flatnonzero(_near(ours.position, places, radius) & comparison.own_valid)
    there = np.flatnonzero(_near(theirs.position, places, radius))
    moved = np.zeros((len(there), 3))
    nearest = nearest_gauges(theirs.position[there], g.origin)
    held = _shown(state)
    blend(theirs.position[there], nearest, g.origin, g.frame, held, level.radius, level.spacing, moved)
    back = comparison.back(there, moved, 10 * level.reference.gate)
    fine = back.valid & (np.abs(back.misfit) < level.reference.gate)
    own = comparison.own
    tables = []
    for cells, chosen, place, normal, slope, height, grey, noise in (
        (ours, here, ours.position[here], comparison.normal[here], own.slope[here], own.misfit[here], own.grey[here],
         comparison.noise[here]),
        (theirs, there[fine], (theirs.position[there] - moved)[fine], back.normal[fine], back.slope[fine],
         back.misfit[fine], back.grey[fine], back.noise[fine]),
    ):  # fmt: skip
        table = np.zeros((len(chosen), _COLUMNS))
        table[:, _POSITION : _POSITION + 3], table[:, _NORMAL : _NORMAL + 3] = place, normal
        # The signs of normals and slopes are arbitrary, each for itself.
        table[:, _VALUE] = height * np.sign(np.einsum("ca,ca->c", slope, normal))
        table[:, _NOISE : _NOISE + 2] = (noise + np.array([LEAST_NOISE**2, 1e-18])) / cells.count[chosen, None]
        if level.textured and cells.intensity is not None:
            table[:, _BRIGHTNESS] = cells.intensity[chosen]
            table[:, _VALUE + 1] = table[:, _BRIGHTNESS] - grey
        tables.append(table)
    tables[0][:, _UNIT : _UNIT + 2] = unit_noise(level)[here]
    tables[1][:, _MOTION : _MOTION + 3] = moved[fine]
    return tables[0], tables[1]


@numba.njit(cache=True, nogil=True)
def _square_sums(
    o: FloatArray, f: FloatArray, k: FloatArray, radius: float, gate: float, key: IntArray, start: IntArray,
    table: FloatArray, members: IntArray, across: int, pieces: FloatArray,
) -> FloatArray:  # fmt: skip
    """Sum the members of a patch over its squares."""
    sums = np.zeros((across, across, _SUMS))
    found = members_of(o, f, k, radius, gate, key, start, table, members)
    for r in range(keep_own_side(o, f, pieces, table, members, found)):
        row = table[members[r]]
        x, y, _ = placed(table, members[r], o, f)
        facing = row[_NORMAL] * f[0, 2] + row[_NORMAL + 1] * f[1, 2] + row[_NORMAL + 2] * f[2, 2]
        s = sums[square_of(x, radius, across), square_of(y, radius, across)]
        s[0] += 1.0
        # Of the motion, the part along the normal of the smooth patch stays in: it is nearly a quadratic. What a slide
        # does through the slope of relief is taken out, since it looks like relief.
        s[1] += row[_VALUE] if facing > 0.0 else -row[_VALUE]
        u, v, w = turned(row[_MOTION], row[_MOTION + 1], row[_MOTION + 2], f)
        p, q = x + 0.5 * u, y + 0.5 * v
        slope, across_slope = k[0] * p + k[1] * q, k[1] * p + k[2] * q
        s[1] += (w - slope * u - across_slope * v) / np.sqrt(1.0 + slope**2 + across_slope**2)
        for column in range(2, _SUMS):
            s[column] += row[_VALUE + column - 1]
    return sums


@numba.njit(cache=True, nogil=True)
def _contrast(
    ours: FloatArray, theirs: FloatArray, kind: int, a: FloatArray, y: FloatArray, c: FloatArray
) -> None:  # fmt: skip
    """Difference of both epochs in every square in units of the noise, its design and its weight.

    Of height, the motion is a quadratic; of intensity, an offset and a gain.
    """
    across = len(y)
    for i in range(across):
        for j in range(across):
            s, t = ours[i, j], theirs[i, j]
            if s[0] == 0.0 or t[0] == 0.0:
                continue
            unit = np.sqrt(s[5 + kind] / s[0])
            y[i, j] = (t[1 + kind] / t[0] - s[1 + kind] / s[0]) / unit
            c[i, j] = unit * unit / (s[3 + kind] / s[0] ** 2 + t[3 + kind] / t[0] ** 2)
            p, q = (2.0 * i + 1.0) / across - 1.0, (2.0 * j + 1.0) / across - 1.0
            if kind == 0:
                a[i, j] = np.array([1.0, p, q, p * p, p * q, q * q])
            else:
                a[i, j] = np.array([1.0, t[7] / t[0]])


@numba.njit(cache=True, nogil=True)
def _leave(a: FloatArray, y: FloatArray, c: FloatArray, e: FloatArray) -> bool:
    """Residuals `e` of a fit to the squares; those far out get the weight 0 in `c`. False where too few are left."""
    n = a.shape[2]
    N, b = np.zeros((n, n)), np.zeros(n)
    size = np.zeros(y.size)
    for turn in range(3):
        N[:, :], b[:] = 0.0, 0.0
        for i, j in np.ndindex(y.shape):
            for u in range(n):
                b[u] += c[i, j] * a[i, j, u] * y[i, j]
                for v in range(u + 1):
                    N[u, v] += c[i, j] * a[i, j, u] * a[i, j, v]
        for u in range(n):
            N[u, u] = N[u, u] * (1.0 + 1e-9) + 1e-12
        if not solve_in_place(N, b, n):
            return False
        m = 0
        for i, j in np.ndindex(y.shape):
            e[i, j] = y[i, j] - np.sum(a[i, j] * b)
            if c[i, j] > 0.0:
                size[m] = abs(e[i, j]) * np.sqrt(c[i, j])
                m += 1
        if m < _FEWEST * n:
            return False
        limit = OUTLYING * 1.4826 * np.median(size[:m])
        for i, j in np.ndindex(y.shape):
            if turn < 2 and abs(e[i, j]) * np.sqrt(c[i, j]) > limit:
                c[i, j] = 0.0
    return True


@numba.njit(cache=True, nogil=True, parallel=True)
def _patch_forms(
    chosen: IntArray, origin: FloatArray, frame: FloatArray, shape: FloatArray, radius: float, gate: float,
    capacity: int, key: IntArray, start: IntArray, table: FloatArray, other_key: IntArray, other_start: IntArray,
    other: FloatArray, lengths: FloatArray, across: int, pieces: FloatArray, piece_start: IntArray, q: FloatArray,
    T: FloatArray,
) -> None:  # fmt: skip
    for p in numba.prange(len(chosen)):
        g = chosen[p]
        o, f, k = origin[g], frame[g], shape[g]
        members, cut = np.empty(capacity, np.int64), pieces[piece_start[g] : piece_start[g + 1]]
        ours = _square_sums(o, f, k, radius, gate, key, start, table, members, across, cut)
        theirs = _square_sums(o, f, k, radius, gate, other_key, other_start, other, members, across, cut)
        for kind in range(q.shape[1]):
            n = 6 if kind == 0 else 2
            a, y = np.zeros((across, across, n)), np.zeros((across, across))
            c, e = np.zeros((across, across)), np.zeros((across, across))
            _contrast(ours, theirs, kind, a, y, c)
            if _leave(a, y, c, e):
                for u in range(n):
                    a[:, :, u] *= c
                quadratic_forms(
                    a, (c * e).reshape(across, across, 1), c.reshape(across, across, 1), 2.0 * radius / across,
                    lengths, q[p, kind], T[p, kind],
                )  # fmt: skip


def difference_forms(
    level: Level, state: Estimate, chosen: IntArray, lengths: FloatArray, squares: int
) -> tuple[FloatArray, FloatArray]:
    """Quadratic forms of the noise in patches about the gauges `chosen`.

    Parameters
    ----------
    level : Level
        The finest one.
    state : Estimate
        After the last fit.
    chosen : ndarray of shape (p,)
        Numbers of the gauges.
    lengths : ndarray of shape (c,)
        Correlation lengths [m].
    squares : int
        Squares across a gauge.

    Returns
    -------
    q, T : ndarray of shape (p, k, c + 1), (p, k, c + 1, c + 1)
        As of `squares.quadratic_forms`, of height and, on textured surfaces, of intensity; T is 0 where a patch shows
        too little.
    """
    g, radius = level.gauges, PATCH * level.radius
    kinds, components = 2 if level.textured else 1, len(lengths) + 1
    q, T = np.zeros((len(chosen), kinds, components)), np.zeros((len(chosen), kinds, components, components))
    hashed = []
    for table in _tables(level, state, g.origin[chosen], radius):
        order, key, start = group(voxel_keys(np.ascontiguousarray(table[:, :3]), radius))
        hashed += [key, start, table[order]]
    capacity = int(3 * np.pi * (radius / level.reference.cells.resolution) ** 2) + 256
    _patch_forms(
        chosen, g.origin, g.frame, g.curvature, radius, level.reference.gate + 0.1 * radius, capacity, *hashed,
        lengths, int(np.ceil(PATCH * squares)), level.cuts.pieces, level.cuts.start, q, T,
    )  # fmt: skip
    return q, T
