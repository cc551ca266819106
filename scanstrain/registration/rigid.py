# SPDX-License-Identifier: MIT
"""Rigid motions: composition from a rotation vector, and the closed-form fit to corresponding points."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import OptionError, RegistrationError, explain

FloatArray = NDArray[np.float64]

COLLINEAR = 1e-9
"""Second over first singular value of centred points below which they lie on one line to rounding."""


def rotation(vector: FloatArray) -> FloatArray:
    """Return the rotation matrix of a rotation vector (Rodrigues' formula, exact at any angle).

    Parameters
    ----------
    vector : ndarray of shape (3,)
        Axis times angle [rad].

    Returns
    -------
    ndarray of shape (3, 3)

    Examples
    --------
    >>> rotation(np.array([0.0, 0.0, np.pi / 2])).round(12) + 0.0
    array([[ 0., -1.,  0.],
           [ 1.,  0.,  0.],
           [ 0.,  0.,  1.]])
    """
    angle = float(np.linalg.norm(vector))
    x, y, z = vector
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    # np.sinc keeps both coefficients exact as the angle goes to zero.
    first = float(np.sinc(angle / np.pi))
    second = 0.5 * float(np.sinc(angle / (2 * np.pi))) ** 2
    return np.asarray(np.eye(3) + first * K + second * (K @ K))


def rigid(R: FloatArray, t: FloatArray) -> FloatArray:
    """Put a rotation (3, 3) and a translation (3,) [m] into a 4x4 matrix."""
    T = np.eye(4)
    T[:3, :3] = R
    T[:3, 3] = t
    return T


def about(pivot: FloatArray, vector: FloatArray, shift: FloatArray) -> FloatArray:
    """Return the motion of a small solved step about a pivot, split evenly over both clouds.

    Symmetric linearisation (Rusinkiewicz 2019, from memory): both clouds turn by half the angle towards one
    another, so x -> H (H x + shift) with H the half rotation. The error of one step is then of third order.

    Parameters
    ----------
    pivot : ndarray of shape (3,)
        Centre of the rotation [m].
    vector, shift : ndarray of shape (3,)
        Rotation vector [rad] and translation [m].

    Returns
    -------
    ndarray of shape (4, 4)
    """
    H = rotation(vector / 2)
    R = H @ H
    return rigid(R, H @ shift + pivot - R @ pivot)


def inverse(T: FloatArray) -> FloatArray:
    """Return the inverse of a rigid 4x4 matrix, exactly rigid itself."""
    R = T[:3, :3].T
    return rigid(R, -R @ T[:3, 3])


def is_rigid(T: FloatArray) -> bool:
    """Say whether a 4x4 matrix is a rotation and a translation, to 1e-6 (what nine printed digits keep)."""
    if T.shape != (4, 4) or not np.isfinite(T).all():
        return False
    R = T[:3, :3]
    straight = np.abs(R @ R.T - np.eye(3)).max() < 1e-6 and np.abs(T[3] - [0, 0, 0, 1]).max() < 1e-12
    return bool(straight and np.linalg.det(R) > 0)


def rigid_fit(source: ArrayLike, target: ArrayLike, weights: ArrayLike | None = None) -> tuple[FloatArray, FloatArray]:
    """Fit the rotation and translation that best take corresponding points onto one another; scale is 1.

    Minimises sum_i w_i |R s_i + t - g_i|^2 in closed form by singular values (Kabsch 1976; Umeyama 1991, equation
    43 with c = 1). The sign matrix keeps det R = +1: without it mirrored or noisy points give a reflection. There is
    no scale on purpose, since a scale would absorb a uniform strain.

    Parameters
    ----------
    source, target : array_like of shape (n, d)
        Corresponding points [m], d = 2 or 3.
    weights : array_like of shape (n,), optional
        Non-negative weights, usually 1/variance. Default: all equal.

    Returns
    -------
    T : ndarray of shape (d + 1, d + 1)
        Takes source to target.
    residuals : ndarray of shape (n, d)
        Target minus moved source [m].

    Raises
    ------
    OptionError
        Shapes, values or weights that are wrong.
    RegistrationError
        The points do not fix the rotation: too few, or (in space) all on one line.
    """
    s, g = np.asarray(source, np.float64), np.asarray(target, np.float64)
    w = np.ones(len(s)) if weights is None else np.asarray(weights, np.float64)
    _check_pairs(s, g, w)
    w = w / w.sum()
    s0, g0 = w @ s, w @ g
    d = s.shape[1]
    _check_spread((s - s0)[w > 0], d)
    _check_spread((g - g0)[w > 0], d)
    U, _, Vt = np.linalg.svd((g - g0).T @ (w[:, None] * (s - s0)))
    sign = np.ones(d)
    sign[-1] = np.sign(np.linalg.det(U) * np.linalg.det(Vt))
    R = (U * sign) @ Vt
    T = np.eye(d + 1)
    T[:d, :d] = R
    T[:d, d] = g0 - R @ s0
    return T, np.asarray(g - (s @ R.T + T[:d, d]))


def _check_pairs(s: FloatArray, g: FloatArray, w: FloatArray) -> None:
    where = "rigid_fit"
    if s.ndim != 2 or s.shape != g.shape or s.shape[1] not in (2, 3):
        raise OptionError(
            explain(
                where,
                "two arrays of one shape (n, 2) or (n, 3)",
                f"{s.shape} and {g.shape}",
                "pair the points",
            )
        )
    if w.shape != (len(s),) or not np.isfinite(w).all() or (w < 0).any() or not w.sum() > 0:
        raise OptionError(
            explain(where, "one non-negative weight a point, not all zero", f"shape {w.shape}", "mend them")
        )
    if not (np.isfinite(s).all() and np.isfinite(g).all()):
        raise OptionError(explain(where, "finite coordinates", "NaN or infinity", "remove those pairs"))


def _check_spread(centred: FloatArray, d: int) -> None:
    values = np.linalg.svd(centred, compute_uv=False)
    rank = 0 if not len(values) or values[0] == 0 else int((values > COLLINEAR * values[0]).sum())
    if rank < d - 1:
        got = f"{len(centred)} points that span {rank} direction(s)"
        raise RegistrationError(
            explain("rigid_fit", f"points that span at least {d - 1} directions", got, "add one off the line")
        )
