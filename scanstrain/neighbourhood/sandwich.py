# SPDX-License-Identifier: MIT
"""Covariance of the fitted maps where neighbouring points share noise: N^-1 (A' W S W A) N^-1.

The weights stay those of independent noise, so the estimates do not change; only what is said of their error does
(sandwich form; White 1980, Liang & Zeger 1986).
"""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.fit import (
    GREY_UNKNOWNS,
    LEAST_SCALE,
    MOTION,
    TUKEY_INFLATE,
    UNKNOWNS,
    VALID,
    members_of,
    observation_rows,
    placed,
    reweight,
)
from scanstrain.neighbourhood.joint_cuts import keep_own_side
from scanstrain.neighbourhood.solve import accumulate, inverse
from scanstrain.neighbourhood.squares import add_scaled, spread, square_of, taps

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SURFACE_UNKNOWNS = np.arange(MOTION)
"""Unknowns of which surface rows depend: all motion."""


@numba.njit(cache=True, nogil=True)
def shared_middle(
    rows: FloatArray, w: FloatArray, unit: FloatArray, place: IntArray, across: int, width: float, lengths: FloatArray,
    shares: FloatArray,
) -> FloatArray:  # fmt: skip
    """Sum over all pairs of rows of a_i w_i s_ij w_j a_j', where s_ij is noise shared over the lengths.

    Parameters
    ----------
    rows, w, unit : ndarray of shape (n, m), (m,), (m,)
        Design, weights and noise variance of a single point at each row.
    place : ndarray of shape (m, 2)
        Square of every row.
    across : int
        Squares along one side of the patch.
    width, lengths : float, ndarray of shape (c,)
        Of a square, and of the correlations [m].
    shares : ndarray of shape (c,)
        Variance of each component over `unit`.
    """
    n, m = rows.shape
    sums, smooth = np.zeros((across, across, n)), np.empty((across, across, n))
    for r in range(m):
        s = w[r] * np.sqrt(unit[r])
        for i in range(n):
            sums[place[r, 0], place[r, 1], i] += s * rows[i, r]
    out = np.zeros((n, n))
    for k in range(len(lengths)):
        if shares[k] > 0.0:
            spread(sums, taps(lengths[k], width), smooth)
            for p in range(across):
                for q in range(across):
                    for i in range(n):
                        add_scaled(shares[k] * sums[p, q, i], smooth[p, q], out[i])
    return out


@numba.njit(cache=True, nogil=True)
def _add(
    rows: FloatArray, rhs: FloatArray, w: FloatArray, own: float, unit: FloatArray, place: IntArray, across: int,
    width: float, lengths: FloatArray, shares: FloatArray, unknown: IntArray, N: FloatArray, B: FloatArray,
) -> None:  # fmt: skip
    """Add rows of one kind, which depend on the unknowns `unknown`, to the equations and the middle of the sandwich."""
    n = len(rows)
    part, unused = np.zeros((n, n)), np.zeros(n)
    accumulate(rows, rhs, w, part, unused)
    shared = shared_middle(rows, w, unit, place, across, width, lengths, shares)
    for i in range(n):
        for j in range(n):
            value = part[i, j] if j <= i else part[j, i]
            N[unknown[i], unknown[j]] += value
            B[unknown[i], unknown[j]] += own * value + shared[i, j]


@numba.njit(cache=True, nogil=True)
def _close(
    N: FloatArray, B: FloatArray, n: int, inflate: float, required: FloatArray, nuisance: FloatArray,
    covariance: FloatArray, data_sd: FloatArray,
) -> None:  # fmt: skip
    """Both covariances: from the data alone, and with bounds on what they do not determine, as in the fit."""
    Q = np.zeros((UNKNOWNS, UNKNOWNS))
    if not inverse(N, n, Q):
        return
    from_data = Q @ B @ Q
    for i in range(MOTION):
        if not data_sd[i] <= required[i]:
            N[i, i] += 1.0 / nuisance[i] ** 2
            B[i, i] += 1.0 / nuisance[i] ** 2
        data_sd[i] = np.sqrt(from_data[i, i] * inflate)
    if inverse(N, n, Q):
        covariance[:, :] = (Q @ B @ Q)[:MOTION, :MOTION] * inflate


