# SPDX-License-Identifier: MIT
"""Along a tunnel step by step, from where it was found to both its ends."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.structures.cylinder import MIN_SECTORS, Cylinder, sectors_seen, square_basis

FloatArray = NDArray[np.float64]

STEP = 0.5
"""Step along the axis in radii: the axis of a tunnel does not turn much on a quarter of its diameter."""

GAP = 6
"""Steps without lining that are bridged straight on (3 radii); after more the tunnel has ended."""

BAND = 0.25
"""The lining is looked for within this share of the radius."""

TUKEY = 4.685
"""Tukey's constant: 95 % efficient for normal errors (Holland & Welsch 1977)."""


class Surface:
    """Places and unit normals (n, 3) of the cloud, ready to be asked for what lies near."""

    def __init__(self, place: FloatArray, normal: FloatArray) -> None:
        from scipy.spatial import cKDTree

        self.place, self.normal = place, normal
        self._tree: Any = cKDTree(place)

    def around(self, centre: FloatArray, reach: float) -> tuple[FloatArray, FloatArray]:
        """Return places relative to a centre (3,) and normals within a reach [m], in fixed order."""
        near = np.sort(np.asarray(self._tree.query_ball_point(centre, reach), np.int64))
        return self.place[near] - centre, self.normal[near]


def follow(surface: Surface, seed: Cylinder) -> FloatArray:
    """Walk from a cylinder to both ends of the tunnel.

    Returns
    -------
    ndarray of shape (k, 3)
        Centres of the lining in order [m]; none where not even the start holds.
    """
    start = improve(surface, seed)
    if start is None:
        return np.empty((0, 3))
    onward = _walk(surface, start)
    back = _walk(surface, Cylinder(start.centre, -start.direction, start.radius))
    places = np.array([*back[::-1], start.centre, *onward])
    if len(places) == 1:
        # shorter than two steps: straight through its one centre
        half = 0.5 * STEP * start.radius * start.direction
        places = np.stack([start.centre - half, start.centre + half])
    return places


def _walk(surface: Surface, here: Cylinder) -> list[FloatArray]:
    places, missed = list[FloatArray](), 0
    limit = int(np.ceil(np.linalg.norm(np.ptp(surface.place, axis=0)) * np.pi / (STEP * here.radius)))
    for _ in range(limit):
        ahead = Cylinder(here.centre + STEP * here.radius * here.direction, here.direction, here.radius)
        found = improve(surface, ahead)
        missed = missed + 1 if found is None else 0
        if missed > GAP:
            break
        here = found or ahead
        if found is not None:
            places.append(found.centre)
    return places


def improve(surface: Surface, guess: Cylinder) -> Cylinder | None:
    """Fit direction, then centre and radius, to the lining near a guess; None where less than 120 degrees show."""
    away, normal = surface.around(guess.centre, guess.radius * np.hypot(1.0 + BAND, STEP))
    direction = _direction(away, normal, guess)
    slab = away[np.abs(away @ direction) <= STEP * guess.radius]
    x, y = square_basis(direction) @ slab.T
    circle = fit_circle(x, y, guess.radius)
    if circle is None:
        return None
    dx, dy, radius, weight = circle
    seen = sectors_seen(np.arctan2(y - dy, x - dx)[weight > 0])
    if seen < MIN_SECTORS or abs(radius / guess.radius - 1) > BAND or np.hypot(dx, dy) > BAND * guess.radius:
        return None
    return Cylinder(guess.centre + np.array([dx, dy]) @ square_basis(direction), direction, radius)


def _direction(away: FloatArray, normal: FloatArray, guess: Cylinder) -> FloatArray:
    """Direction that the normals of the lining avoid, ends and clutter weighted down."""
    rho = np.linalg.norm(away - (away @ guess.direction)[:, None] * guess.direction, axis=1)
    lining = normal[(np.abs(rho - guess.radius) < BAND * guess.radius) & (np.abs(normal @ guess.direction) < 0.5)]
    direction = guess.direction
    for _ in range(5):
        if len(lining) < MIN_SECTORS:
            return guess.direction
        slope = lining @ direction
        scale = 1.4826 * float(np.median(np.abs(slope))) + 1e-9
        weight = 1.0 / (1.0 + (slope / (2.0 * scale)) ** 2)
        direction = np.linalg.eigh((lining * weight[:, None]).T @ lining)[1][:, 0]
        direction = direction * np.sign(direction @ guess.direction)
    return direction if direction @ guess.direction > np.cos(np.radians(30.0)) else guess.direction


def fit_circle(
    x: FloatArray, y: FloatArray, radius: float, *, band: float = BAND
) -> tuple[float, float, float, FloatArray] | None:
    """Fit a circle about the origin to places most of which lie on it, by Tukey's weights on radial distances.

    Parameters
    ----------
    x, y : ndarray of shape (n,)
        Places [m]; the centre sought is near the origin.
    radius : float
        Rough radius [m].
    band : float
        Places farther from the circle than this share of its radius are not looked at.

    Returns
    -------
    dx, dy, radius : float
        Centre and radius [m].
    weight : ndarray of shape (n,)
        0 for places that are not on the circle.
    """
    dx = dy = 0.0
    weight = np.zeros(len(x))
    for turn in range(15):
        rho = np.hypot(x - dx, y - dy)
        misfit = rho - radius
        near = np.abs(misfit) < band * radius
        if near.sum() < MIN_SECTORS:
            return None
        scale = 1.4826 * float(np.median(np.abs(misfit[near]))) + 1e-9 * radius
        weight = np.where(near, np.clip(1.0 - (misfit / (TUKEY * scale)) ** 2, 0.0, None) ** 2, 0.0)
        A = np.stack([(x - dx) / rho, (y - dy) / rho, np.ones(len(x))], axis=1)[near]
        step = np.linalg.lstsq((A.T * weight[near]) @ A, (A.T * weight[near]) @ misfit[near], rcond=None)[0]
        dx, dy, radius = dx + step[0], dy + step[1], radius + step[2]
        if turn and np.abs(step).max() < 1e-7 * radius:
            break
    return float(dx), float(dy), float(radius), weight
