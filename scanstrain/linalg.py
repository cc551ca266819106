# SPDX-License-Identifier: MIT
"""Batched algebra on small matrices: stacks of 2x2 and 3x3, gauge index first, no loop per gauge."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def transpose(A: FloatArray) -> FloatArray:
    """Transpose the last two axes: `A[..., i, j] -> A[..., j, i]`."""
    return np.swapaxes(A, -1, -2)


def sym(A: FloatArray) -> FloatArray:
    """Symmetric part `(A + A') / 2` of matrices of shape (..., d, d)."""
    return np.asarray(0.5 * (A + transpose(A)))


def skew(A: FloatArray) -> FloatArray:
    """Antisymmetric part `(A - A') / 2` of matrices of shape (..., d, d)."""
    return np.asarray(0.5 * (A - transpose(A)))


def axial(W: FloatArray) -> FloatArray:
    """Vector w of an antisymmetric 3x3 matrix, `W x = w x x`: (W32, W13, W21)."""
    return np.stack([W[..., 2, 1], W[..., 0, 2], W[..., 1, 0]], axis=-1)


def cross_matrix(w: FloatArray) -> FloatArray:
    """Antisymmetric 3x3 matrix of a vector of shape (..., 3); the inverse of `axial`."""
    W = np.zeros((*np.shape(w), 3))
    W[..., 2, 1], W[..., 0, 2], W[..., 1, 0] = w[..., 0], w[..., 1], w[..., 2]
    return W - transpose(W)


def sandwich(Q: FloatArray, S: FloatArray) -> FloatArray:
    """`Q S Q'`: a tensor in new axes, or a covariance carried through a Jacobian.

    Parameters
    ----------
    Q : ndarray of shape (..., m, d)
    S : ndarray of shape (..., d, d)

    Returns
    -------
    ndarray of shape (..., m, m)
    """
    return np.asarray(Q @ S @ transpose(Q))


def tensor_2d(components: FloatArray) -> FloatArray:
    """Symmetric 2x2 matrices from `(t11, t22, t12)`, shape (..., 3) -> (..., 2, 2)."""
    t11, t22, t12 = np.moveaxis(np.asarray(components), -1, 0)
    return np.stack([np.stack([t11, t12], -1), np.stack([t12, t22], -1)], -2)


def components_2d(T: FloatArray) -> FloatArray:
    """`(t11, t22, t12)` of symmetric 2x2 matrices; the inverse of `tensor_2d`."""
    return np.stack([T[..., 0, 0], T[..., 1, 1], T[..., 0, 1]], axis=-1)


def eigh(S: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Eigenvalues, rising, and orthonormal eigenvectors (columns) of symmetric 2x2 or 3x3 matrices.

    The 2x2 case is closed (Mohr's circle: centre, radius, half the angle); the 3x3 case is LAPACK's.

    Parameters
    ----------
    S : ndarray of shape (..., d, d), d = 2 or 3

    Returns
    -------
    values : ndarray of shape (..., d)
    vectors : ndarray of shape (..., d, d)
    """
    if S.shape[-1] != 2:
        values, vectors = np.linalg.eigh(S)
        return values, vectors
    centre = 0.5 * (S[..., 0, 0] + S[..., 1, 1])
    half = 0.5 * (S[..., 0, 0] - S[..., 1, 1])
    radius = np.hypot(half, S[..., 0, 1])
    angle = 0.5 * np.arctan2(S[..., 0, 1], half)
    c, s = np.cos(angle), np.sin(angle)
    vectors = np.stack([np.stack([-s, c], -1), np.stack([c, s], -1)], -2)
    return np.stack([centre - radius, centre + radius], axis=-1), vectors


def apply_to_eigenvalues(function: Callable[[FloatArray], FloatArray], S: FloatArray) -> FloatArray:
    """Isotropic function of symmetric matrices, `V f(L) V'`; shapes as in `eigh`."""
    values, vectors = eigh(S)
    return np.asarray((vectors * function(values)[..., None, :]) @ transpose(vectors))


