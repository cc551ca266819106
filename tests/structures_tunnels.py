# SPDX-License-Identifier: MIT
"""Tunnels as plain point sets in closed form: straight, bent, inclined, with clutter, floor and end walls."""

from __future__ import annotations

import numpy as np

UP = np.array([0.0, 0.0, 1.0])


def centre_line(along, *, bend=np.inf, slope=0.0, bearing=0.0):
    """Places and directions of an axis: an arc of radius `bend` in plan that starts at `bearing`, rising by `slope`."""
    along = np.atleast_1d(np.asarray(along, float))
    level = along * np.cos(slope)
    turned = level / bend
    if np.isinf(bend):
        east, north = level, np.zeros_like(level)
    else:
        east, north = bend * np.sin(turned), bend * (1 - np.cos(turned))
    c, s = np.cos(bearing), np.sin(bearing)
    place = np.stack([c * east - s * north, s * east + c * north, along * np.sin(slope)], axis=1)
    angle = bearing + turned
    forward = [np.cos(angle) * np.cos(slope), np.sin(angle) * np.cos(slope), np.full(len(along), np.sin(slope))]
    return place, np.stack(forward, axis=1)


def placed(along, right, up, **line):
    """Points from chainage and offsets, for somebody who looks along the axis."""
    place, forward = centre_line(along, **line)
    aside = np.cross(forward, UP)
    aside /= np.linalg.norm(aside, axis=1, keepdims=True)
    return place + right[:, None] * aside + up[:, None] * np.cross(aside, forward)


def ring_points(rng, along, *, radius, density, share=1.0, noise=0.002, radial=None, moved=None, clutter=0.0, **line):
    """Points of the lining at chainages drawn from `along` (from, to), `density` a square metre, round the crown.

    `radial(clock, chainage)` is added to the radius, `moved(clock)` moves points along the arc, both in metres.
    """
    low, high = along
    n = int(2 * np.pi * radius * share * (high - low) * density)
    s, clock = rng.uniform(low, high, n), rng.uniform(-np.pi, np.pi, n) * share
    rho = radius + noise * rng.normal(size=n)
    if radial is not None:
        rho = rho + radial(clock, s)
    if moved is not None:
        clock = clock + moved(clock) / radius
    right, up = rho * np.sin(clock), rho * np.cos(clock)
    k = int(clutter * n)
    if k:
        # half anywhere inside, half on a tray 3 to 10 cm off the wall at about 2:20
        angle = np.r_[rng.uniform(-np.pi, np.pi, k // 2), rng.uniform(1.2, 1.3, k - k // 2)]
        inside = radius * np.r_[np.sqrt(rng.uniform(0.1, 0.98, k // 2)), rng.uniform(0.967, 0.99, k - k // 2)]
        s, right, up = (
            np.r_[s, rng.uniform(low, high, k)],
            np.r_[right, inside * np.sin(angle)],
            np.r_[up, inside * np.cos(angle)],
        )
    return placed(s, right, up, **line)


def flat_floor(rng, length, *, radius, depth, density, **line):
    """A level floor `depth` below the axis."""
    half = np.sqrt(radius**2 - depth**2)
    n = int(2 * half * length * density)
    up = -depth + 0.002 * rng.normal(size=n)
    return placed(rng.uniform(0, length, n), rng.uniform(-half, half, n), up, **line)


def end_walls(rng, length, *, radius, density, **line):
    """A plane across the tunnel at both ends."""
    n = int(np.pi * radius**2 * density)
    walls = []
    for s in (0.0, length):
        rho, angle = radius * np.sqrt(rng.random(n)), rng.uniform(-np.pi, np.pi, n)
        walls.append(placed(s + 0.002 * rng.normal(size=n), rho * np.sin(angle), rho * np.cos(angle), **line))
    return np.concatenate(walls)


def box(rng, corner, *, density, faces=range(6)):
    """Faces of a box from the origin to a corner."""
    corner, parts = np.asarray(corner, float), []
    for face in faces:
        axis = face % 3
        n = int(np.delete(corner, axis).prod() * density)
        points = rng.uniform(0, corner, (n, 3))
        points[:, axis] = (face // 3) * corner[axis] + 0.002 * rng.normal(size=n)
        parts.append(points)
    return np.concatenate(parts)
