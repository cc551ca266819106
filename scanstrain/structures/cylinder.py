# SPDX-License-Identifier: MIT
"""Where a tunnel may be: the cylinder that most of the surface around it agrees with."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

SAMPLE = 4000
"""Surface patches that vote; more only cost time."""

DRAWS = 1500
"""Pairs of patches tried. With half the patches on the lining a quarter of the pairs serve: hundreds are left."""

NEAR_RADIUS, NEAR_ANGLE = 0.1, np.cos(np.radians(20.0))
"""A patch agrees within a tenth of the radius and 20 degrees of its normal: linings are neither round nor smooth."""

MIN_SHARE = 1 / 3
"""Share of the patches inside a cylinder that must lie on it; services and floor take their part. The outer side of a
tunnel in a bend lies on a large cylinder too, about the centre of the bend, but most of the tunnel does not."""

MIN_TURN = np.sin(np.radians(20.0))
"""Sine between the normals of a pair: closer ones fix no axis."""

SECTORS = 24
"""Parts of a ring that must be seen one by one (15 degrees each)."""

MIN_SECTORS = 8
"""A tunnel shows at least 120 degrees of its lining; less is a wall or a vault whose centre is not fixed."""


@dataclass(frozen=True, slots=True)
class Cylinder:
    """A circular cylinder: a place on its axis (3,) [m], its unit direction (3,) and its radius [m]."""

    centre: FloatArray
    direction: FloatArray
    radius: float


def find_cylinder(centre: FloatArray, normal: FloatArray, *, guide: FloatArray | None = None) -> Cylinder | None:
    """Find a stretch of tunnel one diameter long by consensus of surface patches.

    Two patches with different normals fix an axis: its direction is square to both normals, and both normals meet
    it (random sample consensus, Fischler & Bolles 1981). Of all such cylinders the one wins that most patches within
    one radius along the axis agree with, and few inside contradict, if they stand around at least 120 degrees of it.
    Pairs are drawn near and far alike, so that any radius can be found.

    Parameters
    ----------
    centre, normal : ndarray of shape (b, 3)
        Places [m] and unit normals of surface patches, signs of normals arbitrary.
    guide : ndarray of shape (3,), optional
        Rough unit direction of the tunnel; axes more than 30 degrees off are not considered.

    Returns
    -------
    Cylinder or None
        None where no patches agree.
    """
    rng = np.random.default_rng(0)
    if len(centre) > SAMPLE:
        drawn = np.sort(rng.choice(len(centre), SAMPLE, replace=False))
        centre, normal = centre[drawn], normal[drawn]
    if len(centre) < MIN_SECTORS:
        return None
    found = _candidates(centre, normal, rng)
    if guide is not None:
        found = tuple(part[np.abs(found[1] @ guide) > np.cos(np.radians(30.0))] for part in found)
    scores = np.array([_score(*_agree(centre, normal, *one)[:2]) for one in zip(*found, strict=True)])
    for best in np.argsort(-scores, kind="stable")[: int((scores > 0).sum())]:
        place, direction, radius = (part[best] for part in found)
        agree, _, angle = _agree(centre, normal, place, direction, radius)
        if sectors_seen(angle[agree]) >= MIN_SECTORS:
            return Cylinder(place, direction, float(radius))
    return None


def sectors_seen(angle: FloatArray) -> int:
    """Count the sectors of a ring that angles [rad] fall in."""
    return len(np.unique(np.floor(angle * (SECTORS / (2 * np.pi))) % SECTORS))


def square_basis(direction: FloatArray) -> FloatArray:
    """Return two unit vectors (2, 3) square to a direction (3,) and to one another."""
    first = np.cross(direction, np.eye(3)[np.argmin(np.abs(direction))])
    first /= np.linalg.norm(first)
    return np.stack([first, np.cross(direction, first)])


def _candidates(
    centre: FloatArray, normal: FloatArray, rng: np.random.Generator
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Axis places, directions and radii from pairs of patches, from neighbours to the ends of the cloud."""
    from scipy.spatial import cKDTree

    tree = cKDTree(centre)
    i = rng.integers(len(centre), size=DRAWS)
    nearest = float(np.median(tree.query(centre, k=[2])[0]))
    reach = np.exp(rng.uniform(np.log(nearest), np.log(np.linalg.norm(np.ptp(centre, axis=0))), DRAWS))
    aim = rng.normal(size=(DRAWS, 3))
    aim *= (reach / np.linalg.norm(aim, axis=1))[:, None]
    j = tree.query(centre[i] + aim)[1]
    across = np.cross(normal[i], normal[j])
    sine = np.linalg.norm(across, axis=1)
    use = sine > MIN_TURN
    i, j, direction = i[use], j[use], across[use] / sine[use, None]
    between = centre[j] - centre[i]
    between -= np.einsum("ni,ni->n", between, direction)[:, None] * direction
    # in the plane square to the axis: centre_i + a n_i = centre_j + b n_j
    a = np.einsum("ni,ni->n", np.cross(between, normal[j]), direction) / sine[use]
    b = np.einsum("ni,ni->n", np.cross(between, normal[i]), direction) / sine[use]
    fair = np.abs(np.abs(a) - np.abs(b)) < NEAR_RADIUS * np.abs(a)
    place = centre[i] + a[:, None] * normal[i]
    return place[fair], direction[fair], np.abs(a[fair])


def _score(agree: BoolArray, inside: BoolArray) -> float:
    """Patches that agree, times the square of their share of those inside; 0 where that share is too small."""
    count, share = int(agree.sum()), float(agree.sum() / max(1, inside.sum()))
    return count * share**2 if share >= MIN_SHARE else 0.0


def _agree(
    centre: FloatArray, normal: FloatArray, place: FloatArray, direction: FloatArray, radius: float
) -> tuple[BoolArray, BoolArray, FloatArray]:
    """Say which patches lie on, which on or in, a stretch of cylinder two radii long, and at what angle all lie."""
    away = centre - place
    first, second = square_basis(direction)
    x, y = away @ first, away @ second
    rho = np.hypot(x, y)
    facing = np.abs((normal @ first) * x + (normal @ second) * y)
    inside = (np.abs(away @ direction) <= radius) & (rho < (1.0 + NEAR_RADIUS) * radius)
    agree = inside & (rho > (1.0 - NEAR_RADIUS) * radius) & (facing > NEAR_ANGLE * rho)
    return agree, inside, np.arctan2(y, x)
