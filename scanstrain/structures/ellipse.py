# SPDX-License-Identifier: MIT
"""The ellipse that fits an outline best by orthogonal distance, with its covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.structures.outline import kept

FloatArray = NDArray[np.float64]

TURNS = 20
"""Gauss-Newton steps at most; five are usual."""

FOOT_TURNS = 6
"""Newton steps to the foot points of an ellipse that is nearly a circle; three are usual."""


@dataclass(frozen=True, slots=True)
class Ellipse:
    """An ellipse as the image of the unit circle: `x = centre + [[m + p, q], [q, m - p]] (cos t, sin t)`.

    These five numbers stay regular at the circle, where p = q = 0 and axes have no direction. The semi-axes are
    `m + h` and `m - h` with `h = hypot(p, q)`; the longer one lies at the angle `atan2(q, p) / 2` from x.

    Parameters
    ----------
    parameters : ndarray of shape (5,)
        Centre x and y, m, p, q [m].
    normal_matrix : ndarray of shape (5, 5)
        Of the parameters, in inverse variances of one point.
    variance : float
        Of one point, from the residuals [m^2].
    gradient : ndarray of shape (n, 5)
        Derivative of each place's distance from the ellipse with respect to the parameters, sign turned.
    weight : ndarray of shape (n,)
        Weight of each place, 0 for those left out.
    """

    parameters: FloatArray
    normal_matrix: FloatArray
    variance: float
    gradient: FloatArray
    weight: FloatArray

    @property
    def covariance(self) -> FloatArray:
        """Covariance of the parameters (5, 5) [m^2]."""
        return np.asarray(self.variance * np.linalg.inv(self.normal_matrix))

    @property
    def mean_diameter(self) -> float:
        """Mean of the longest and the shortest diameter [m]."""
        return float(2.0 * self.parameters[2])

    @property
    def ovality(self) -> float:
        """Longest minus shortest diameter over their mean [1]."""
        return float(2.0 * np.hypot(self.parameters[3], self.parameters[4]) / self.parameters[2])

    @property
    def leverage(self) -> float:
        """Largest share that one place has in its own fitted value [1]; near 1 the fit rests on single places."""
        share = np.einsum("ni,ij,nj->n", self.gradient, np.linalg.inv(self.normal_matrix), self.gradient)
        return float((share * self.weight).max())


def ovality_gradient(parameters: FloatArray) -> FloatArray:
    """Return the derivative (5,) of the ovality [1] with respect to the parameters of an `Ellipse` [1/m]."""
    _, _, m, p, q = parameters
    h = max(np.hypot(p, q), np.finfo(float).tiny)
    return np.array([0.0, 0.0, -2.0 * h / m**2, 2.0 * p / (h * m), 2.0 * q / (h * m)])


def direct_ellipse(x: FloatArray, y: FloatArray, weight: FloatArray) -> FloatArray | None:
    """Fit an ellipse by algebraic distance under the constraint that it is one.

    Fitzgibbon, Pilu & Fisher (1999) in the numerically stable form of Halir & Flusser (1998): formulas from memory.
    It shrinks on partial arcs and is a start only.

    Parameters
    ----------
    x, y, weight : ndarray of shape (n,)
        Places [m] and their weights.

    Returns
    -------
    ndarray of shape (5,) or None
        Parameters as in `Ellipse`; None where the places fix no ellipse.
    """
    middle = np.array([np.average(x, weights=weight), np.average(y, weights=weight)])
    size = float(np.sqrt(np.average((x - middle[0]) ** 2 + (y - middle[1]) ** 2, weights=weight)))
    u, v, w = (x - middle[0]) / size, (y - middle[1]) / size, weight / weight.sum()
    D1, D2 = np.stack([u * u, u * v, v * v], axis=1), np.stack([u, v, np.ones_like(u)], axis=1)
    S1, S2, S3 = (D1.T * w) @ D1, (D1.T * w) @ D2, (D2.T * w) @ D2
    if np.linalg.cond(S3) > 1e12:
        return None
    T = -np.linalg.solve(S3, S2.T)
    M = S1 + S2 @ T
    values, vectors = np.linalg.eig(np.stack([M[2] / 2, -M[1], M[0] / 2]))
    vectors = np.real(vectors)
    is_ellipse = 4 * vectors[0] * vectors[2] - vectors[1] ** 2 > 0
    if not is_ellipse.any():
        return None
    a = vectors[:, np.flatnonzero(is_ellipse)[np.argmin(np.abs(values[is_ellipse]))]]
    (A, B, C), (D, E, F) = a, T @ a
    Q = np.array([[A, B / 2], [B / 2, C]])
    centre = -0.5 * np.linalg.solve(Q, [D, E])
    level = centre @ Q @ centre - F
    squares, axes = np.linalg.eigh(Q / level)
    if not (squares > 0).all():
        return None
    S = (axes / np.sqrt(squares)) @ axes.T * size
    return np.array([*(middle + size * centre), (S[0, 0] + S[1, 1]) / 2, (S[0, 0] - S[1, 1]) / 2, S[0, 1]])


def fit_ellipse(x: FloatArray, y: FloatArray, weight: FloatArray) -> Ellipse | None:
    """Fit an ellipse by weighted orthogonal distances; places far off it are left out.

    Minimises `sum w d^2`, d being the distance from the ellipse along its normal, by Gauss-Newton from the direct fit.
    Places beyond 4.685 robust standard deviations get no weight. The covariance holds for an outline that is an
    ellipse but for independent errors of the places.

    Parameters
    ----------
    x, y, weight : ndarray of shape (n,)
        Places [m]; points behind each.

    Returns
    -------
    Ellipse or None
        None where the places fix no ellipse.
    """
    if len(x) < 10:
        return None
    parameters = direct_ellipse(x, y, weight)
    if parameters is None:
        return None
    for _ in range(TURNS):
        distance, J = _distances(x, y, parameters)
        w = weight * kept(distance * np.sqrt(weight))
        N = (J.T * w) @ J
        if np.linalg.cond(N) > 1e12:
            return None
        step = np.linalg.solve(N, J.T @ (w * distance))
        parameters = parameters + step
        if np.abs(step).max() < 1e-9 * parameters[2]:
            break
    distance, J = _distances(x, y, parameters)
    w = weight * kept(distance * np.sqrt(weight))
    spare = int((w > 0).sum()) - 5
    if spare < 5 or parameters[2] <= np.hypot(parameters[3], parameters[4]):
        return None
    return Ellipse(parameters, (J.T * w) @ J, float((w * distance**2).sum() / spare), J, w)


def _distances(x: FloatArray, y: FloatArray, parameters: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Signed distances from an ellipse along its normal, outside positive, and what the parameters do to the foot."""
    cx, cy, m, p, q = parameters
    u, v = x - cx, y - cy
    t = np.arctan2(v, u)
    for _ in range(FOOT_TURNS):
        c, s = np.cos(t), np.sin(t)
        ex, ey = (m + p) * c + q * s, q * c + (m - p) * s
        tx, ty = -(m + p) * s + q * c, -q * s + (m - p) * c
        # (place - foot) . tangent = 0, by Newton; the second derivative of the foot is -(ex, ey)
        wrong = (u - ex) * tx + (v - ey) * ty
        t = t + wrong / (tx * tx + ty * ty + (u - ex) * ex + (v - ey) * ey)
    c, s = np.cos(t), np.sin(t)
    ex, ey = (m + p) * c + q * s, q * c + (m - p) * s
    tx, ty = -(m + p) * s + q * c, -q * s + (m - p) * c
    length = np.hypot(tx, ty)
    nx, ny = ty / length, -tx / length
    distance = (u - ex) * nx + (v - ey) * ny
    J = np.stack([nx, ny, nx * c + ny * s, nx * c - ny * s, nx * s + ny * c], axis=1)
    return distance, J
