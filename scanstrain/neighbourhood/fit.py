# SPDX-License-Identifier: MIT
"""The compiled local fit: one weighted least-squares affine map per gauge, re-weighted against outliers.

Unknowns in the gauge frame, in the order of `result.PARAMETERS`, then gain and offset of intensity. A surface
row says that the moved cell lies on the predicted surface, `s.(u(x) - u0) = -misfit`; an intensity row that its
intensity is the predicted one times a gain plus an offset. Both are weighted by their variance, and the ratio of
observed to expected residuals scales each kind (variance components after Foerstner 1979, many rows a gauge).

Motion unknowns are scaled to metres at the gauge's rim: gradients times the radius, second derivatives times its
square. So one prior standard deviation means the same for all, and the equations are well conditioned.
"""

from __future__ import annotations

import math

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, find_key, pack
from scanstrain.neighbourhood.joint_cuts import keep_own_side
from scanstrain.neighbourhood.solve import accumulate, inverse, solve_in_place

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

UNKNOWNS = 14
MOTION = 12
GREY_UNKNOWNS = np.array([0, 1, 2, 3, 4, 5, 6, 7, 8, 12, 13])
"""Unknowns of which intensity rows depend: all but the second derivatives of the normal part."""
TUKEY = 6.0
"""Cut-off of the redescending weight in standard deviations: 98 % efficient, blind to gross errors."""
ROUNDS = 2
"""Solutions a comparison, each with weights from the residuals of the one before."""
SAME_SHEET = 0.8
"""Cosine between a cell's normal and the gauge's above which the cell is on the gauge's sheet (37 degrees)."""
LEAST_SCALE = 0.1
"""Least variance factor that a standard error may rest on: where residuals fall farther below the noise model, the two
scans share points, and their agreement is no measure of error."""
COVER_BINS = 10
"""Squares across a gauge in which its cover is counted."""
_DISC_BINS = 80.0
"""Squares of that grid that a whole disc touches."""

# Columns of the table of observations, one row a reference cell.
POSITION, NORMAL, COUNT, VALID, MOVED, MISFIT, SLOPE, GREY, GREY_SLOPE, VARIANCE, OWN_GREY = (
    0, 3, 6, 7, 8, 11, 12, 15, 16, 19, 23,
)  # fmt: skip
COLUMNS = 24

# Columns of what is said about every gauge.
CELLS, MATCHED, POINTS, SCALE_NORMAL, SCALE_GREY, COVER = range(6)


def _tukey_moments(cut: float) -> tuple[float, float]:
    """For Gaussian residuals: weighted over plain variance, and sandwich over weighted-normal covariance.

    In closed form, by M_k = (2 k - 1) M_(k-1) - 2 c^(2 k - 1) phi(c) for the moments of r^(2 k) within the cut-off c.
    """
    moments = [math.erf(cut / math.sqrt(2.0))]
    rim = math.exp(-0.5 * cut * cut) / math.sqrt(2.0 * math.pi)
    for k in range(1, 6):
        moments.append((2 * k - 1) * moments[-1] - 2.0 * cut ** (2 * k - 1) * rim)

    def mean(first: int, *coefficients: float) -> float:
        """Mean of r^(2 first) times a polynomial in (r / c)^2."""
        return sum(c * moments[first + k] / cut ** (2 * k) for k, c in enumerate(coefficients))

    # w = (1 - q)^2, its product with r^2, (w r)^2 and (w r)' in powers of q = (r / c)^2
    weight, squares = mean(0, 1.0, -2.0, 1.0), mean(1, 1.0, -2.0, 1.0)
    return squares / weight, mean(1, 1.0, -4.0, 6.0, -4.0, 1.0) / mean(0, 1.0, -6.0, 5.0) ** 2 * weight


TUKEY_SHRINK, TUKEY_INFLATE = _tukey_moments(TUKEY)
"""Constants of the redescending weight for Gaussian residuals (closed-form integrals)."""


@numba.njit(cache=True, nogil=True, inline="always")
def turned(x: float, y: float, z: float, f: FloatArray) -> tuple[float, float, float]:
    """Components of the vector (x, y, z) in the columns of `f`; single numbers, since an array a cell costs more."""
    return (
        x * f[0, 0] + y * f[1, 0] + z * f[2, 0],
        x * f[0, 1] + y * f[1, 1] + z * f[2, 1],
        x * f[0, 2] + y * f[1, 2] + z * f[2, 2],
    )


