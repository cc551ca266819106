# SPDX-License-Identifier: MIT
"""The structure's own axes at each gauge: hoop and axial, or horizontal and upward."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

STRUCTURES = ("tunnel", "wall", "free")

MIN_SINE = 0.1
"""Below this sine (6 degrees) between guide direction and normal, the guide gives no useful tangent."""

MIN_TURN = 0.01
"""Share of the normals' spread outside the main direction that a tunnel must show to have an axis (6 degrees rms)."""

UP = np.array([0.0, 0.0, 1.0])


def axis_of_normals(normals: FloatArray) -> FloatArray | None:
    """Direction that the normals avoid: smallest eigenvector of the sum of n n'.

    Parameters
    ----------
    normals : ndarray of shape (g, 3)
        Unit normals.

    Returns
    -------
    ndarray of shape (3,) or None
        Unit axis, its largest component positive. None where the normals do not turn enough to have one, as on a flat
        wall, or spread in all directions alike.
    """
    if len(normals) < 3:
        return None
    shares, vectors = np.linalg.eigh(normals.T @ normals / len(normals))
    if shares[1] < MIN_TURN or shares[0] > 0.5 * shares[1]:
        return None
    axis = vectors[:, 0]
    return np.asarray(axis * np.sign(axis[np.argmax(np.abs(axis))]))


def turned_components(axes: FloatArray, frame: FloatArray) -> FloatArray:
    """Return what takes tensor components (11, 22, 12) along a gauge's a1, a2 to (uu, vv, uv); shape (g, 3, 3)."""
    (a, b), (c, d) = np.moveaxis(np.einsum("gia,gib->gab", axes, frame[:, :, :2]), 0, -1)
    turn = np.stack([a * a, b * b, 2 * a * b, c * c, d * d, 2 * c * d, a * c, b * d, a * d + b * c], -1)
    return np.asarray(turn.reshape(-1, 3, 3))


def structure_axes(
    frame: FloatArray, *, structure: str, axis: FloatArray | None = None
) -> tuple[FloatArray, tuple[str, ...]]:
    """Unit tangents u and v with u x v = n.

    v follows a guide direction projected on the tangent plane, the tunnel axis or the vertical; u = v x n is the hoop
    direction, or the horizontal to the right for somebody who faces the surface. Where guide and normal are
    parallel (a portal wall, a floor) the gauge's own a1, a2 serve.

    Parameters
    ----------
    frame : ndarray of shape (g, 3, 3)
        Columns a1, a2, n.
    structure : {"tunnel", "wall", "free"}
    axis : ndarray of shape (3,) or (g, 3), optional
        Direction of the tunnel axis, one for all or one a gauge; found from the normals where not given.

    Returns
    -------
    axes : ndarray of shape (g, 3, 2)
    warnings : tuple of str
    """
    normals = frame[..., 2]
    guide, notes = UP, tuple[str, ...]()
    if structure == "tunnel":
        found = axis_of_normals(normals) if axis is None else axis / np.linalg.norm(axis, axis=-1, keepdims=True)
        if found is None:
            notes = (
                "The normals do not show a tunnel axis: strain_u and strain_v are horizontal and upward here; "
                "give the axis to get hoop and axial strain.",
            )
        else:
            guide = found
    guide = np.broadcast_to(guide, normals.shape)
    v = guide - np.einsum("gi,gi->g", normals, guide)[:, None] * normals
    sine = np.linalg.norm(v, axis=1)
    usable = sine > MIN_SINE
    v = np.where(usable[:, None], v / np.where(usable, sine, 1.0)[:, None], frame[..., 1])
    u = np.cross(v, normals)
    return np.stack([u, v], axis=-1), notes
