# SPDX-License-Identifier: MIT
"""Kinematics of a mapped surface in the gauge frame: metric, stretch, normal, rotation.

Tangents A = (e1, e2) go to B = A + g. The metric C = B'B holds all of the surface's strain and no rotation; the
rotation is the polar factor of F = [B m][A n]^-1 with m the deformed unit normal. F is [B m] in the gauge frame,
F'F = diag(C, 1), so U = sqrt(C), R = [B U^-1, m] and R n = m (shell theory: Koiter; Green & Zerna).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich, transpose
from scanstrain.strain.measures import MEASURES

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SurfaceMap:
    """How tangents and normal of each gauge were mapped, in the gauge frame (a1, a2, n).

    Parameters
    ----------
    stretch, inverse_stretch : ndarray of shape (g, 2, 2)
        U = sqrt(C) of the surface and its inverse [1].
    normal : ndarray of shape (g, 3)
        Deformed unit normal m [1].
    rotation : ndarray of shape (g, 3, 3)
        Polar rotation R [1].
    area : ndarray of shape (g,)
        Ratio of areas, sqrt(det C) [1].
    """

    stretch: FloatArray
    inverse_stretch: FloatArray
    normal: FloatArray
    rotation: FloatArray
    area: FloatArray


def map_surface(gradient: FloatArray) -> SurfaceMap:
    """Split the surface gradient into stretch and rotation.

    The square root of a 2x2 metric is closed, `U = (C + J I) / sqrt(tr C + 2 J)` with `J = sqrt(det C)`
    (Cayley-Hamilton), and smooth where the two stretches are equal.

    Parameters
    ----------
    gradient : ndarray of shape (g, 3, 2)
        Change of displacement component k per metre along tangent j, in the gauge frame [1].

    Returns
    -------
    SurfaceMap
    """
    B = np.asarray(gradient, dtype=np.float64) + np.eye(3)[:, :2]
    C = transpose(B) @ B
    m = np.cross(B[..., 0], B[..., 1])
    J = np.linalg.norm(m, axis=-1)
    m = m / J[..., None]
    area = J[..., None, None]
    scale = np.sqrt(np.trace(C, axis1=-2, axis2=-1) + 2.0 * J)[..., None, None]
    U = (C + area * np.eye(2)) / scale
    trace = np.trace(U, axis1=-2, axis2=-1)[..., None, None]
    inverse = (trace * np.eye(2) - U) / area
    R = np.concatenate([B @ inverse, m[..., None]], axis=-1)
    return SurfaceMap(stretch=U, inverse_stretch=inverse, normal=m, rotation=R, area=J)


def surface_strain(mapped: SurfaceMap, measure: str) -> FloatArray:
    """Strain of the surface in the gauge's tangents, rotation removed; shape (g, 2, 2) [1].

    Every measure is the function of that name applied to the stretch U. "small" therefore is the linear formula
    on R'F and equals "biot": a pure rotation of any size shows no strain.
    """
    return MEASURES[measure](mapped.stretch)


def tensor_in_space(E: FloatArray, tangents: FloatArray) -> FloatArray:
    """In-plane tensor (g, 2, 2) on tangents (g, 3, 2) as a tensor in local axes (g, 3, 3), zero along the normal."""
    return sandwich(tangents, E)


def principal(T: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Larger and smaller principal value of symmetric 2x2 tensors, algebraic."""
    centre = 0.5 * (T[..., 0, 0] + T[..., 1, 1])
    radius = np.hypot(0.5 * (T[..., 0, 0] - T[..., 1, 1]), T[..., 0, 1])
    return centre + radius, centre - radius