def polar(F: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Right polar decomposition `F = R U` with `det R = +1`.

    Where `det F < 0` (a mirrored input) R is still the nearest rotation and U has a negative eigenvalue.

    Parameters
    ----------
    F : ndarray of shape (..., d, d), d = 2 or 3

    Returns
    -------
    R : ndarray of shape (..., d, d)
        Rotation nearest to F in the least-squares sense.
    U : ndarray of shape (..., d, d)
        Symmetric stretch.
    """
    if F.shape[-1] == 2:
        # the rotation that maximises tr(R'F); closed in the plane
        along, across = F[..., 0, 0] + F[..., 1, 1], F[..., 1, 0] - F[..., 0, 1]
        angle = np.arctan2(across, along)
        c, s = np.cos(angle), np.sin(angle)
        R = np.stack([np.stack([c, -s], -1), np.stack([s, c], -1)], -2)
    else:
        left, _, right = np.linalg.svd(F)
        flip = np.ones(F.shape[:-1])
        flip[..., -1] = np.sign(np.linalg.det(left @ right))
        R = (left * flip[..., None, :]) @ right
    return R, sym(transpose(R) @ F)


def rotation_matrix(w: FloatArray) -> FloatArray:
    """Rotation by the vector w (Rodrigues): angle |w| [rad] about w / |w|; shape (..., 3) -> (..., 3, 3)."""
    w = np.asarray(w, dtype=np.float64)
    angle = np.linalg.norm(w, axis=-1)[..., None, None]
    K = cross_matrix(w)
    # numpy's sinc is sin(pi x)/(pi x), exact at 0, so neither coefficient divides by a small angle
    first, second = np.sinc(angle / np.pi), 0.5 * np.sinc(0.5 * angle / np.pi) ** 2
    return np.asarray(np.eye(3) + first * K + second * (K @ K))


def rotation_vector(R: FloatArray) -> FloatArray:
    """Rotation vector [rad] of rotation matrices, angle in [0, pi]; shape (..., 3, 3) -> (..., 3).

    Goes through the unit quaternion q: the matrix 4 q q' is linear in R, and its row with the largest diagonal
    entry gives q without cancellation at any angle (Shepperd 1978; formula from memory).
    """
    R = np.asarray(R, dtype=np.float64)
    diagonal = np.diagonal(R, axis1=-2, axis2=-1)
    trace = diagonal.sum(axis=-1)
    K = np.empty((*R.shape[:-2], 4, 4))
    K[..., :3, :3] = R + transpose(R)
    for i in range(3):
        K[..., i, i] = 1.0 + 2.0 * diagonal[..., i] - trace
    K[..., :3, 3] = K[..., 3, :3] = 2.0 * axial(skew(R))
    K[..., 3, 3] = 1.0 + trace
    largest = np.argmax(np.diagonal(K, axis1=-2, axis2=-1), axis=-1)
    q = np.take_along_axis(K, largest[..., None, None], axis=-2)[..., 0, :]
    q = q / np.linalg.norm(q, axis=-1, keepdims=True)
    q = np.where(q[..., 3:] < 0, -q, q)
    sine = np.linalg.norm(q[..., :3], axis=-1)
    angle = 2.0 * np.arctan2(sine, q[..., 3])
    tiny = sine < 1e-150
    return np.asarray(q[..., :3] * np.where(tiny, 2.0, angle / np.where(tiny, 1.0, sine))[..., None])


def at_least(covariance: FloatArray, floor: FloatArray) -> FloatArray:
    """Raise a covariance to a floor in every direction, and leave it where it is larger.

    Examples
    --------
    >>> at_least(np.diag([4.0, 1.0]), np.diag([2.0, 3.0])).round(12)
    array([[4., 0.],
           [0., 3.]])
    """
    values, vectors = np.linalg.eigh(floor)
    root = vectors * np.sqrt(np.maximum(values, 1e-14 * max(values[-1], 1e-30)))
    white = np.linalg.inv(root)
    size, turn = np.linalg.eigh(white @ covariance @ white.T)
    back = root @ turn
    return np.asarray((back * np.maximum(size, 1.0)) @ back.T)


def pooled(parts: FloatArray, independent: FloatArray, count: int) -> FloatArray:
    """Combine a covariance from a few parts, which counts what they share, with one from many independent values.

    The first is right on the average but scatters: with 30 parts and 6 unknowns its eigenvalues against the second
    reach from 0.3 to 2.1 where all of them should be 1 (Marchenko and Pastur 1967). Taking the larger one in every
    direction would raise errors by a quarter without a cause. So the second is raised by the mean ratio, at least 1,
    and in single directions only by what passes beyond that scatter. Leaving out parts overstates a covariance by
    about 1/(1 - k/count), which is taken back first.

    Parameters
    ----------
    parts, independent : ndarray of shape (k, k)
    count : int
        Parts behind the first.

    Returns
    -------
    ndarray of shape (k, k)

    Examples
    --------
    >>> pooled(np.diag([1.2, 0.8]), np.eye(2), 1000).round(12)
    array([[1.09726326, 0.        ],
           [0.        , 1.        ]])
    """
    values, vectors = np.linalg.eigh(independent)
    root = vectors * np.sqrt(np.maximum(values, 1e-14 * max(values[-1], 1e-30)))
    white = np.linalg.inv(root)
    size, turn = np.linalg.eigh(white @ parts @ white.T)
    size *= max(1.0 - len(size) / count, 0.5)
    scatter = (1.0 + np.sqrt(len(size) / count)) ** 2
    ratio = np.maximum(max(float(size.mean()), 1.0), size / scatter)
    back = root @ turn
    return np.asarray((back * ratio) @ back.T)


def leave_one_out(information: FloatArray, score: FloatArray) -> FloatArray:
    """Covariance of a least-squares estimate from what each part of the data contributes to it.

    Leaving part P out changes the estimate by `(N - N_P)^-1 g_P` exactly; the sum of squares of these changes, times
    (G - 1)/G, is the covariance, whatever the correlation inside a part (jackknife, the CR3 form of a cluster-robust
    sandwich).

    Parameters
    ----------
    information : ndarray of shape (G, k, k)
        Normal matrix N_P of each part.
    score : ndarray of shape (G, k)
        g_P: weighted sum of rows times residuals at the estimate.

    Returns
    -------
    ndarray of shape (k, k)
    """
    N = information.sum(axis=0)
    left = N - information
    # A part without which the rest fixes nothing cannot be left out: its own share counts as it stands.
    alone = np.linalg.eigvalsh(left)[:, 0] < 1e-3 * np.linalg.eigvalsh(N)[0]
    left[alone] = N
    change = np.linalg.solve(left, score[..., None])[..., 0]
    return np.asarray(change.T @ change * (len(score) - 1) / len(score))
