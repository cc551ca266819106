# SPDX-License-Identifier: MIT
"""The compiled local fit: one weighted least-squares affine map per gauge, re-weighted against outliers.

Unknowns in the gauge frame, in the order of `result.PARAMETERS`, then gain and offset of intensity. A surface
row says that the moved cell lies on the predicted surface, `s.(u(x) - u0) = -misfit`; an intensity row that its
intensity is the predicted one times a gain plus an offset. Both are weighted by their variance, and the ratio of
observed to expected residuals scales each kind (variance components after Foerstner 1979, many rows a gauge).
"""

from __future__ import annotations

from collections.abc import Callable

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import _BITS, find_key, pack
from scanstrain.neighbourhood.smooth import solve_in_place

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

UNKNOWNS = 14
TUKEY = 6.0
"""Cut-off of the redescending weight in standard deviations: 98 % efficient, blind to gross errors."""


def _tukey_moments(cut: float) -> tuple[float, float]:
    """For Gaussian residuals: weighted over plain variance, and sandwich over weighted-normal covariance."""
    from scipy.integrate import quad
    from scipy.stats import norm

    def mean(f: Callable[[float], float]) -> float:
        return float(quad(lambda r: f(r) * norm.pdf(r), -cut, cut)[0])

    def weight(r: float) -> float:
        return (1 - (r / cut) ** 2) ** 2

    def slope(r: float) -> float:
        return (1 - (r / cut) ** 2) * (1 - 5 * (r / cut) ** 2)

    mean_weight = mean(weight)
    shrink = mean(lambda r: weight(r) * r * r) / mean_weight
    return shrink, mean(lambda r: (weight(r) * r) ** 2) / mean(slope) ** 2 * mean_weight


@numba.njit(cache=True, nogil=True)
def _members(
    o: FloatArray, f: FloatArray, k: FloatArray, radius: float, gate: float, key: IntArray, start: IntArray,
    size: float, position: FloatArray, normal: FloatArray, out: IntArray,
) -> int:  # fmt: skip
    """Cells within the gauge, on its own sheet."""
    base = pack(int(np.floor(o[0] / size)), int(np.floor(o[1] / size)), int(np.floor(o[2] / size)))
    m = 0
    for i in range(-1, 2):
        for j in range(-1, 2):
            for k_step in range(-1, 2):
                b = find_key(key, base + (i << (2 * _BITS)) + (j << _BITS) + k_step)
                if b < 0:
                    continue
                for c in range(start[b], start[b + 1]):
                    d0, d1, d2 = position[c, 0] - o[0], position[c, 1] - o[1], position[c, 2] - o[2]
                    x = d0 * f[0, 0] + d1 * f[1, 0] + d2 * f[2, 0]
                    y = d0 * f[0, 1] + d1 * f[1, 1] + d2 * f[2, 1]
                    if x * x + y * y > radius * radius:
                        continue
                    z = d0 * f[0, 2] + d1 * f[1, 2] + d2 * f[2, 2]
                    z -= 0.5 * k[0] * x * x + k[1] * x * y + 0.5 * k[2] * y * y
                    dot = normal[c, 0] * f[0, 2] + normal[c, 1] * f[1, 2] + normal[c, 2] * f[2, 2]
                    if abs(z) < gate and abs(dot) > 0.5 and m < len(out):
                        out[m] = c
                        m += 1
    return m


@numba.njit(cache=True, nogil=True)
def _design(s0: float, s1: float, s2: float, x1: float, x2: float, x3: float, a: FloatArray, r: int) -> None:
    """Derivatives of s.u(x) by the 12 motion unknowns into column `r`; x in units of the gauge radius.

    x3 enters because a tilt turns the height coordinate into the plane: without it a pure rotation of a curved
    patch would not be an exact solution.
    """
    a[0, r], a[1, r], a[2, r] = s0, s1, s2
    a[3, r], a[4, r], a[5, r], a[6, r] = s0 * x1, s0 * x2, s1 * x1, s1 * x2
    a[7, r], a[8, r] = s2 * x1 - s0 * x3, s2 * x2 - s1 * x3
    a[9, r], a[10, r], a[11, r] = 0.5 * s2 * x1 * x1, s2 * x1 * x2, 0.5 * s2 * x2 * x2


