# SPDX-License-Identifier: MIT
"""The exact answer: what a perfect instrument would write at a place of a scene."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError
from scanstrain.registry import unknown_name
from scanstrain.synthetic.scene import Scene, local_tangents
from scanstrain.synthetic.surfaces import FloatArray

MEASURES = ("small", "green_lagrange", "almansi", "hencky", "biot")

ON_STRUCTURE = 0.02
"""A point farther than this from the base surface [m] is something else: a fixture, a stray echo."""

EDGE = 0.005
"""Noise puts points of the structure this far beyond its ends [m]."""


def truth(scene: Scene, points: FloatArray, *, measure: str = "small") -> dict[str, NDArray[Any]]:
    """Return the exact change at points of the reference epoch, found by projection onto the base surface.

    The projection is exact for noise along the normal. Noise s across it shifts the place by s, and with it the
    answer by s times the gradient there: 0.5 mm and a gradient of 0.005 make 0.0025 mm.

    Parameters
    ----------
    scene : Scene
        Object and motion.
    points : ndarray of shape (n, 3)
        Points of the undeformed epoch in the scene's local coordinates [m] (file coordinates minus
        `scene.origin`).
    measure : str
        Strain measure: small (linear in the displacement gradient), green_lagrange, almansi, hencky or biot.

    Returns
    -------
    dict of str to ndarray
        As `truth_at`, and `on_structure` (n,) bool: False 20 mm off the surface or 5 mm beyond its ends, where
        what is met did not move and every value is 0.
    """
    q, height = scene.surface.project(np.asarray(points, dtype=np.float64))
    a0, a1, b0, b1 = scene.surface.bounds
    u, v = q.T
    on = (u > a0 - EDGE) & (u < a1 + EDGE) & (v > b0 - EDGE) & (v < b1 + EDGE) & (np.abs(height) < ON_STRUCTURE)
    values = truth_at(scene, q, measure=measure)
    for name, value in values.items():
        if name not in ("normal", "axes", "material"):
            value[~on] = 0.0
    return values | {"on_structure": on}


def truth_at(scene: Scene, q: FloatArray, *, measure: str = "small") -> dict[str, NDArray[Any]]:
    """Return the exact change of the base surface at material coordinates.

    Parameters
    ----------
    scene : Scene
        Object and motion.
    q : ndarray of shape (n, 2)
        Material coordinates [m].
    measure : str
        Strain measure, as in `truth`.

    Returns
    -------
    dict of str to ndarray
        Every attribute of `strain.laz` that states a change (`disp_x` ... `curv_2`), in its unit, and `displacement`
        (n, 3) [m] in local axes, `gradient` (n, 3, 2) [1] in the frame (u, v, normal), `strain` (n, 2, 2) along
        u and v, `curvature` (n, 2, 2) [1/m], `normal` (n, 3), `axes` (n, 3, 2), `material` (n, 2).

    Raises
    ------
    OptionError
        An unknown measure.

    Notes
    -----
    C = B'B from the moved tangents B = A + grad u; with U = sqrt(C) the change of curvature is
    -(U^-1 b U^-1 - b0), b and b0 the second fundamental forms after and before: positive = more convex towards the
    free side. R = [B m] diag(U, 1)^-1 (shell kinematics; Koiter, Green & Zerna, from memory).
    """
    F = scene.surface.frames(q)
    jet = scene.jet(q, deformed=True)
    T = local_tangents(jet)
    C = np.einsum("nki,nkj->nij", T[:, :, :2], T[:, :, :2])
    squares, V = np.linalg.eigh(C)
    inverse = (V * (squares**-0.5)[:, None, :]) @ V.transpose(0, 2, 1)
    E = _strain(measure, jet.first, squares, V)
    K = -(inverse @ _second_form(scene.surface.curvature, jet.second, T[:, :, 2]) @ inverse)
    K[:, 0, 0] += scene.surface.curvature
    R = T.copy()
    R[:, :, :2] = T[:, :, :2] @ inverse
    tilt, spin, vector = _turns(R)
    axes = F[:, :, :2]
    values: dict[str, NDArray[Any]] = {"disp_n": jet.value[:, 2].copy()}
    values["displacement"] = np.einsum("nij,nj->ni", F, jet.value)
    rotation_vector = np.einsum("nij,nj->ni", F, vector)
    for i, axis in enumerate("xyz"):
        values[f"disp_{axis}"], values[f"rot_{axis}"] = values["displacement"][:, i], rotation_vector[:, i]
    spatial = axes @ E @ axes.transpose(0, 2, 1)
    for i, j, name in ((0, 0, "xx"), (1, 1, "yy"), (2, 2, "zz"), (0, 1, "xy"), (0, 2, "xz"), (1, 2, "yz")):
        values[f"strain_{name}"] = spatial[:, i, j]
    values["strain_u"], values["strain_v"], values["shear_uv"] = E[:, 0, 0], E[:, 1, 1], E[:, 0, 1]
    values["strain_2"], values["strain_1"] = np.linalg.eigvalsh(E).T
    values["shear_max"] = values["strain_1"] - values["strain_2"]
    values["dilation"] = np.sqrt(squares.prod(axis=1)) - 1.0
    values["tilt"], values["spin"] = tilt, spin
    values["curv_2"], values["curv_1"] = np.linalg.eigvalsh(K).T
    values |= {"gradient": jet.first, "strain": E, "curvature": K}
    return values | {"normal": F[:, :, 2], "axes": axes, "material": np.asarray(q, dtype=np.float64)}


def _strain(measure: str, first: FloatArray, squares: FloatArray, V: FloatArray) -> FloatArray:
    """Strain of a measure along u and v from C = V diag(squares) V', or from the gradient itself."""
    if measure == "small":
        return np.asarray((first[:, :2] + first[:, :2].transpose(0, 2, 1)) / 2)
    if measure not in MEASURES:
        raise OptionError(unknown_name("measure", measure, list(MEASURES)))
    principal = {
        "green_lagrange": (squares - 1) / 2,
        "almansi": (1 - 1 / squares) / 2,
        "hencky": np.log(squares) / 2,
        "biot": np.sqrt(squares) - 1,
    }[measure]
    return np.asarray((V * principal[:, None, :]) @ V.transpose(0, 2, 1))


