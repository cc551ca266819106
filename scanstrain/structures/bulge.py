# SPDX-License-Identifier: MIT
"""What is left of the movement of a wall when its best plane is taken off: the bulge and the hollow, their extent."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich
from scanstrain.structures.gauge_errors import GaugeErrors

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Surface = Callable[[FloatArray], FloatArray]

KEPT = 3.0
"""Gauges farther from the plane than this many robust standard deviations do not take part in it: it is that of the
wall around a bulge. Where the whole wall is bent none is that far, and the plane is that of least squares."""

ROUNDS = 20
"""Rounds of leaving out; the choice settles in a few."""

REACH = 0.55
"""Radius in gauge lengths over which a paraboloid smooths: the gauges have averaged over half of one already."""

FEWEST = 9
"""Gauges that a paraboloid with its six coefficients rests on at least."""

RANK = 1e-4
"""Smallest eigenvalue of a paraboloid's normal matrix for each gauge in it: that of an even disc is 0.006, that of
gauges on two lines 0."""

WAVES = 13.0
"""Root of the determinant of the slopes' covariance of the smoothed noise, in units of its variance and of the gauge
length: how many waves there are in it. Found with simulated white noise."""

NEXT = 1.5
"""Gauges up to this many spacings apart are neighbours: those of a square grid across its diagonals."""

ONE_SIDED = 0.35
"""A gauge is smoothed if the middle of those around it is nearer than this to it, in reaches: at a straight edge it is
0.42 away, and a paraboloid would be carried beyond what it rests on."""

STEPS, HALF = 8, 0.5
"""Steps per gauge spacing along which the end of a bulge is looked for, and the share of its height that is there."""

LIMIT = 1.959963985
"""Standard errors of the 95 % limit."""


@dataclass(frozen=True, slots=True)
class Remainder:
    """Displacement without its best plane.

    Parameters
    ----------
    moved, sd : ndarray of shape (g,)
        What remains and its standard error [m]; registration error has no part in it.
    kept : ndarray of shape (g,), bool
        Gauges that the plane rests on.
    plane : ndarray of shape (3, g)
        Weights of the displacements in (shift [m], yaw [rad], lean [rad]) of the plane.
    """

    moved: FloatArray
    sd: FloatArray
    kept: BoolArray
    plane: FloatArray


@dataclass(frozen=True, slots=True)
class Bulge:
    """The place where most remains on one side of the best plane.

    Parameters
    ----------
    height, height_sd : float
        What remains there, from a paraboloid over the gauges around it, positive to the free side, and its standard
        error [m].
    largest : float
        Largest remaining displacement of a single gauge; noise makes it too large rather than too small [m].
    chance : float
        Probability of such a height somewhere on a wall that moved as a plane [1].
    along, up, along_sd, up_sd : float
        Where its top is and the standard errors [m]; these are NaN where it is at the edge of what was seen.
    area : float
        Connected area about it that is beyond its 95 % limit [m^2].
    width, width_sd, tall, tall_sd : float
        Extent at half of its height, along the wall and up it, through its top, and standard errors [m].
    closed : bool
        Whether both end inside the seen face; a bulge that does not is at least as large as it says.
    """

    height: float
    height_sd: float
    largest: float
    chance: float
    along: float
    up: float
    along_sd: float
    up_sd: float
    area: float
    width: float
    width_sd: float
    tall: float
    tall_sd: float
    closed: bool


def remainder(moved: FloatArray, errors: GaugeErrors) -> Remainder:
    """Take the best plane off displacements (g,) [m], a bulged part of the wall left out of it."""
    rows, kept = errors.rows, np.ones(len(moved), bool)
    floor = float(np.median(np.sqrt(errors.noise.diagonal())))
    for _ in range(ROUNDS):
        plane = np.zeros((3, len(moved)))
        plane[:, kept] = np.linalg.pinv(rows[kept])
        left = moved - rows @ (plane @ moved)
        spread = max(1.4826 * float(np.median(np.abs(left - np.median(left)))), floor)
        now = np.abs(left) <= KEPT * spread
        if (now == kept).all() or now.sum() < len(moved) / 2:
            break
        kept = now
    crossed = np.einsum("gk,kg->g", rows, (errors.noise @ plane.T).T)
    own = np.einsum("gi,ij,gj->g", rows, errors.noise_of(plane), rows)
    variance = errors.noise.diagonal() - 2 * crossed + own
    return Remainder(left, np.sqrt(np.maximum(variance, 0.0)), kept, plane)


def find_bulges(
    rest: Remainder, errors: GaugeErrors, *, gauge_length: float, gauge_spacing: float
) -> tuple[Bulge | None, Bulge | None]:
    """Find the largest bulge to the free side and the largest hollow.

    Parameters
    ----------
    rest : Remainder
    errors : GaugeErrors
        Of the same gauges.
    gauge_length, gauge_spacing : float
        Patch diameter and distance of gauges [m].

    Returns
    -------
    (bulge, hollow), each Bulge or None
        None where nothing remains on that side, or gauges are too few for a paraboloid.
    """
    from scipy.interpolate import LinearNDInterpolator

    place = errors.rows[:, 1:]
    reach = max(REACH * gauge_length, 2.2 * gauge_spacing)
    smooth = smoothed(place, rest.moved, reach)
    fine = np.isfinite(smooth)
    # places in one line carry no surface
    if fine.sum() < 3 or np.linalg.matrix_rank(place[fine] - place[fine].mean(axis=0)) < 2:
        return None, None
    surface = LinearNDInterpolator(place[fine], np.stack([smooth[fine], rest.sd[fine]], axis=1))
    size = len(place) * (gauge_spacing / gauge_length) ** 2

    def largest(side: float) -> Bulge | None:
        peak = int(np.nanargmax(side * smooth))
        if side * smooth[peak] <= 0:
            return None
        value, value_sd, at, at_sd = _top(rest, errors, peak, reach, side)
        wide, tall = (
            _width(surface, np.ptp(place[:, axis]), at, axis, value, value_sd, gauge_spacing) for axis in (0, 1)
        )
        area = _area(place, side * rest.moved > LIMIT * rest.sd, peak, gauge_spacing)
        return Bulge(
            height=value,
            height_sd=value_sd,
            largest=float(side * (side * rest.moved).max()),
            chance=_chance(side * value / value_sd, size),
            along=float(at[0]),
            up=float(at[1]),
            along_sd=float(at_sd[0]),
            up_sd=float(at_sd[1]),
            area=area,
            width=wide[0],
            width_sd=wide[1],
            tall=tall[0],
            tall_sd=tall[1],
            closed=wide[2] and tall[2],
        )

    return largest(1.0), largest(-1.0)


def smoothed(place: FloatArray, values: FloatArray, reach: float) -> FloatArray:
    """Return values (g,) at places (g, 2) smoothed by paraboloids over a reach [m]; NaN where gauges are too few."""
    from scipy.spatial import cKDTree

    near = cKDTree(place).query_ball_point(place, reach, return_sorted=True)
    count = np.array([len(some) for some in near])
    start, other = np.r_[0, np.cumsum(count)[:-1]], np.concatenate(near).astype(np.int64)
    rows = _paraboloid(place[other] - np.repeat(place, count, axis=0), reach)
    middle = np.linalg.norm(np.add.reduceat(rows[:, 1:3], start), axis=1) / count
    serve = (count >= FEWEST) & (middle < ONE_SIDED)
    normal = np.add.reduceat(rows[:, :, None] * rows[:, None, :], start)
    right = np.add.reduceat(rows * values[other, None], start)
    serve &= np.linalg.eigvalsh(normal)[:, 0] > RANK * count
    smooth = np.full(len(place), np.nan)
    smooth[serve] = np.linalg.solve(normal[serve], right[serve, :, None])[:, 0, 0]
    return smooth


def _paraboloid(away: FloatArray, reach: float) -> FloatArray:
    """Rows (m, 6) of a paraboloid: what value, slopes and second derivatives (xx, xy, yy), in reaches, add there."""
    x, y = (away / reach).T
    return np.stack([np.ones(len(x)), x, y, x * x / 2, x * y, y * y / 2], axis=1)


def _top(
    rest: Remainder, errors: GaugeErrors, peak: int, reach: float, side: float
) -> tuple[float, float, FloatArray, FloatArray]:
    """Value and place of the top of the paraboloid about a gauge, with standard errors."""
    place = errors.rows[:, 1:]
    near = np.linalg.norm(place - place[peak], axis=1) <= reach
    weights = np.zeros((6, len(place)))
    weights[:, near] = np.linalg.pinv(_paraboloid(place[near] - place[peak], reach))
    c = weights @ rest.moved
    bend = np.array([[c[3], c[4]], [c[4], c[5]]])
    off, known = np.zeros(2), bool((np.linalg.eigvalsh(side * bend) < 0).all())
    if known:
        off = -np.linalg.solve(bend, c[1:3])
        known = bool(np.linalg.norm(off) <= 1.0)
    x, y = off = off if known else np.zeros(2)
    # of the displacements themselves: the plane has been taken off them
    weights -= (weights @ errors.rows) @ rest.plane
    covariance = errors.noise_of(weights)
    here = np.array([1.0, x, y, x * x / 2, x * y, y * y / 2])
    at_sd = np.full(2, np.nan)
    if known:
        # the top is where both slopes are zero: its place follows from the slopes and bends by their total differential
        slopes = np.array([[0.0, 1.0, 0.0, x, y, 0.0], [0.0, 0.0, 1.0, 0.0, x, y]])
        at_sd = reach * np.sqrt(np.diag(sandwich(np.linalg.solve(bend, slopes), covariance)))
    return float(here @ c), float(np.sqrt(here @ covariance @ here)), place[peak] + reach * off, at_sd


def _chance(z: float, size: float) -> float:
    """Probability that noise alone reaches z somewhere on a face of a size in squares of the gauge length.

    From the expected number of peaks of a smooth Gaussian field over a height (Adler 1981; from memory).
    """
    peaks = WAVES * size * (2 * np.pi) ** -1.5 * max(z, 1.0) * np.exp(-0.5 * max(z, 1.0) ** 2)
    return float(-np.expm1(-peaks))


def _area(place: FloatArray, beyond: BoolArray, peak: int, spacing: float) -> float:
    """Area [m^2] of the gauges beyond the limit that hang together with the one at the peak."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    if not beyond[peak]:
        return 0.0
    i, j = cKDTree(place[beyond]).query_pairs(NEXT * spacing, output_type="ndarray").T
    some = int(beyond.sum())
    _, piece = connected_components(coo_array((np.ones(len(i)), (i, j)), shape=(some, some)), directed=False)
    return float((piece == piece[beyond[:peak].sum()]).sum() * spacing**2)


def _width(
    surface: Surface, reach: float, top: FloatArray, axis: int, value: float, value_sd: float, spacing: float
) -> tuple[float, float, bool]:
    """Extent at half height along an axis through the top, its standard error, and whether both ends are seen [m]."""
    step = spacing / STEPS
    t = step * np.arange(int(np.ceil(reach / step)) + 1)
    width, variance, closed = 0.0, 0.0, True
    for way in (-1.0, 1.0):
        remaining, error = surface(top + way * t[:, None] * np.eye(2)[axis]).T
        share = remaining / value
        end = int(np.argmax(np.r_[~(share > HALF), True]))
        if end == 0 or end >= len(t) or not np.isfinite(share[end]):
            # half height is not reached before the seen face ends
            width, closed = width + t[max(end - 1, 0)], False
            continue
        slope = (share[end - 1] - share[end]) / step
        width += t[end] - (HALF - share[end]) / slope
        far = slice(max(end - STEPS, 0), end + STEPS)
        gentle = np.nanmax(np.abs(np.gradient(share[far], step)))
        variance += ((error[end] / value) ** 2 + (HALF * value_sd / value) ** 2) / gentle**2
    return float(width), float(np.sqrt(variance)) if closed else np.nan, closed
