# SPDX-License-Identifier: MIT
"""Where a wall may be: the upright plane that most patches of the cloud agree with, and its robust best fit."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import leave_one_out
from scanstrain.structures.wall import FACING, axes_of

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

STEEP = float(np.sin(np.radians(45.0)))
"""Normals with a larger vertical component belong to floors, roofs and slopes, not to walls."""

SAMPLE = 3000
"""Patches that vote; more only cost time."""

DRAWS = 600
"""Planes tried. One patch fixes which normals the other two have, so the share of good planes is about that of the
face among the patches: with two fifths of them hundreds are left."""

TUKEY = 4.685
"""Cut-off of the redescending weight in standard deviations: 95 % efficient, blind to gross errors."""

ROUNDS = 20
"""Re-weighted solutions; the change falls several times with each."""

FINEST = 1e-4
"""Scatter about the plane that is not gone below [m]: a perfect plane has none."""

PATCHES = 60
"""Squares that the face is divided into for the standard error of its plane: enough for a spread, wide enough to be
nearly independent on a face whose unevenness is shorter than a tenth of it."""


def find_plane(
    centre: FloatArray, normal: FloatArray, tolerance: float
) -> tuple[FloatArray, FloatArray, BoolArray] | None:
    """Find the upright plane that most patches agree with.

    Random sample consensus (Fischler & Bolles 1981): three patches with like normals fix a plane. A patch agrees that
    lies within the tolerance and faces it to 20 degrees.

    Parameters
    ----------
    centre, normal : ndarray of shape (b, 3)
        Places [m] and unit normals of patches, signs of normals arbitrary.
    tolerance : float
        Distance within which a patch agrees [m].

    Returns
    -------
    (place, normal, agree) or None
        Of the plane, shapes (3,), (3,) and (b,); None where no three patches agree.
    """
    rng = np.random.default_rng(0)
    voters = np.sort(rng.choice(len(centre), min(SAMPLE, len(centre)), replace=False))
    best, most = None, 2
    for first in rng.integers(len(voters), size=DRAWS) if len(voters) >= 3 else ():
        alike = voters[np.abs(normal[voters] @ normal[voters[first]]) >= FACING]
        place, *others = centre[rng.choice(alike, 3)]
        across = np.cross(others[0] - place, others[1] - place)
        size = float(np.linalg.norm(across))
        if size == 0 or abs(across[2]) > STEEP * size:
            continue
        votes = int(agreeing(centre[voters], normal[voters], place, across / size, tolerance).sum())
        if votes > most:
            best, most = (place, across / size), votes
    return None if best is None else (*best, agreeing(centre, normal, *best, tolerance))


def agreeing(
    centre: FloatArray, normal: FloatArray, place: FloatArray, across: FloatArray, tolerance: float
) -> BoolArray:
    """Say which patches (b, 3) lie within a tolerance [m] of a plane and face it."""
    near = np.abs((centre - place) @ across) <= tolerance
    return np.asarray(near & (np.abs(normal @ across) >= FACING))


def best_plane(points: FloatArray, place: FloatArray, normal: FloatArray) -> tuple[FloatArray, FloatArray, float]:
    """Fit a plane to points near a rough one with Tukey's weights on their distances.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
    place, normal : ndarray of shape (3,)
        Of the rough plane.

    Returns
    -------
    place, normal : ndarray of shape (3,)
    scale : float
        Robust standard deviation about it [m].
    """
    weight, scale = np.ones(len(points)), 0.0
    for _ in range(ROUNDS):
        place = np.average(points, axis=0, weights=weight)
        away = points - place
        fitted = np.linalg.eigh((away * weight[:, None]).T @ away)[1][:, 0]
        normal = fitted * np.sign(fitted @ normal)
        off = away @ normal
        scale = max(1.4826 * float(np.median(np.abs(off))), FINEST)
        weight = tukey(off, scale)
    return place, normal, scale


def tukey(off: FloatArray, scale: float) -> FloatArray:
    """Return Tukey's weights of residuals (n,) for their standard deviation."""
    return np.asarray(np.clip(1.0 - (off / (TUKEY * scale)) ** 2, 0.0, None) ** 2)


def lean_error(points: FloatArray, place: FloatArray, normal: FloatArray, scale: float) -> float:
    """Return the standard error of the lean of a plane [rad], from leaving out one square of the face after the other.

    Whatever the reason for which the face is uneven, it is alike over a length: a square counts as one observation.
    """
    right, up = axes_of(normal)
    away = points - place
    off = away @ normal
    weight = tukey(off, scale)
    rows = np.stack([np.ones(len(points)), away @ right, away @ up], axis=1)
    side = np.sqrt(np.ptp(rows[:, 1]) * np.ptp(rows[:, 2]) / PATCHES)
    return float(np.sqrt(spread_by_squares(rows, off, side, weight)[2, 2]))


def spread_by_squares(rows: FloatArray, off: FloatArray, side: float, weight: FloatArray) -> FloatArray:
    """Return the covariance (3, 3) of a plane over (1, along, height) from what its residuals share in squares."""
    square = np.floor((rows[:, 1:] - rows[:, 1:].min(axis=0)) / side).astype(int)
    _, member = np.unique(square, axis=0, return_inverse=True)
    count = int(member.max()) + 1
    if count < 4:
        return np.full((3, 3), np.nan)
    information, score = np.zeros((count, 3, 3)), np.zeros((count, 3))
    np.add.at(information, member, weight[:, None, None] * rows[:, :, None] * rows[:, None, :])
    np.add.at(score, member, (weight * off)[:, None] * rows)
    return leave_one_out(information, score)
