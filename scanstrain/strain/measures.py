# SPDX-License-Identifier: MIT
"""Strain measures: functions of a deformation gradient, the same for the plane (d = 2) and for space (d = 3).

With F = I + H, H[i, j] = du_i/dX_j, and F = R U (Malvern 1969; Gurtin, Fried & Anand 2010). The surface code hands
over the stretch U of the surface instead of F, so that the local rotation is gone before any measure is formed:
`small(U)` is then `U - I`, the same numbers as `biot`, and `almansi(U)` is the Almansi tensor turned back by R into
reference axes, with principal values `(1 - 1 / l^2) / 2`.

Shear components are tensor shear: half of the engineering shear.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import apply_to_eigenvalues, polar, sym, transpose
from scanstrain.registry import Registry

FloatArray = NDArray[np.float64]
Measure = Callable[[FloatArray], FloatArray]


def small(F: FloatArray) -> FloatArray:
    """Small strain `sym(F) - I`; takes a rotation t for a contraction of t^2 / 2 where one is left in F.

    Parameters
    ----------
    F : ndarray of shape (..., d, d)
        Deformation gradient or stretch [1].

    Returns
    -------
    ndarray of shape (..., d, d)
        Strain [1].
    """
    return sym(F) - np.eye(F.shape[-1])


def green_lagrange(F: FloatArray) -> FloatArray:
    """Green-Lagrange strain `(F'F - I) / 2`, reference axes; shapes as in `small`."""
    return np.asarray(0.5 * (transpose(F) @ F - np.eye(F.shape[-1])))


def almansi(F: FloatArray) -> FloatArray:
    """Euler-Almansi strain `(I - F^-T F^-1) / 2`, current axes (reference axes if F is a stretch)."""
    inverse = np.asarray(np.linalg.inv(F), dtype=np.float64)
    return np.asarray(0.5 * (np.eye(F.shape[-1]) - transpose(inverse) @ inverse))


def hencky(F: FloatArray) -> FloatArray:
    """Logarithmic strain `ln U = ln(F'F) / 2`, reference axes; changes sign when the epochs are exchanged."""
    return apply_to_eigenvalues(lambda squares: 0.5 * np.log(squares), np.asarray(transpose(F) @ F))


def biot(F: FloatArray) -> FloatArray:
    """Biot strain `U - I`, reference axes: change of length over length along the principal directions."""
    return polar(F)[1] - np.eye(F.shape[-1])


MEASURES: Registry[Measure] = Registry("strain measure")
MEASURES.add("small", small)
MEASURES.add("green_lagrange", green_lagrange)
MEASURES.add("almansi", almansi)
MEASURES.add("hencky", hencky)
MEASURES.add("biot", biot)
