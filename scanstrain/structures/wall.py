# SPDX-License-Identifier: MIT
"""A wall as a plane with axes: distance along it, height on it, offset from it, and what lies on its face."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.zones import Unrolled

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

UP = np.array([0.0, 0.0, 1.0])

FACING = float(np.cos(np.radians(20.0)))
"""A patch belongs to the face if its normal is within 20 degrees of that of the plane: masonry is not smooth."""

MARGIN = 0.02
"""What lies this far beyond the ends of the face [m] still belongs to it: noise puts points there."""


@dataclass(frozen=True, slots=True)
class Wall:
    """The plane of a wall, found once on the reference epoch and used for all epochs.

    Parameters
    ----------
    origin : ndarray of shape (3,)
        Lower left corner of the face for somebody who faces it, on the plane, local coordinates [m].
    normal : ndarray of shape (3,)
        Unit normal to the free side.
    right : ndarray of shape (3,)
        Unit horizontal direction in the plane, to the right for somebody who faces it.
    up : ndarray of shape (3,)
        Unit direction in the plane, straight up it; `right x up = normal`.
    length, height : float
        Extent of the face along both [m].
    band : float
        Farthest from the plane that something on the face may lie [m].
    lean_sd : float
        Standard error of `lean` [rad], from how uneven the face is; 0 for a plane that was given. The error of the
        levelling of the scanner is not in it.
    warnings : tuple of str
        Sentences for the user.
    """

    origin: FloatArray
    normal: FloatArray
    right: FloatArray
    up: FloatArray
    length: float
    height: float
    band: float
    lean_sd: float
    warnings: tuple[str, ...] = ()

    @property
    def lean(self) -> float:
        """Angle of the plane to the vertical [rad], positive where its top leans to the free side."""
        return float(-np.arcsin(self.normal[2]))

    def unroll(self, points: FloatArray) -> Unrolled:
        """Return distance along the wall and height on it, from its lower left corner, of points (n, 3) [m]."""
        away = np.asarray(points, float) - self.origin
        return Unrolled(
            along=np.einsum("ni,i->n", away, self.right),
            across=np.einsum("ni,i->n", away, self.up),
            clock=np.full(len(away), np.nan),
        )

    def offsets(self, points: FloatArray) -> FloatArray:
        """Return distances from the plane (n,) of points (n, 3), positive on the free side [m]."""
        return np.asarray(np.einsum("ni,i->n", np.asarray(points, float) - self.origin, self.normal))

    def places(self, along: FloatArray, height: FloatArray) -> FloatArray:
        """Return local coordinates (n, 3) of places on the plane [m]."""
        return np.asarray(self.origin + np.outer(along, self.right) + np.outer(height, self.up))

    def members(self, points: FloatArray, normals: FloatArray | None = None) -> BoolArray:
        """Say which points lie on the face.

        Parameters
        ----------
        points : ndarray of shape (n, 3)
            Local coordinates [m].
        normals : ndarray of shape (n, 3), optional
            Unit normals of the surface there, signs arbitrary; where given, what faces elsewhere is left out, such as
            the foot of a return wall.

        Returns
        -------
        ndarray of shape (n,), bool
        """
        flat = self.unroll(points)
        on = np.abs(self.offsets(points)) <= self.band
        on &= (flat.along >= -MARGIN) & (flat.along <= self.length + MARGIN)
        on &= (flat.across >= -MARGIN) & (flat.across <= self.height + MARGIN)
        if normals is not None:
            on &= np.abs(np.einsum("ni,i->n", normals, self.normal)) >= FACING
        return np.asarray(on)


def axes_of(normal: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the directions right and up (3,) of a plane with this unit normal (3,), which is not vertical."""
    up = UP - normal[2] * normal
    up /= np.linalg.norm(up)
    return np.cross(up, normal), up
