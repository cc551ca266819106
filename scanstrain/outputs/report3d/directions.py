# SPDX-License-Identifier: MIT
"""From where the cloud is looked at, and which way its surface faces."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.report3d.thin import MOST_LOOKED_AT
from scanstrain.result import Result

FloatArray = NDArray[np.float64]

ONE_SIDED = 0.5
"""Length of the mean normal above which the object counts as one face, seen from its free side."""
UPRIGHT = 0.3
"""Horizontal part of the mean normal above which that face is seen from the front, and not from above."""
ASIDE = np.radians(24.0)
"""How far beside the normal of a face the viewer stands: depth shows, and numbers stay readable."""
ABOVE = np.radians(18.0)
"""How far above the horizon he stands."""
REACH = 1.5
"""Gauge spacings within which a point takes over the direction of its gauge."""


@dataclass(frozen=True, slots=True)
class View:
    """Where the viewer stands at first.

    Parameters
    ----------
    yaw, pitch : float
        Direction from the object to the viewer: angle from x towards y in plan, and above the horizon [rad].
    direction : ndarray of shape (2,)
        Longest horizontal direction of the cloud, a unit vector in plan.
    hollow : bool
        Whether the surface surrounds its free side, so that it is seen into by leaving out what faces away.
    """

    yaw: float
    pitch: float
    direction: FloatArray
    hollow: bool


def choose_view(result: Result) -> View:
    """Stand before the free side of a wall, and beside a tunnel."""
    points = result.reference.points
    plan = points[:: max(1, len(points) // MOST_LOOKED_AT), :2]
    _, vectors = np.linalg.eigh(np.cov(plan.T))
    direction = vectors[:, 1] * (1.0 if vectors[np.argmax(np.abs(vectors[:, 1])), 1] > 0 else -1.0)
    normal = result.strain.normal[np.isfinite(result.strain.normal).all(axis=1)]
    mean = normal.mean(axis=0) if len(normal) else np.zeros(3)
    hollow = bool(np.linalg.norm(mean) < ONE_SIDED)
    if not hollow and np.hypot(mean[0], mean[1]) > UPRIGHT:
        return View(float(np.arctan2(mean[1], mean[0]) + ASIDE), float(ABOVE), direction, hollow)
    across = float(np.arctan2(direction[1], direction[0]) - np.pi / 2)
    return View(across + 1.2 * float(ASIDE), float(ABOVE if hollow else 3 * ABOVE), direction, hollow)


def facing_codes(result: Result, points: FloatArray) -> list[NDArray[np.uint8]]:
    """Code the normal of the nearest gauge at each point: three arrays (k,), 127 for zero, 0 and 254 for -1 and 1.

    A point without a gauge near it gets the zero vector.
    """
    from scipy.spatial import cKDTree

    known = np.isfinite(result.strain.normal).all(axis=1) & np.isfinite(result.strain.position).all(axis=1)
    normals = np.zeros((len(points), 3))
    if known.any():
        reach = REACH * result.strain.gauge_spacing
        away, nearest = cKDTree(result.strain.position[known]).query(points, distance_upper_bound=reach)
        near = np.isfinite(away)
        normals[near] = result.strain.normal[known][nearest[near]]
    codes = np.round(127 + 127 * normals).astype(np.uint8)
    return [np.ascontiguousarray(codes[:, axis]) for axis in range(3)]
