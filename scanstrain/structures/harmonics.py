# SPDX-License-Identifier: MIT
"""The radial change of a ring as a short Fourier series: closure, shift, ovalisation and two shorter waves."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.structures.outline import kept

FloatArray = NDArray[np.float64]

ORDERS = 4
"""Waves around the ring at most: shorter ones belong to joints and local damage, which a map shows better."""

INFLATION = 6.0
"""A hidden part of the ring makes waves exchangeable. Orders are left out from the top until no coefficient has more
than this many times the standard error that a whole ring with as many points would give."""

SPARE = 10
"""Pieces of arc beyond the unknowns, for a variance that means something."""


@dataclass(frozen=True, slots=True)
class Harmonics:
    """Radial change `a0 + sum over k of (a_k cos k t + b_k sin k t)`, t the clock angle, outwards positive.

    Parameters
    ----------
    order : int
        Highest order that the visible part of the ring supports. Higher ones were taken as zero.
    coefficients : ndarray of shape (2 * order + 1,)
        a0, a1, b1, a2, b2, ... [m].
    covariance : ndarray of shape (2 * order + 1, 2 * order + 1)
        From the residuals of the means of pieces of arc [m^2].
    leverage : float
        Largest share that one piece of arc has in its own fitted value [1].
    """

    order: int
    coefficients: FloatArray
    covariance: FloatArray
    leverage: float


def terms(angle: FloatArray, order: int) -> FloatArray:
    """Return 1, cos t, sin t, cos 2t, ... at clock angles (n,) as columns (n, 2 * order + 1)."""
    waves = [wave(k * angle) for k in range(1, order + 1) for wave in (np.cos, np.sin)]
    return np.stack([np.ones_like(angle), *waves], axis=1)


def fit_harmonics(angle: FloatArray, change: FloatArray, weight: FloatArray) -> Harmonics | None:
    """Fit the Fourier series to radial changes of pieces of arc, gross errors left out.

    Parameters
    ----------
    angle : ndarray of shape (n,)
        Clock angles [rad].
    change : ndarray of shape (n,)
        Radial change, outwards positive [m].
    weight : ndarray of shape (n,)
        Inverse variances up to one factor.

    Returns
    -------
    Harmonics or None
        None where not even a shift of the ring is supported.
    """
    for order in range(ORDERS, 0, -1):
        A = terms(angle, order)
        if len(A) < A.shape[1] + SPARE:
            continue
        N = (A.T * weight) @ A
        whole = weight.sum() * np.r_[1.0, np.full(2 * order, 0.5)]
        if np.linalg.cond(N) < 1e10 and (np.diag(np.linalg.inv(N)) * whole).max() <= INFLATION**2:
            return _fit(A, change, weight, order)
    return None


def _fit(A: FloatArray, change: FloatArray, weight: FloatArray, order: int) -> Harmonics | None:
    used = np.ones(len(A))
    for _ in range(5):
        w = weight * used
        inverse = np.linalg.inv((A.T * w) @ A)
        coefficients = inverse @ (A.T @ (w * change))
        misfit = change - A @ coefficients
        fresh = kept(misfit * np.sqrt(weight))
        if (fresh == used).all():
            break
        used = fresh
    spare = int((w > 0).sum()) - A.shape[1]
    if spare < SPARE:
        return None
    share = np.einsum("ni,ij,nj,n->n", A, inverse, A, w)
    covariance = np.asarray(inverse * float((w * misfit**2).sum() / spare))
    return Harmonics(order, coefficients, covariance, float(share.max()))


def moved_along(angle: FloatArray, order: int) -> FloatArray:
    """Return what each coefficient moves the lining along its arc, if its mid-line keeps its length: (n, 2 order + 1).

    Without extension the movement along the arc v, clockwise positive, follows from the radial movement r by
    `dv/dt = -r` (Rayleigh 1894): `a_k cos k t` goes with `-(a_k / k) sin k t`, `b_k sin k t` with `(b_k / k) cos k t`.
    For k = 1 that is a shift of the ring. A uniform closure (k = 0) is extension itself and moves nothing along.
    """
    k = np.arange(1, order + 1)
    moved = np.zeros((len(angle), 2 * order + 1))
    moved[:, 1::2] = -np.sin(angle[:, None] * k) / k
    moved[:, 2::2] = np.cos(angle[:, None] * k) / k
    return moved
