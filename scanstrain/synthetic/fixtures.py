# SPDX-License-Identifier: MIT
"""Things that stand before a surface and hide part of it: pipes, posts, cabinets, floors."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from scanstrain.synthetic.surfaces import FloatArray, product


class Fixture(Protocol):
    """Something that does not move and that beams hit."""

    @property
    def reflectance(self) -> float:
        """Intensity at normal incidence, relative to the mean of the surface [1]."""
        ...

    @property
    def classification(self) -> int:
        """LAS class code of its points."""
        ...

    def hit(self, start: FloatArray, directions: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the distance (n,) [m], inf if missed, and the unit normal (n, 3) that beams meet."""
        ...


@dataclass(frozen=True, slots=True)
class Rod:
    """A round pipe or post from `foot` to `head` [m], without caps."""

    foot: tuple[float, float, float]
    head: tuple[float, float, float]
    radius: float
    reflectance: float = 0.6
    classification: int = 1

    def hit(self, start: FloatArray, directions: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Intersect beams with the mantle, from outside."""
        along = np.asarray(self.head) - np.asarray(self.foot)
        length = float(np.linalg.norm(along))
        axis = along / length
        arm = np.asarray(start) - np.asarray(self.foot)
        forward = product(directions, axis[:, None])[:, 0]
        d = directions - np.outer(forward, axis)
        p = arm - (arm @ axis) * axis
        a, b, c = (d * d).sum(axis=1), product(d, p[:, None])[:, 0], p @ p - self.radius**2
        with np.errstate(divide="ignore", invalid="ignore"):
            distance = (-b - np.sqrt(b**2 - a * c)) / a
            place = arm @ axis + distance * forward
            hit = (distance > 0) & (place >= 0) & (place <= length)
        distance = np.where(hit, distance, np.inf)
        normal = (p + np.where(hit, distance, 0.0)[:, None] * d) / self.radius
        return distance, normal


@dataclass(frozen=True, slots=True)
class Box:
    """A cuboid with a level base: a cabinet, a buttress, a floor slab.

    Parameters
    ----------
    centre, size : tuple of float
        Middle, and full lengths along the bearing, across it and upwards [m].
    bearing : float
        Angle of the first side from the x axis, counter-clockwise [rad].
    """

    centre: tuple[float, float, float]
    size: tuple[float, float, float]
    bearing: float = 0.0
    reflectance: float = 0.8
    classification: int = 1

    def hit(self, start: FloatArray, directions: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Intersect beams with the six faces by slabs, from outside."""
        c, s = np.cos(self.bearing), np.sin(self.bearing)
        axes = np.array([[c, -s, 0.0], [s, c, 0.0], [0.0, 0.0, 1.0]])
        origin, d = (np.asarray(start) - np.asarray(self.centre)) @ axes, product(directions, axes)
        half = np.asarray(self.size) / 2
        with np.errstate(divide="ignore", invalid="ignore"):
            one, other = (-half - origin) / d, (half - origin) / d
        near, far = np.minimum(one, other), np.maximum(one, other)
        entry, face = near.max(axis=1), near.argmax(axis=1)
        hit = (entry > 0) & (entry <= far.min(axis=1))
        normal = -np.sign(d[np.arange(len(d)), face])[:, None] * axes.T[face]
        return np.where(hit, entry, np.inf), normal