@numba.njit(cache=True, nogil=True)
def _rows_of(
    m: int, members: IntArray, o: FloatArray, f: FloatArray, radius: float, position: FloatArray, moved: FloatArray,
    misfit: FloatArray, slope: FloatArray, grey: FloatArray, grey_slope: FloatArray, variance: FloatArray,
    own_grey: FloatArray, gain: float, A: FloatArray, B: FloatArray, data: FloatArray,
) -> None:  # fmt: skip
    """Fill surface rows `A` (12, m), intensity rows `B` (14, m) and `data` (rhs, rhs, var, var, spread, spread)."""
    textured = len(own_grey) > 0
    mean = 0.0
    if textured:
        for r in range(m):
            mean += grey[members[r]] / m
    for r in range(m):
        c = members[r]
        d0, d1, d2 = position[c, 0] - o[0], position[c, 1] - o[1], position[c, 2] - o[2]
        x1 = (d0 * f[0, 0] + d1 * f[1, 0] + d2 * f[2, 0]) / radius
        x2 = (d0 * f[0, 1] + d1 * f[1, 1] + d2 * f[2, 1]) / radius
        x3 = (d0 * f[0, 2] + d1 * f[1, 2] + d2 * f[2, 2]) / radius
        s0 = slope[c, 0] * f[0, 0] + slope[c, 1] * f[1, 0] + slope[c, 2] * f[2, 0]
        s1 = slope[c, 0] * f[0, 1] + slope[c, 1] * f[1, 1] + slope[c, 2] * f[2, 1]
        s2 = slope[c, 0] * f[0, 2] + slope[c, 1] * f[1, 2] + slope[c, 2] * f[2, 2]
        _design(s0, s1, s2, x1, x2, x3, A, r)
        data[0, r] = slope[c, 0] * moved[c, 0] + slope[c, 1] * moved[c, 1] + slope[c, 2] * moved[c, 2] - misfit[c]
        data[2, r], data[4, r] = variance[c, 0], variance[c, 2]
        if textured:
            e = grey_slope[c]
            g0 = gain * (e[0] * f[0, 0] + e[1] * f[1, 0] + e[2] * f[2, 0])
            g1 = gain * (e[0] * f[0, 1] + e[1] * f[1, 1] + e[2] * f[2, 1])
            g2 = gain * (e[0] * f[0, 2] + e[1] * f[1, 2] + e[2] * f[2, 2])
            _design(g0, g1, g2, x1, x2, x3, B, r)
            B[9, r] = B[10, r] = B[11, r] = 0.0
            B[12, r], B[13, r] = grey[c] - mean, 1.0
            along = e[0] * moved[c, 0] + e[1] * moved[c, 1] + e[2] * moved[c, 2]
            data[1, r] = own_grey[c] - gain * grey[c] + gain * along
            data[3, r], data[5, r] = variance[c, 1], variance[c, 3]


# Sums may be taken in vector lanes (reassoc): eight times faster, and still the same on every run and for any
# number of threads, since a gauge is summed by one thread. NaN keeps its meaning.
@numba.njit(cache=True, nogil=True, fastmath={"reassoc", "contract", "nsz"})
def _accumulate(rows: FloatArray, rhs: FloatArray, w: FloatArray, N: FloatArray, b: FloatArray) -> None:
    """Add the weighted normal equations of `rows` (n, m) to the lower triangle of `N` and to `b`."""
    n, m = rows.shape
    weighted = np.empty(m)
    for i in range(n):
        for r in range(m):
            weighted[r] = w[r] * rows[i, r]
        s = 0.0
        for r in range(m):
            s += weighted[r] * rhs[r]
        b[i] += s
        for j in range(i + 1):
            s = 0.0
            for r in range(m):
                s += weighted[r] * rows[j, r]
            N[i, j] += s


