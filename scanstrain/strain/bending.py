# SPDX-License-Identifier: MIT
"""Change of curvature, and the face strain that goes with it where a thickness is known.

Sign: curvature is positive where the surface is convex towards its free side, so a change is positive where it
became more convex, and the scanned face is then in tension. A lining seen from inside is concave (curvature -1/R);
where the ring gets sharper the change is negative and the intrados in compression.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import components_2d, sym, tensor_2d
from scanstrain.strain.surface import SurfaceMap

FloatArray = NDArray[np.float64]

FORMS = ("thin", "thick")
"""Of the strain that goes with a change of curvature: of a thin shell, or of a thick ring."""


def curvature_change(mapped: SurfaceMap, shape: FloatArray, hessian: FloatArray) -> FloatArray:
    """Change of the Weingarten map, in the gauge's tangents turned with the surface.

    The reference surface has height `s x x / 2` over its tangent plane. The fitted current surface is
    `(x + u_t + G x, u_n + g_n x + (s + h) x x / 2)`: its second fundamental form is `(s + h) m_n`, its metric C,
    and per unit of the current arc length `U^-1 (s + h) U^-1 m_n`. A height that curves towards the normal is concave
    to the free side, hence the minus: `dk = -(U^-1 (s + h) U^-1 m_n - s)`. On a ring this is `-(u_r'' + u_r) / R^2`
    with its sign turned, both from material points and from a surface followed along its normal only.

    Where the in-plane gradient G is not observable it is zero here, and h must have been fitted with G held at zero;
    h of material points would be off by about twice strain times shape.

    Parameters
    ----------
    mapped : SurfaceMap
    shape, hessian : ndarray of shape (g, 3)
        (11, 12, 22) second derivatives of reference height and of normal displacement [1/m].

    Returns
    -------
    ndarray of shape (g, 2, 2)
        Change of curvature [1/m], positive = more convex towards the free side.
    """
    order = [0, 2, 1]
    before = tensor_2d(np.asarray(shape)[..., order])
    form = tensor_2d((np.asarray(shape) + hessian)[..., order]) * mapped.normal[..., 2, None, None]
    return np.asarray(before - mapped.inverse_stretch @ form @ mapped.inverse_stretch)


def bending_map(shape: FloatArray, thickness: float, form: str = "thin") -> FloatArray:
    """What takes a change of curvature (11, 22, 12) of the scanned face to the strain of bending there.

    Plane sections about the middle of the thickness t. Thin: `t / 2` times the change. Thick ring: the face lies
    t / 2 from the mid-surface and has an arc of another length, so each direction of curvature k (positive = convex to
    the free side) has `(t / 2) dk / (1 - k t / 2)`. On the inside of a ring with the mid-line R, r = R - t / 2, that is
    `z dk_mid R / r` with z = t / 2, the first order of Winkler's curved bar for an inextensible mid-line.

    Parameters
    ----------
    shape : ndarray of shape (g, 3)
        (11, 12, 22) second derivatives of reference height, positive = concave to the free side [1/m].
    thickness : float
        Of the wall or lining [m].
    form : {"thin", "thick"}

    Returns
    -------
    ndarray of shape (g, 3, 3)
        Linear map of the components (11, 22, 12) [m].
    """
    half, count = 0.5 * thickness, len(shape)
    if form == "thin":
        return np.broadcast_to(half * np.eye(3), (count, 3, 3))
    arcs = np.eye(2) + half * tensor_2d(np.asarray(shape)[..., [0, 2, 1]])
    # a face with a radius below half the thickness has no mid-surface
    arcs = np.where((np.linalg.eigvalsh(arcs)[:, 0] > 0)[:, None, None], arcs, np.nan)
    stretch = np.linalg.inv(arcs)
    # the symmetric part of (1 + s t / 2)^-1 dk, one column a component of dk
    columns = [half * components_2d(sym(stretch @ tensor_2d(unit))) for unit in np.eye(3)]
    return np.stack(columns, axis=-1)


def bending_strain(curvature: FloatArray, mapping: FloatArray) -> FloatArray:
    """Strain of the scanned face from bending, components (11, 22, 12) [1]; `mapping` from `bending_map`."""
    return np.asarray(np.einsum("gij,gj->gi", mapping, curvature))