@numba.njit(cache=True, nogil=True, parallel=True)
def correlated_covariance(
    origin: FloatArray, frame: FloatArray, shape: FloatArray, radius: float, sheet_gate: float, weak: float,
    required: FloatArray, nuisance: FloatArray, capacity: int, textured: bool, key: IntArray, start: IntArray,
    table: FloatArray, unit: FloatArray, gains: FloatArray, held: FloatArray, scales: FloatArray, own: FloatArray,
    lengths: FloatArray, shares: FloatArray, across: int, pieces: FloatArray, piece_start: IntArray,
    covariance: FloatArray, data_sd: FloatArray,
) -> None:  # fmt: skip
    """Replace the covariance of every fitted gauge.

    Parameters
    ----------
    origin, frame, shape, radius, sheet_gate, weak, required, nuisance, capacity, textured, key, start, table : various
        As of `fit.fit_gauges`, after the last fit.
    unit : ndarray of shape (c, 2)
        Noise variance of a single point, height and intensity, at every row of the table.
    gains, held : ndarray
        As of `fit.fit_gauges`.
    scales : ndarray of shape (g, 2)
        Variance factors of the fit; NaN where there is none.
    own : ndarray of shape (2,)
        Part of the variance factor that is noise of its own for every point.
    lengths, shares : ndarray of shape (c,), (2, c)
        Correlation lengths [m], and variance of each component over `unit` for both kinds of rows.
    across : int
        Squares across a gauge.
    pieces, piece_start : ndarray
        As of `fit.fit_gauges`.
    covariance, data_sd : ndarray of shape (g, 12, 12), (g, 12)
        Replaced.
    """
    for g in numba.prange(len(origin)):
        if not np.isfinite(scales[g, 0]):
            continue
        members = np.empty(capacity, np.int64)
        o, f = origin[g], frame[g]
        m = 0
        found = members_of(o, f, shape[g], radius, sheet_gate, key, start, table, members)
        for r in range(keep_own_side(o, f, pieces[piece_start[g] : piece_start[g + 1]], table, members, found)):
            if table[members[r], VALID] != 0.0:
                members[m] = members[r]
                m += 1
        surface, grey, data = (
            np.empty((MOTION, m)),
            np.empty((len(GREY_UNKNOWNS), m if textured else 0)),
            np.empty((6, m)),
        )
        observation_rows(members[:m], o, f, radius, table, gains[g], surface, grey, data)
        place, units, w = np.empty((m, 2), np.int64), np.empty((2, m)), np.empty(m)
        for r in range(m):
            x, y, _ = placed(table, members[r], o, f)
            place[r, 0], place[r, 1] = square_of(x, radius, across), square_of(y, radius, across)
            units[0, r], units[1, r] = unit[members[r], 0], unit[members[r], 1]
            # Blocks take the signs of their normals at random; what they share has one sign.
            if surface[2, r] < 0.0:
                data[0, r] = -data[0, r]
                for i in range(MOTION):
                    surface[i, r] = -surface[i, r]
        N, B, x_now = np.zeros((UNKNOWNS, UNKNOWNS)), np.zeros((UNKNOWNS, UNKNOWNS)), np.zeros(UNKNOWNS)
        x_now[:MOTION] = held[g]
        width = 2.0 * radius / across
        reweight(surface, data[0], data[4], data[2], x_now[:MOTION], scales[g, 0], False, 6, w)
        _add(
            surface, data[0], w / scales[g, 0], own[0], units[0], place, across, width, lengths, shares[0],
            SURFACE_UNKNOWNS, N, B,
        )  # fmt: skip
        smallest = scales[g, 0]
        if textured:
            smallest = min(smallest, scales[g, 1])
            reweight(grey, data[1], data[5], data[3], x_now[GREY_UNKNOWNS], scales[g, 1], False, 8, w)
            _add(
                grey, data[1], w / scales[g, 1], own[1], units[1], place, across, width, lengths, shares[1],
                GREY_UNKNOWNS, N, B,
            )  # fmt: skip
        for i in range(MOTION):
            N[i, i] += 1.0 / weak**2
            B[i, i] += 1.0 / weak**2
        inflate = TUKEY_INFLATE * max(1.0, LEAST_SCALE / smallest)
        _close(N, B, UNKNOWNS if textured else MOTION, inflate, required, nuisance, covariance[g], data_sd[g])
