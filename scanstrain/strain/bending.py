# SPDX-License-Identifier: MIT
"""Change of curvature, and the face strain that goes with it where a thickness is known.

Sign: curvature is positive where the surface is convex towards its free side, so a change is positive where it
became more convex, and the scanned face is then in tension. A lining seen from inside is concave (curvature -1/R);
where the ring gets sharper the change is negative and the intrados in compression.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import tensor_2d
from scanstrain.strain.surface import SurfaceMap

FloatArray = NDArray[np.float64]


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


def bending_strain(curvature: FloatArray, thickness: float) -> FloatArray:
    """Strain of the scanned face from bending, `(thickness / 2) dk`; plane sections assumed [1]."""
    return 0.5 * thickness * curvature