@numba.njit(cache=True, nogil=True)
def _reweight(
    rows: FloatArray, rhs: FloatArray, spread: FloatArray, variance: FloatArray, x: FloatArray, scale: float,
    start: bool, shrink: float, w: FloatArray,
) -> float:  # fmt: skip
    """Weigh rows by their residuals at `x`; returns the variance factor (observed over expected spread).

    At the start the scale is not known and comes from the median residual.
    """
    n, m = rows.shape
    e = rhs.copy()
    for i in range(n):
        for r in range(m):
            e[r] -= rows[i, r] * x[i]
    for r in range(m):
        e[r] /= np.sqrt(spread[r])
    if start:
        scale = (1.4826 * np.median(np.abs(e))) ** 2
    cut = TUKEY * TUKEY * max(scale, 1e-12)
    total = weighted = 0.0
    for r in range(m):
        q = 1.0 - e[r] * e[r] / cut
        k = q * q if q > 0.0 else 0.0
        w[r] = k / variance[r]
        total += k
        weighted += k * e[r] * e[r]
    return max(weighted / max(total, 1.0) / shrink, 1e-12)


@numba.njit(cache=True, nogil=True)
def _inverse(N: FloatArray, n: int, out: FloatArray) -> bool:
    """Inverse of a symmetric positive matrix given by its lower triangle."""
    L = N.copy()
    e = np.zeros(n)
    if not solve_in_place(L, e, n):
        return False
    for column in range(n):
        e = np.zeros(n)
        e[column] = 1.0
        for i in range(n):
            s = e[i]
            for k in range(i):
                s -= L[i, k] * e[k]
            e[i] = s / L[i, i]
        for i in range(n - 1, -1, -1):
            s = e[i]
            for k in range(i + 1, n):
                s -= L[k, i] * e[k]
            e[i] = s / L[i, i]
        out[:, column] = e
    return True


