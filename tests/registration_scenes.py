# SPDX-License-Identifier: MIT
"""Small clouds with exact truth for the tests of the registration stage; they use nothing of it."""

from __future__ import annotations

import numpy as np
from scipy.spatial.transform import Rotation

from scanstrain.epoch import Epoch

SPACING = 0.007
"""Mean point spacing of walls and linings [m]."""


def epoch(points, label=""):
    """Make an epoch at the origin."""
    return Epoch(points=np.ascontiguousarray(points, float), origin=np.zeros(3), label=label)


def wall(rng, n=40_000, *, noise=0.002, relief=0.0, aspect=2.0, spacing=SPACING):
    """Upright wall in the plane y = 0, with a smooth relief on request, centred on the origin."""
    height = np.sqrt(n * spacing**2 / aspect)
    x, z = rng.uniform(-0.5, 0.5, (2, n)) * [[aspect * height], [height]]
    y = relief * (np.sin(9 * x + 1) * np.cos(7 * z) + np.sin(3.1 * x + 4 * z))
    return np.c_[x, y + rng.normal(0, noise, n), z]


def lining(rng, n=40_000, *, noise=0.002, radius=0.8, ovality=0.0, arc=1.5 * np.pi):
    """Straight lining along x, open at the floor."""
    length = n * SPACING**2 / (radius * arc)
    t = np.pi / 2 + rng.uniform(-arc / 2, arc / 2, n)
    r = radius * (1 + ovality * np.cos(2 * t)) + rng.normal(0, noise, n)
    return np.c_[rng.uniform(-length / 2, length / 2, n), r * np.cos(t), r * np.sin(t)]


def lining_normals(points):
    """Radial unit vectors of `lining`."""
    n = points * [0, 1, 1]
    return n / np.linalg.norm(n, axis=1, keepdims=True)


def room(rng, n=60_000, *, noise=0.0):
    """Two wavy walls and a floor with a box in a corner: every motion is fixed."""
    m = n // 4
    a, b, c, d = (rng.uniform(0, 1, (2, m)) for _ in range(4))
    parts = [
        np.c_[4 * a[0], 0.03 * np.sin(8 * a[0]) * np.cos(3 * a[1]), 3 * a[1]],
        np.c_[0.04 * np.cos(6 * b[0] + 3 * b[1]), 3 * b[0], 3 * b[1]],
        np.c_[4 * c[0], 3 * c[1], 0.02 * np.sin(12 * c[0] + 3 * c[1])],
        np.c_[2.5 + 0.02 * np.sin(9 * d[0]), 1.2 * d[0], 2 * d[1]],
    ]
    points = np.concatenate(parts) - [2, 1.5, 1.5]
    return points + rng.normal(0, noise, points.shape)


def motion(degrees, metres):
    """Return a 4x4 motion of a turn about a slanted axis and a slanted shift."""
    T = np.eye(4)
    T[:3, :3] = Rotation.from_rotvec(np.radians(degrees) * np.array([0.3, -0.5, 0.81])).as_matrix()
    T[:3, 3] = np.array([0.6, 0.64, -0.48]) * metres
    return T


def apply(T, points):
    """Move points by a 4x4 matrix."""
    return points @ T[:3, :3].T + T[:3, 3]
