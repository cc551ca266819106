# SPDX-License-Identifier: MIT
"""Undeformed surfaces with two material coordinates in metres: a plane wall and a circular lining.

Both carry an orthonormal right-handed frame (e1, e2, n) at every place; n points to the free side.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def product(rows: FloatArray, M: FloatArray) -> FloatArray:
    """Return `rows @ M` for many short rows without the threads of a BLAS, which cost more than they give here."""
    return np.asarray(np.einsum("ni,ij->nj", rows, M))


class Surface(Protocol):
    """What a scene needs to know of its undeformed surface."""

    @property
    def curvature(self) -> float:
        """Curvature along the first coordinate [1/m]: d e1/d q1 = curvature * n."""
        ...

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Lowest and highest q1, lowest and highest q2 [m]."""
        ...

    def frames(self, q: FloatArray) -> FloatArray:
        """Return (n, 3, 3) frames whose columns are e1, e2 and n at the places `q` (n, 2) [m]."""
        ...

    def points(self, q: FloatArray) -> FloatArray:
        """Return the (n, 3) places [m] of the material coordinates `q` (n, 2) [m]."""
        ...

    def project(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return material coordinates (n, 2) and height over the surface (n,) [m] of `points` (n, 3)."""
        ...

    def ranges(self, start: FloatArray, directions: FloatArray) -> FloatArray:
        """Return the distance [m] along unit `directions` (n, 3) to the unbounded surface, inf if none."""
        ...


@dataclass(frozen=True, slots=True)
class Wall:
    """A vertical plane: q1 horizontal from `corner`, q2 upwards, free side to the right of q1.

    Parameters
    ----------
    length, height : float
        Extent [m].
    corner : tuple of float
        The lower start of the wall [m].
    bearing : float
        Angle of q1 from the x axis, counter-clockwise [rad].
    """

    length: float
    height: float
    corner: tuple[float, float, float] = (0.0, 0.0, 0.0)
    bearing: float = 0.0

    @property
    def curvature(self) -> float:
        """A plane has none [1/m]."""
        return 0.0

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Range of q1 and of q2 [m]."""
        return 0.0, self.length, 0.0, self.height

    @property
    def _frame(self) -> FloatArray:
        c, s = np.cos(self.bearing), np.sin(self.bearing)
        return np.array([[c, 0.0, s], [s, 0.0, -c], [0.0, 1.0, 0.0]])

    def frames(self, q: FloatArray) -> FloatArray:
        """Return the one frame of the plane for every place, (n, 3, 3)."""
        return np.broadcast_to(self._frame, (len(q), 3, 3))

    def points(self, q: FloatArray) -> FloatArray:
        """Return the places of `q`, (n, 3) [m]."""
        return np.asarray(self.corner) + product(q, self._frame[:, :2].T)

    def project(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the foot point coordinates (n, 2) and the height towards the free side (n,) [m]."""
        local = product(points - np.asarray(self.corner), self._frame)
        return local[:, :2], local[:, 2]

    def ranges(self, start: FloatArray, directions: FloatArray) -> FloatArray:
        """Return the distance [m] to the plane for beams that come from the free side."""
        normal = self._frame[:, 2]
        height = float((np.asarray(start) - np.asarray(self.corner)) @ normal)
        approach = -product(directions, normal[:, None])[:, 0]
        with np.errstate(divide="ignore"):
            return np.where(approach > 0, height / approach, np.inf)


@dataclass(frozen=True, slots=True)
class Lining:
    """The inside of a circular tunnel: q1 along the arc, q2 along the level axis (chainage).

    Looking along the axis, q1 / radius is the angle from the right springline, counter-clockwise: the crown is
    at pi/2. The normal points to the axis.

    Parameters
    ----------
    radius, length : float
        Extent [m].
    arc : tuple of float
        First and last angle [rad]; a full ring by default.
    start : tuple of float
        The axis at chainage 0 [m].
    bearing : float
        Angle of the axis from the x axis, counter-clockwise [rad].
    """

    radius: float
    length: float
    arc: tuple[float, float] = (-np.pi / 2, 1.5 * np.pi)
    start: tuple[float, float, float] = (0.0, 0.0, 0.0)
    bearing: float = 0.0

    @property
    def curvature(self) -> float:
        """The ring bends towards its normal [1/m]."""
        return 1.0 / self.radius

    @property
    def bounds(self) -> tuple[float, float, float, float]:
        """Range of the arc and of the chainage [m]."""
        return self.radius * self.arc[0], self.radius * self.arc[1], 0.0, self.length

    @property
    def _axes(self) -> FloatArray:
        """Columns: right, up, forward."""
        c, s = np.cos(self.bearing), np.sin(self.bearing)
        return np.array([[s, 0.0, c], [-c, 0.0, s], [0.0, 1.0, 0.0]])

    def frames(self, q: FloatArray) -> FloatArray:
        """Return hoop, axial and normal directions, (n, 3, 3)."""
        angle = q[:, 0] / self.radius
        c, s, zero = np.cos(angle), np.sin(angle), np.zeros(len(q))
        section = np.stack([np.stack([-s, zero, -c], 1), np.stack([c, zero, -s], 1)], 1)
        forward = np.broadcast_to(np.array([[[0.0, 1.0, 0.0]]]), (len(q), 1, 3))
        return np.asarray(np.einsum("ij,njk->nik", self._axes, np.concatenate([section, forward], axis=1)))

    def points(self, q: FloatArray) -> FloatArray:
        """Return the places of `q`, (n, 3) [m]."""
        angle = q[:, 0] / self.radius
        section = np.stack([self.radius * np.cos(angle), self.radius * np.sin(angle), q[:, 1]], axis=1)
        return np.asarray(self.start) + product(section, self._axes.T)

    def project(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return (arc, chainage) and the height towards the axis [m]."""
        right, up, forward = product(points - np.asarray(self.start), self._axes).T
        middle = (self.arc[0] + self.arc[1]) / 2
        # The cut of the angle lies opposite the middle of the arc, so that no place of the lining falls on it.
        c, s = np.cos(middle), np.sin(middle)
        angle = middle + np.arctan2(c * up - s * right, c * right + s * up)
        return np.stack([self.radius * angle, forward], axis=1), self.radius - np.hypot(right, up)

    def ranges(self, start: FloatArray, directions: FloatArray) -> FloatArray:
        """Return the distance [m] from inside the tunnel to the ring."""
        x, y = ((np.asarray(start) - np.asarray(self.start)) @ self._axes)[:2]
        dx, dy = product(directions, self._axes[:, :2]).T
        a, b, c = dx**2 + dy**2, x * dx + y * dy, x**2 + y**2 - self.radius**2
        with np.errstate(divide="ignore", invalid="ignore"):
            distance = (-b + np.sqrt(b**2 - a * c)) / a
        return np.where(np.isfinite(distance), distance, np.inf)
