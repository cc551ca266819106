# SPDX-License-Identifier: MIT
"""The outline of a section as means over short pieces of arc, and its value at any clock angle."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.structures.tracking import TUKEY, fit_circle

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

ARC = 0.1
"""Length of a piece of arc [m]: longer than the 30 mm over which scan errors are commonly alike, so that means of
pieces vary independently."""

FEWEST, MOST = 72, 720
"""Pieces in a ring: at least one every 5 degrees, at most one every half degree."""

MIN_POINTS = 3.0
"""Points on the lining that make the mean of a piece."""

WINDOW = np.radians(10.0)
"""A value at a clock angle comes from the lining within 10 degrees on both sides: a parabola, so that ovalisation
does not bias it, and about 400 points in a slice of 10 mm of a 3 m lining scanned at 5 mm."""

HALF_SHARE = 0.5
"""Share of the pieces that must be there on each side of a clock angle; values are not carried on beyond the lining."""

BAND = 0.1
"""The lining lies within this share of the radius about the frozen axis; the best circle is looked for there, so that
equipment cannot pull it in."""

SURFACE = 0.02
"""Where points scatter about the outline by more than this share of the radius, the slice runs along an end wall or a
face, and shows no outline."""

LINING = 0.05
"""Points farther from the best circle than this share of its radius are floor, services or equipment."""

SETTLED = 4
"""Rounds of weights and outline; later ones change nothing."""


@dataclass(frozen=True, slots=True)
class Outline:
    """One section of one epoch, piece of arc by piece of arc.

    Parameters
    ----------
    angle : ndarray of shape (b,)
        Clock angles of the middles of the pieces [rad].
    radius : ndarray of shape (b,)
        Distance of the lining from the axis there [m]; NaN where it is not seen.
    weight : ndarray of shape (b,)
        Points that each value rests on.
    """

    angle: FloatArray
    radius: FloatArray
    weight: FloatArray


@dataclass(frozen=True, slots=True)
class Local:
    """Values of a function of the clock angle at some angles, each from its own surroundings.

    Parameters
    ----------
    value : ndarray of shape (k,)
        NaN where it is not supported from both sides.
    slope, bend : ndarray of shape (k,)
        First and half the second derivative there [1/rad, 1/rad^2].
    factor : ndarray of shape (k,)
        Variance of the value in variances of one point.
    """

    value: FloatArray
    slope: FloatArray
    bend: FloatArray
    factor: FloatArray


def pieces(radius: float) -> FloatArray:
    """Return the clock angles of the middles of the pieces of a ring [rad]."""
    count = int(np.clip(round(2 * np.pi * radius / ARC), FEWEST, MOST))
    return np.asarray(-np.pi + (np.arange(count) + 0.5) * (2 * np.pi / count))


def local_parabola(angle: FloatArray, value: FloatArray, weight: FloatArray, at: FloatArray) -> Local:
    """Fit a parabola to weighted values within `WINDOW` of each of some angles.

    Parameters
    ----------
    angle, value, weight : ndarray of shape (b,)
        Clock angles of a whole ring, from `pieces` [rad]; values; points behind each, 0 for none.
    at : ndarray of shape (k,)
        Clock angles [rad].

    Returns
    -------
    Local
    """
    step = 2 * np.pi / len(angle)
    reach = int(WINDOW / step) + 1
    some = (np.rint((at[:, None] - angle[0]) / step).astype(int) + np.arange(-reach, reach + 1)) % len(angle)
    away = wrapped(angle[some] - at[:, None])
    near = np.abs(away) <= WINDOW
    seen = near & (weight[some] > 0)
    held = np.ones(len(at), bool)
    for side in (away >= 0, away <= 0):
        held &= (seen & side).sum(axis=1) >= np.maximum(2, HALF_SHARE * (near & side).sum(axis=1))
    powers = np.stack([np.ones_like(away), away, away * away])
    w = np.where(seen, weight[some], 0.0)
    lower, upper = (w * powers).sum(axis=2), (w * powers * powers[2]).sum(axis=2)
    moments = np.stack([*lower, *upper[1:]], axis=1)
    N = moments[:, [[0, 1, 2], [1, 2, 3], [2, 3, 4]]]
    N[~held] = np.eye(3)
    inverse = np.linalg.inv(N)
    rhs = (w * np.where(seen, value[some], 0.0) * powers).sum(axis=2).T
    c = np.where(held[:, None], np.einsum("kij,kj->ki", inverse, rhs), np.nan)
    return Local(c[:, 0], c[:, 1], c[:, 2], np.where(held, inverse[:, 0, 0], np.nan))


def unit_variance(angle: FloatArray, value: FloatArray, weight: FloatArray) -> float:
    """Variance of one point, from how the means of pieces scatter about the parabolas through them.

    Errors that are alike within a piece count as such: they make its mean, and so this variance, larger. NaN where
    fewer than ten pieces are left over.
    """
    fit = local_parabola(angle, value, weight, angle)
    used = (weight > 0) & np.isfinite(fit.value)
    spare = np.clip(1.0 - weight[used] * fit.factor[used], 0.0, None)
    if spare.sum() < 10:
        return np.nan
    misfit = value[used] - fit.value[used]
    return float((kept(misfit * np.sqrt(weight[used])) * weight[used] * misfit**2).sum() / spare.sum())


def spread(misfit: FloatArray) -> float:
    """Return the robust standard deviation of misfits about zero, from their median size."""
    return 1.4826 * float(np.median(np.abs(misfit)))


def kept(misfit: FloatArray) -> FloatArray:
    """Return 1 for misfits within 4.685 robust standard deviations, else 0: gross errors do not count."""
    return np.where(np.abs(misfit) <= TUKEY * spread(misfit) + np.finfo(float).tiny, 1.0, 0.0)


def trace_outline(
    clock: FloatArray, rho: FloatArray, beside: FloatArray, *, angle: FloatArray, radius: float
) -> Outline:
    """Turn the points of a slice into an outline.

    Points off the lining are left out: first those far from the best circle, then those beyond 4.685 robust standard
    deviations from the smooth outline through the medians of pieces. A slope of the lining along the axis, which may
    vary slowly around the ring, is taken out.

    Parameters
    ----------
    clock, rho, beside : ndarray of shape (n,)
        Clock angle [rad], distance from the axis [m], chainage from that of the section [m].
    angle : ndarray of shape (b,)
        From `pieces` [rad].
    radius : float
        Rough radius [m].

    Returns
    -------
    Outline
    """
    empty = Outline(angle, np.full(len(angle), np.nan), np.zeros(len(angle)))
    band = np.abs(rho - radius) < BAND * radius
    clock, rho, beside = clock[band], rho[band], beside[band]
    circle = fit_circle(rho * np.sin(clock), rho * np.cos(clock), radius, band=BAND)
    if circle is None:
        return empty
    dx, dy, round_radius, _ = circle
    off = np.hypot(rho * np.sin(clock) - dx, rho * np.cos(clock) - dy) - round_radius
    lining = np.abs(off) < LINING * round_radius
    clock, rho, beside = clock[lining], rho[lining], beside[lining]
    piece = np.minimum(((clock + np.pi) / (2 * np.pi) * len(angle)).astype(int), len(angle) - 1)
    value, weight = _medians(piece, rho, len(angle))
    slope = np.zeros(len(rho))
    for _ in range(SETTLED):
        fit = _filled(local_parabola(angle, value, weight, angle), value)
        away = wrapped(clock - angle[piece])
        shape = fit.slope[piece] * away + fit.bend[piece] * away**2
        misfit = rho - slope - shape - fit.value[piece]
        known = np.isfinite(misfit)
        if not known.any() or spread(misfit[known]) > SURFACE * radius:
            return empty
        # all or nothing: weights that fall off smoothly would pull every mean towards the outline and hide its scatter
        used = np.zeros(len(rho))
        used[known] = kept(misfit[known])
        slope += _along(clock, beside, np.nan_to_num(misfit), used, piece)
        count = np.bincount(piece, used, len(angle))
        weight = np.where(count >= MIN_POINTS, count, 0.0)
        total = np.bincount(piece, used * (rho - slope - shape), len(angle))
        value = np.where(weight > 0, total / np.where(weight > 0, weight, 1.0), np.nan)
    return Outline(angle, value, weight)


def wrapped(angle: FloatArray) -> FloatArray:
    """Return angles [rad] in [-pi, pi)."""
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi)


def _medians(piece: NDArray[np.int64], rho: FloatArray, count: int) -> tuple[FloatArray, FloatArray]:
    order = np.lexsort((rho, piece))
    number = np.bincount(piece, minlength=count)
    first = np.r_[0, np.cumsum(number)[:-1]]
    enough = number >= MIN_POINTS
    value = np.full(count, np.nan)
    value[enough] = rho[order[first[enough] + number[enough] // 2]]
    return value, np.where(enough, number, 0).astype(float)


def _filled(fit: Local, value: FloatArray) -> Local:
    """At the rims of the lining, where no parabola is supported, the piece's own value serves for its points."""
    known = np.isfinite(fit.value)
    return Local(
        np.where(known, fit.value, value), np.nan_to_num(fit.slope), np.nan_to_num(fit.bend), fit.factor
    )  # fmt: skip


def _along(
    clock: FloatArray, beside: FloatArray, misfit: FloatArray, used: FloatArray, piece: NDArray[np.int64]
) -> FloatArray:
    """Part of the misfits that goes with the chainage: a slope with terms of the clock angle up to twice it.

    It is found from differences within pieces, so that the outline itself, however the points lie, has no part in it.
    """
    A = np.stack([np.ones_like(clock), np.cos(clock), np.sin(clock), np.cos(2 * clock), np.sin(2 * clock)])
    A *= beside
    number = np.maximum(np.bincount(piece, used), 1.0)
    within = np.stack([row - (np.bincount(piece, used * row) / number)[piece] for row in (*A, misfit)])
    left = within[:-1] * used
    return np.asarray(np.linalg.lstsq(left @ within[:-1].T, left @ within[-1], rcond=1e-9)[0] @ A)