@numba.njit(cache=True, nogil=True, inline="always")
def placed(table: FloatArray, c: int, o: FloatArray, f: FloatArray) -> tuple[float, float, float]:
    """Place of row `c` of a table, which begins with places, in the frame `f` at `o`."""
    return turned(table[c, 0] - o[0], table[c, 1] - o[1], table[c, 2] - o[2], f)


@numba.njit(cache=True, nogil=True)
def members_of(
    o: FloatArray, f: FloatArray, k: FloatArray, radius: float, gate: float, key: IntArray, start: IntArray,
    table: FloatArray, out: IntArray,
) -> int:  # fmt: skip
    """List the cells of a gauge: within its radius, on its own sheet; `key` hashes cells by voxels of that radius."""
    base = pack(int(np.floor(o[0] / radius)), int(np.floor(o[1] / radius)), int(np.floor(o[2] / radius)))
    m = 0
    for step in range(27):
        near = ((step // 9 - 1) << (2 * KEY_BITS)) + ((step // 3 % 3 - 1) << KEY_BITS) + step % 3 - 1
        b = find_key(key, base + near)
        if b < 0:
            continue
        for c in range(start[b], start[b + 1]):
            x, y, z = placed(table, c, o, f)
            if x * x + y * y > radius * radius:
                continue
            z -= 0.5 * k[0] * x * x + k[1] * x * y + 0.5 * k[2] * y * y
            facing = table[c, NORMAL] * f[0, 2] + table[c, NORMAL + 1] * f[1, 2] + table[c, NORMAL + 2] * f[2, 2]
            if abs(z) < gate and abs(facing) > SAME_SHEET and m < len(out):
                out[m] = c
                m += 1
    return m


@numba.njit(cache=True, nogil=True)
def _keep_matched(
    total: int, members: IntArray, o: FloatArray, f: FloatArray, radius: float, table: FloatArray, info: FloatArray
) -> int:
    """Drop members that the current epoch does not show; fill the counts of `info`."""
    m = 0
    points = 0.0
    cover = np.zeros((COVER_BINS, COVER_BINS), np.bool_)
    for r in range(total):
        c = members[r]
        if table[c, VALID] == 0.0:
            continue
        members[m] = c
        m += 1
        points += table[c, COUNT]
        x, y, _ = placed(table, c, o, f)
        half = 0.4999 * COVER_BINS
        cover[int((x / radius + 1.0) * half), int((y / radius + 1.0) * half)] = True
    info[CELLS], info[MATCHED], info[POINTS], info[COVER] = total, m, points, cover.sum() / _DISC_BINS
    return m


@numba.njit(cache=True, nogil=True, inline="always")
def _design(
    s: tuple[float, float, float], x1: float, x2: float, x3: float, curved: bool, a: FloatArray, r: int
) -> None:  # fmt: skip
    """Derivatives of s.u(x) by the motion unknowns into column `r`; second derivatives only where `curved`.

    The height coordinate enters because a tilt turns it into the plane: without it a pure rotation of a curved
    patch would not be an exact solution.
    """
    a[0, r], a[1, r], a[2, r] = s[0], s[1], s[2]
    a[3, r], a[4, r], a[5, r], a[6, r] = s[0] * x1, s[0] * x2, s[1] * x1, s[1] * x2
    a[7, r], a[8, r] = s[2] * x1 - s[0] * x3, s[2] * x2 - s[1] * x3
    if curved:
        a[9, r], a[10, r], a[11, r] = 0.5 * s[2] * x1 * x1, s[2] * x1 * x2, 0.5 * s[2] * x2 * x2


@numba.njit(cache=True, nogil=True)
def observation_rows(
    members: IntArray, o: FloatArray, f: FloatArray, radius: float, table: FloatArray, gain: float,
    surface: FloatArray, grey: FloatArray, data: FloatArray,
) -> None:  # fmt: skip
    """Fill surface rows (12, m), intensity rows (11, m) and `data`: two right sides, two variances, two spreads.

    Intensity says nothing of second derivatives, so its rows leave them out; see `GREY_UNKNOWNS`.
    """
    m = len(members)
    textured = grey.shape[1] > 0
    mean = 0.0
    for r in range(m):
        mean += table[members[r], GREY] / m
    for r in range(m):
        c = members[r]
        x, y, z = placed(table, c, o, f)
        x, y, z = x / radius, y / radius, z / radius
        s0, s1, s2 = table[c, SLOPE], table[c, SLOPE + 1], table[c, SLOPE + 2]
        u0, u1, u2 = table[c, MOVED], table[c, MOVED + 1], table[c, MOVED + 2]
        _design(turned(s0, s1, s2, f), x, y, z, True, surface, r)
        data[0, r] = s0 * u0 + s1 * u1 + s2 * u2 - table[c, MISFIT]
        data[2, r], data[4, r] = table[c, VARIANCE], table[c, VARIANCE + 2]
        if textured:
            s0, s1, s2 = (
                gain * table[c, GREY_SLOPE], gain * table[c, GREY_SLOPE + 1], gain * table[c, GREY_SLOPE + 2],
            )  # fmt: skip
            _design(turned(s0, s1, s2, f), x, y, z, False, grey, r)
            grey[9, r], grey[10, r] = table[c, GREY] - mean, 1.0
            data[1, r] = table[c, OWN_GREY] - gain * table[c, GREY] + s0 * u0 + s1 * u1 + s2 * u2
            data[3, r], data[5, r] = table[c, VARIANCE + 1], table[c, VARIANCE + 3]


@numba.njit(cache=True, nogil=True)
def reweight(
    rows: FloatArray, rhs: FloatArray, spread: FloatArray, variance: FloatArray, x: FloatArray, scale: float,
    start: bool, spent: int, w: FloatArray,
) -> float:  # fmt: skip
    """Weigh rows by their residuals at `x`; returns the variance factor (observed over expected spread).

    At the start the scale is not known and comes from the median residual. `spent` unknowns were fitted to the rows.
    """
    n, m = rows.shape
    e = rhs.copy()
    for i in range(n):
        value, row = x[i], rows[i]
        for r in range(m):
            e[r] -= row[r] * value
    for r in range(m):
        e[r] = e[r] * e[r] / spread[r]
    if start:
        scale = (1.4826 * np.median(np.sqrt(e))) ** 2
    cut = 1.0 / (TUKEY * TUKEY * max(scale, 1e-12))
    total = weighted = 0.0
    for r in range(m):
        q = 1.0 - e[r] * cut
        k = q * q if q > 0.0 else 0.0
        w[r] = k / variance[r]
        total += k
        weighted += k * e[r]
    return max(weighted / max(total - spent, 1.0) / TUKEY_SHRINK, 1e-12)


@numba.njit(cache=True, nogil=True)
def _normal_equations(
    surface: FloatArray, grey: FloatArray, data: FloatArray, x: FloatArray, scales: FloatArray, start: bool,
    weak: float, N: FloatArray, b: FloatArray,
) -> None:  # fmt: skip
    """Weigh all rows at `x` and sum them; `weak` [m] is the prior that keeps unobservable unknowns finite."""
    m = surface.shape[1]
    w = np.empty(m)
    N[:, :] = 0.0
    b[:] = 0.0
    scales[0] = reweight(surface, data[0], data[4], data[2], x[:MOTION], scales[0], start, 6, w)
    accumulate(surface, data[0], w / scales[0], N, b)
    if grey.shape[1]:
        scales[1] = reweight(grey, data[1], data[5], data[3], x[GREY_UNKNOWNS], scales[1], start, 8, w)
        part, right = np.zeros((len(grey), len(grey))), np.zeros(len(grey))
        accumulate(grey, data[1], w / scales[1], part, right)
        for i in range(len(grey)):
            b[GREY_UNKNOWNS[i]] += right[i]
            for j in range(i + 1):
                N[GREY_UNKNOWNS[i], GREY_UNKNOWNS[j]] += part[i, j]
    for i in range(MOTION):
        N[i, i] += 1.0 / weak**2


@numba.njit(cache=True, nogil=True)
def _held_solution(N: FloatArray, b: FloatArray, n: int, start_values: FloatArray, hold: float, x: FloatArray) -> bool:
    """Solve with the tangential unknowns drawn to `start_values`: where to linearise next."""
    M, y = N.copy(), b.copy()
    for i in (0, 1, 3, 4, 5, 6):
        M[i, i] += 1.0 / hold**2
        y[i] += start_values[i] / hold**2
    if not solve_in_place(M, y, n):
        return False
    x[:n] = y[:n]
    return True


@numba.njit(cache=True, nogil=True)
def _final_solution(
    N: FloatArray, b: FloatArray, n: int, inflate: float, required: FloatArray, nuisance: FloatArray,
    values: FloatArray, covariance: FloatArray, data_sd: FloatArray,
) -> None:  # fmt: skip
    """Standard errors from the data alone, then the solution with bounds on what they do not determine."""
    Q = np.zeros((UNKNOWNS, UNKNOWNS))
    if not inverse(N, n, Q):
        return
    for i in range(MOTION):
        data_sd[i] = np.sqrt(Q[i, i] * inflate)
        if not data_sd[i] <= required[i]:
            N[i, i] += 1.0 / nuisance[i] ** 2
    if not inverse(N, n, Q):
        return
    for i in range(MOTION):
        v = 0.0
        for j in range(n):
            v += Q[i, j] * b[j]
        values[i] = v
    covariance[:, :] = Q[:MOTION, :MOTION] * inflate


@numba.njit(cache=True, nogil=True, parallel=True)
def fit_gauges(
    origin: FloatArray, frame: FloatArray, shape: FloatArray, radius: float, sheet_gate: float, weak: float,
    required: FloatArray, nuisance: FloatArray, hold: float, min_cells: int, capacity: int, textured: bool,
    key: IntArray, start: IntArray, table: FloatArray, gains: FloatArray, held: FloatArray, values: FloatArray,
    covariance: FloatArray, data_sd: FloatArray, info: FloatArray, pieces: FloatArray, piece_start: IntArray,
) -> None:  # fmt: skip
    """Fit every gauge.

    Parameters
    ----------
    origin, frame, shape : ndarray of shape (g, 3), (g, 3, 3), (g, 3)
        Places, frames and surface curvatures of the gauges.
    radius, sheet_gate : float
        Of the patch, and largest distance of a member from the smooth surface [m].
    weak : float
        Standard deviation [m] of the prior that keeps the equations solvable.
    required : ndarray of shape (12,)
        Largest standard errors from the data alone at which an unknown counts as observed [m].
    nuisance : ndarray of shape (12,)
        Standard deviations [m] of what a structure can do in the unknowns that are not observed: bounds the damage
        that these do to the others. It does not touch what is observed.
    hold : float
        Standard deviation [m] of the prior that holds tangential unknowns of the linearisation at what they were.
    min_cells, capacity : int
        Fewest and most cells of a gauge.
    textured : bool
        Whether intensity rows are used.
    key, start : ndarray
        Hash of the table's rows by voxels of width `radius`.
    table : ndarray of shape (c, 24)
        Observations, see the column constants.
    gains, held : ndarray of shape (g,), (g, 12)
        Present gain of intensity, and motion at which the rows were linearised; both become the next ones.
    values, covariance, data_sd : ndarray of shape (g, 12), (g, 12, 12), (g, 12)
        Result [m], its covariance [m^2], and standard errors from the data alone, which decide observability [m].
    info : ndarray of shape (g, 6)
        Cells, matched cells, points, variance factors of surface and intensity rows, covered share of the disc.
    pieces, piece_start : ndarray
        Joints about every gauge, as of `joint_cuts.Cuts`: what lies beyond them is not of the gauge.
    """
    for g in numba.prange(len(origin)):
        members = np.empty(capacity, np.int64)
        o, f = origin[g], frame[g]
        values[g, :] = np.nan
        info[g, SCALE_NORMAL] = info[g, SCALE_GREY] = np.nan
        found = members_of(o, f, shape[g], radius, sheet_gate, key, start, table, members)
        found = keep_own_side(o, f, pieces[piece_start[g] : piece_start[g + 1]], table, members, found)
        m = _keep_matched(found, members, o, f, radius, table, info[g])
        if m < min_cells:
            continue
        n = UNKNOWNS if textured else MOTION
        surface, grey, data = (
            np.empty((MOTION, m)),
            np.empty((len(GREY_UNKNOWNS), m if textured else 0)),
            np.empty((6, m)),
        )
        observation_rows(members[:m], o, f, radius, table, gains[g], surface, grey, data)
        N, b, x = np.zeros((UNKNOWNS, UNKNOWNS)), np.zeros(UNKNOWNS), np.zeros(UNKNOWNS)
        x[:MOTION] = held[g]
        scales = np.ones(2)
        solved = True
        for turn in range(ROUNDS):
            _normal_equations(surface, grey, data, x, scales, turn == 0, weak, N, b)
            solved = solved and _held_solution(N, b, n, held[g], hold, x)
        if not solved:
            continue
        held[g] = x[:MOTION]
        inflate = TUKEY_INFLATE * max(1.0, LEAST_SCALE / (scales.min() if textured else scales[0]))
        _final_solution(N, b, n, inflate, required, nuisance, values[g], covariance[g], data_sd[g])
        info[g, SCALE_NORMAL] = scales[0]
        if textured:
            info[g, SCALE_GREY] = scales[1]
            gains[g] = min(max(gains[g] + x[12], 0.2), 5.0)