def _second_form(curvature: float, second: FloatArray, m: FloatArray) -> FloatArray:
    """b_ij = m . d_ij x, where the undeformed surface contributes curvature * n to 11."""
    b = np.einsum("nk,nkj->nj", m, second)
    b[:, 0] += curvature * m[:, 2]
    return np.asarray(b[:, [[0, 1], [1, 2]]])


def _turns(R: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Tilt of the normal, spin about it (swing and twist), rotation vector; all in the local frame [rad]."""
    axial = np.stack([R[:, 2, 1] - R[:, 1, 2], R[:, 0, 2] - R[:, 2, 0], R[:, 1, 0] - R[:, 0, 1]], axis=1) / 2
    sine, cosine = np.linalg.norm(axial, axis=1), (np.trace(R, axis1=1, axis2=2) - 1) / 2
    angle = np.arctan2(sine, cosine)
    vector = axial * np.where(sine > 0, angle / np.where(sine > 0, sine, 1.0), 1.0)[:, None]
    tilt = np.arctan2(np.hypot(R[:, 0, 2], R[:, 1, 2]), R[:, 2, 2])
    return tilt, _twist(axial, cosine), vector


def _twist(axial: FloatArray, cosine: FloatArray) -> FloatArray:
    """Angle of the rotation about n that remains after the shortest turn of the normal.

    The quaternion of angle a about w is (cos a/2, sin a/2 w) and its twist about n 2 atan2(sin a/2 w_n, cos a/2);
    both divided by cos a/2 the tangent is axial_n / (1 + cos a).
    """
    return np.asarray(2 * np.arctan2(axial[:, 2], 1 + cosine))
