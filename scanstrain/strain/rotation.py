# SPDX-License-Identifier: MIT
"""Local rotation of the surface, split into tilt of the normal and spin about it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import rotation_vector
from scanstrain.strain.surface import SurfaceMap

FloatArray = NDArray[np.float64]


def tilt_vector(mapped: SurfaceMap) -> FloatArray:
    """Components about a1 and a2 of the shortest rotation that takes n to m; shape (g, 2) [rad].

    Its length is the angle between the normals. Where only the normal rows of the gradient are known (the others
    zero), m is the normal of the surface moved along n, so the angle is atan |g_n|: no in-plane part is needed.
    """
    m = mapped.normal
    sine = np.hypot(m[..., 0], m[..., 1])
    angle = np.arctan2(sine, m[..., 2])
    still = sine < 1e-150
    factor = np.where(still, 1.0, angle / np.where(still, 1.0, sine))
    return np.stack([-m[..., 1] * factor, m[..., 0] * factor], axis=-1)


def spin(mapped: SurfaceMap) -> FloatArray:
    """Rotation about the normal; shape (g,) [rad].

    R is a turn about n followed by the shortest rotation n -> m (swing and twist). In the gauge frame the
    in-plane block of the swing is symmetric, so the twist is that block's planar polar angle.
    """
    R = mapped.rotation
    return np.asarray(np.arctan2(R[..., 1, 0] - R[..., 0, 1], R[..., 0, 0] + R[..., 1, 1]))


def rotation_in_space(mapped: SurfaceMap, frame: FloatArray) -> FloatArray:
    """Rotation vector of R in local axes; shape (g, 3) [rad]."""
    return np.asarray(np.einsum("...ij,...j->...i", frame, rotation_vector(mapped.rotation)))