@numba.njit(cache=True, nogil=True, parallel=True)
def fit_gauges(
    origin: FloatArray, frame: FloatArray, shape: FloatArray, start_values: FloatArray, radius: float,
    sheet_gate: float, weak_prior: float, nuisance: FloatArray, hold: float, rounds: int, min_points: int,
    capacity: int, shrink: float, inflate: float,
    key: IntArray, start: IntArray, size: float, position: FloatArray, normal: FloatArray, count: FloatArray,
    valid: NDArray[np.bool_], moved: FloatArray, misfit: FloatArray, slope: FloatArray, grey: FloatArray,
    grey_slope: FloatArray, variance: FloatArray, own_grey: FloatArray, gains: FloatArray,
    values: FloatArray, held: FloatArray, covariance: FloatArray, data_sd: FloatArray, info: FloatArray,
) -> None:  # fmt: skip
    """Fit every gauge.

    Parameters
    ----------
    start_values : ndarray of shape (g, 12)
        Motion that the held solution is drawn to (scaled unknowns) [m].
    weak_prior, hold : float
        Standard deviation [m] of the prior that keeps the equations solvable, and of the one that holds tangential
        unknowns of the linearisation at `start_values`.
    nuisance : ndarray of shape (12,)
        Standard deviations [m] of what a structure can do tangentially: bounds the damage that unobservable
        tangential unknowns do to the normal ones. Far wider than any unknown that counts as observed.
    values, held : ndarray of shape (g, 12)
        Results: final, and held; unknowns scaled to metres at the gauge's rim.
    covariance : ndarray of shape (g, 12, 12)
        Of `values`, same scaling [m^2].
    data_sd : ndarray of shape (g, 12)
        Standard errors from the data alone, without `nuisance`: what decides observability [m].
    info : ndarray of shape (g, 6)
        Cells, cells with a match, points, variance factors of surface and intensity rows, covered share of the disc.
    """
    for g in numba.prange(len(origin)):
        members = np.empty(capacity, np.int64)
        o, f = origin[g], frame[g]
        total = _members(o, f, shape[g], radius, sheet_gate, key, start, size, position, normal, members)
        m = 0
        points = 0.0
        cover = np.zeros((10, 10), np.bool_)
        for r in range(total):
            c = members[r]
            if valid[c]:
                members[m] = c
                m += 1
                points += count[c]
                d0, d1, d2 = position[c, 0] - o[0], position[c, 1] - o[1], position[c, 2] - o[2]
                i = int(((d0 * f[0, 0] + d1 * f[1, 0] + d2 * f[2, 0]) / radius * 0.5 + 0.5) * 9.999)
                j = int(((d0 * f[0, 1] + d1 * f[1, 1] + d2 * f[2, 1]) / radius * 0.5 + 0.5) * 9.999)
                cover[i, j] = True
        info[g, 0], info[g, 1], info[g, 2] = total, m, points
        info[g, 5] = cover.sum() / 80.0
        info[g, 3] = info[g, 4] = np.nan
        values[g, :] = np.nan
        held[g] = start_values[g]
        if m < min_points:
            continue
        textured = len(own_grey) > 0
        A, B, data = np.empty((12, m)), np.empty((14, m if textured else 0)), np.empty((6, m))
        _rows_of(
            m,
            members,
            o,
            f,
            radius,
            position,
            moved,
            misfit,
            slope,
            grey,
            grey_slope,
            variance,
            own_grey,
            gains[g],
            A,
            B,
            data,
        )
        w_h, w_i = np.empty(m), np.empty(m)
        scale_h = scale_i = 1.0
        x = np.zeros(UNKNOWNS)
        x[:12] = start_values[g]
        n = 14 if textured else 12
        N = np.zeros((UNKNOWNS, UNKNOWNS))
        b = np.zeros(UNKNOWNS)
        solved = False
        for turn in range(rounds):
            # The first weights judge residuals at the present estimate; later ones at the solution.
            scale_h = _reweight(A, data[0], data[4], data[2], x[:12], scale_h, turn == 0, shrink, w_h)
            N[:, :] = 0.0
            b[:] = 0.0
            _accumulate(A, data[0], w_h / scale_h, N, b)
            if textured:
                scale_i = _reweight(B, data[1], data[5], data[3], x, scale_i, turn == 0, shrink, w_i)
                _accumulate(B, data[1], w_i / scale_i, N, b)
            for i in range(n):
                N[i, i] += 1.0 / weak_prior**2 if i < 12 else 1e-12 * N[i, i] + 1e-300
            M, y = N.copy(), b.copy()
            for i in (0, 1, 3, 4, 5, 6):
                M[i, i] += 1.0 / hold**2
                y[i] += start_values[g, i] / hold**2
            solved = solve_in_place(M, y, n)
            if not solved:
                break
            x[:n] = y[:n]
        if not solved:
            continue
        held[g] = x[:12]
        inverse = np.zeros((UNKNOWNS, UNKNOWNS))
        if not _inverse(N[:n, :n], n, inverse[:n, :n]):
            continue
        for i in range(12):
            data_sd[g, i] = np.sqrt(inverse[i, i] * inflate)
            N[i, i] += 1.0 / nuisance[i] ** 2
        if not _inverse(N[:n, :n], n, inverse[:n, :n]):
            continue
        for i in range(12):
            v = 0.0
            for j in range(n):
                v += inverse[i, j] * b[j]
            values[g, i] = v
        covariance[g] = inverse[:12, :12] * inflate
        if textured:
            gains[g] = min(max(gains[g] + x[12], 0.2), 5.0)
        info[g, 3] = scale_h
        info[g, 4] = scale_i if textured else np.nan


TUKEY_SHRINK, TUKEY_INFLATE = _tukey_moments(TUKEY)
"""Constants of the redescending weight for Gaussian residuals (closed-form integrals)."""
