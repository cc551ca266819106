# SPDX-License-Identifier: MIT
"""Units and axes that get mixed up on the way from one program to another, recognised and put in words."""

from __future__ import annotations

from itertools import permutations, product

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

UNITS = {"feet": 1 / 0.3048, "inches": 1 / 0.0254, "centimetres": 100.0, "millimetres": 1000.0}
"""Units per metre that scans come in by mistake; the survey foot differs from the foot by 2 ppm only."""
NEAR_AXES = 0.9
"""Least cosine, on each axis, between an orthogonal matrix and the exchange of axes that it is named after."""
SAMPLE = 20_000
"""Points that a size is taken from: enough for a per cent."""


def unit_words(ratio: float, tolerance: float, current: str, reference: str) -> str | None:
    """Say which unit would explain a ratio of sizes.

    Parameters
    ----------
    ratio : float
        Size of the current over that of the reference [1].
    tolerance : float
        Largest factor between the ratio and that of a unit [1].
    current, reference : str
        What the two are called.

    Returns
    -------
    str or None
        None where no unit is near.

    Examples
    --------
    >>> unit_words(1004.0, 1.1, "the current epoch", "the reference")
    'the current epoch looks like the reference in millimetres'
    >>> unit_words(0.3048, 1.1, "the current epoch", "the reference")
    'the reference looks like the current epoch in feet'
    """
    if ratio < 1:
        return unit_words(1 / ratio, tolerance, reference, current) if ratio > 0 else None
    name = min(UNITS, key=lambda unit: abs(np.log(ratio / UNITS[unit])))
    near = abs(np.log(ratio / UNITS[name])) <= np.log(tolerance)
    return f"{current} looks like {reference} in {name}" if near else None


def axis_orders(*, mirrored: bool) -> list[FloatArray]:
    """List the 24 ways of naming axes that keep the hand, or the 24 that mirror, fewest changes first.

    Returns
    -------
    list of ndarray of shape (3, 3)
    """
    found = []
    for order in permutations(range(3)):
        for signs in product((1.0, -1.0), repeat=3):
            M = np.zeros((3, 3))
            M[range(3), order] = signs
            if (np.linalg.det(M) < 0) == mirrored:
                found.append(M)
    return sorted(found, key=lambda M: float((M < 0).sum() + 0.5 * (np.diag(M) == 0).sum()))


def axes_words(Q: FloatArray) -> str | None:
    """Say which exchange of axes an orthogonal matrix is close to.

    Parameters
    ----------
    Q : ndarray of shape (3, 3)
        Takes the mixed-up coordinates to the right ones.

    Returns
    -------
    str or None
        None where it is none, or the identity.

    Examples
    --------
    >>> axes_words(np.array([[1.0, 0, 0], [0, 0, 1], [0, 1, 0]]))
    'y and z exchanged'
    >>> axes_words(np.diag([-1.0, 1, 1]))
    'x negated'
    """
    order = np.abs(Q).argmax(axis=1)
    if np.abs(Q)[range(3), order].min() < NEAR_AXES:
        return None
    signs = np.sign(Q[range(3), order])
    said = []
    if (order != range(3)).any():
        moved = np.flatnonzero(order != range(3))
        exchanged = " and ".join("xyz"[axis] for axis in moved)
        said.append(f"{exchanged} exchanged" if len(moved) == 2 else "x, y and z in another order")
    if (signs < 0).any():
        said.append(" and ".join("xyz"[axis] for axis in order[signs < 0]) + " negated")
    return ", ".join(said) or None


def size(points: FloatArray) -> float:
    """Median distance of points from their median [m]: a size that strays and turns do not change.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        [m]
    """
    some = points[:: max(1, len(points) // SAMPLE)]
    return float(np.median(np.linalg.norm(some - np.median(some, axis=0), axis=1)))
