# SPDX-License-Identifier: MIT
"""The rigid motion that fits the displacements of gauges best, with its covariance and what it does not fix."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import at_least, cross_matrix, leave_one_out, rotation_matrix, rotation_vector, sandwich
from scanstrain.registration.result import Registration
from scanstrain.strain.congruence import Congruence, judge
from scanstrain.strain.gauges import DATUM_LIMIT

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

APART = 0.99
"""Gauges this many gauge lengths apart share no points; a little below 1, for places that are rounded."""
RESOLUTION = 1e-9
"""Standard error [m] that no displacement goes below: rounding of coordinates."""
DOUBT = 0.3
"""p-value of the residuals below which they, too, are asked how uncertain the motion is. Always taking the larger of
two estimates would make standard errors of small bodies a tenth too large (simulated); only asking where residuals are
significant would let a moderate excess pass."""
ROUNDS = 5
"""Gauss-Newton steps from rest: the error squares itself each time, so a turn of 0.1 rad is exact after four."""
MIN_RESPONSE = 5e-3
"""Part of a motion (at the place that it moves most) that gauges must see of it: the direction of a gauge's normal is
not certain to more than some milliradian, and a normal that is out by that much sees that part of any slide."""


@dataclass(frozen=True, slots=True)
class Sights:
    """Displacements of gauges as observations.

    Parameters
    ----------
    position : ndarray of shape (g, 3)
        Local coordinates [m].
    frame : ndarray of shape (g, 3, 3)
        Columns a1, a2, n.
    displacement : ndarray of shape (g, 3)
        (u1, u2, un), zero where not observed [m].
    seen : ndarray of shape (g, 3), bool
    covariance : ndarray of shape (g, 3, 3)
        Zero where not observed [m^2].
    """

    position: FloatArray
    frame: FloatArray
    displacement: FloatArray
    seen: BoolArray
    covariance: FloatArray

    def __len__(self) -> int:
        return len(self.position)

    def only(self, rows: NDArray[np.int64] | BoolArray) -> Sights:
        """Return some of them."""
        return Sights(
            self.position[rows], self.frame[rows], self.displacement[rows], self.seen[rows], self.covariance[rows]
        )

    def design(self, arm: FloatArray) -> FloatArray:
        """What a unit rotation and translation add in each gauge frame, shape (g, 3, 6); `arm` from the pivot [m]."""
        J = np.concatenate([-cross_matrix(arm), np.broadcast_to(np.eye(3), (len(arm), 3, 3))], axis=2)
        return np.asarray(np.swapaxes(self.frame, 1, 2) @ J)


@dataclass(frozen=True, slots=True)
class RigidFit:
    """A fitted rigid motion; "metric" vectors are (rotation x arm, translation) [m].

    Parameters
    ----------
    pivot : ndarray of shape (3,)
        Centroid of the gauges by weight, local coordinates [m].
    arm : float
        Distance of the farthest gauge from it [m].
    R : ndarray of shape (3, 3)
    t : ndarray of shape (3,)
        Translation of the pivot [m].
    seen : ndarray of shape (6, r)
        Orthonormal metric basis of the motions that the gauges see.
    formal, covariance : ndarray of shape (r, r)
        In that basis [m^2]: from the standard errors of the gauges, and from their residuals with that as a floor.
    rigid : Congruence
        Test of "moved as one rigid body": the residuals against their standard errors.
    """

    pivot: FloatArray
    arm: float
    R: FloatArray
    t: FloatArray
    seen: FloatArray
    formal: FloatArray
    covariance: FloatArray
    rigid: Congruence

    @property
    def scale(self) -> FloatArray:
        """Physical over metric unknowns, shape (6,)."""
        return np.r_[np.full(3, 1 / self.arm), np.ones(3)]

    @property
    def motion(self) -> FloatArray:
        """The fitted motion in metric unknowns, shape (6,) [m]."""
        return np.r_[rotation_vector(self.R), self.t] / self.scale

    def predicted(self, sights: Sights) -> FloatArray:
        """Displacement that the motion gives at gauges, in their frames, shape (g, 3) [m]."""
        arm = sights.position - self.pivot
        return np.asarray(np.einsum("gik,gi->gk", sights.frame, arm @ (self.R - np.eye(3)).T + self.t))

    def rows(self, sights: Sights) -> FloatArray:
        """What unit motions of the basis add at gauges, in their frames, shape (g, 3, r)."""
        return np.asarray(sights.design(sights.position - self.pivot) * self.scale @ self.seen)

    def reach(self, vectors: FloatArray, places: FloatArray) -> FloatArray:
        """How far unit metric motions (6, k) move the place that they move most, shape (k,)."""
        return farthest(vectors, (places - self.pivot) / self.arm)


def farthest(vectors: FloatArray, arms: FloatArray) -> FloatArray:
    """How far unit metric motions (6, k) move the farthest of places `arms` (m, 3) arms from the pivot, shape (k,)."""
    moved = np.cross(vectors[:3].T[:, None, :], arms[None]) + vectors[3:].T[:, None, :]
    return np.asarray(np.linalg.norm(moved, axis=2).max(axis=1))


def thinned(sights: Sights, gauge_length: float) -> Sights:
    """Keep gauges that share no points: none nearer to another than a gauge length, the ones that see most first.

    Overlapping gauges repeat one another's noise, to a degree that depends on the local fit. Of gauges that only touch
    each is an observation of its own, and together they still cover most of the surface.
    """
    return sights.only(apart(sights.position, gauge_length, first=np.argsort(-sights.seen.sum(axis=1), kind="stable")))


def apart(position: FloatArray, gauge_length: float, *, first: NDArray[np.int64] | None = None) -> NDArray[np.int64]:
    """Choose places (g, 3) of which none is nearer to another than a gauge length, in the order `first`."""
    from scipy.spatial import cKDTree

    if not len(position):
        return np.empty(0, np.int64)
    tree = cKDTree(position)
    free, chosen = np.ones(len(position), bool), list[int]()
    for gauge in range(len(position)) if first is None else first:
        if free[gauge]:
            chosen.append(int(gauge))
            free[tree.query_ball_point(position[gauge], APART * gauge_length)] = False
    return np.sort(np.array(chosen, np.int64))


def fit_rigid(sights: Sights, *, error_dof: float = np.inf) -> RigidFit | None:
    """Fit a rigid motion by weighted least squares.

    Minimises the sum of squares of the observed components of `u - ((R - I)(x - p) + t)`, each gauge weighted by the
    inverse of its covariance, over finite rotations. Motions that the gauges do not see, or see to worse than 10 mm
    at the farthest gauge, are left out. The covariance follows from the standard errors of the gauges; where the
    residuals exceed these, in every direction the larger of this and what leaving out one gauge after the other shows
    (`linalg.leave_one_out`): how much the motion depends on where a deforming body is looked at.

    Parameters
    ----------
    sights : Sights
        Of gauges that share no points, at least one.
    error_dof : float
        Degrees of freedom behind their standard errors.

    Returns
    -------
    RigidFit or None
        None where the gauges see no motion at all.
    """
    variance = np.where(sights.seen, np.einsum("gii->gi", sights.covariance) + RESOLUTION**2, np.inf)
    pivot = np.average(sights.position, axis=0, weights=(1 / variance).sum(axis=1))
    away = sights.position - pivot
    arm = max(float(np.linalg.norm(away, axis=1).max()), RESOLUTION)
    root = np.linalg.cholesky(
        sights.covariance + np.where(sights.seen, RESOLUTION**2, 1.0)[:, :, None] * np.eye(3)[None]
    )
    scale = np.r_[np.full(3, 1 / arm), np.ones(3)]
    basis, R, t = np.empty((6, 0)), np.eye(3), np.zeros(3)
    for number in range(ROUNDS):
        turned = away @ R.T
        plain = sights.design(turned) * scale * sights.seen[:, :, None]
        moved = np.einsum("gik,gi->gk", sights.frame, turned + t - away)
        off = np.linalg.solve(root, (np.where(sights.seen, sights.displacement - moved, 0.0))[..., None])[..., 0]
        rows = np.linalg.solve(root, plain)
        if number == 0:
            basis = _visible(rows, plain, away / arm, int(sights.seen.sum()))
            if not basis.shape[1]:
                return None
        rows = rows @ basis
        N = np.einsum("gik,gil->kl", rows, rows)
        step = basis @ np.linalg.solve(N, np.einsum("gik,gi->k", rows, off)) * scale
        R, t = rotation_matrix(step[:3]) @ R, t + step[3:]
    formal = np.linalg.inv(N)
    parts = leave_one_out(np.einsum("gik,gil->gkl", rows, rows), np.einsum("gik,gi->gk", rows, off))
    rigid = judge(float((off**2).sum()), int(sights.seen.sum()) - len(N), dof=error_dof)
    covariance = at_least(parts, formal) if rigid.p < DOUBT else formal
    return RigidFit(pivot, arm, R, t, basis, formal, covariance, rigid)


def _visible(rows: FloatArray, plain: FloatArray, arms: FloatArray, observed: int) -> FloatArray:
    """Metric basis (6, r) of the motions that are seen, from standardised and plain rows (g, 3, 6)."""
    values, vectors = np.linalg.eigh(np.einsum("gik,gil->kl", rows, rows))
    reach = farthest(vectors, arms)
    response = np.sqrt(((plain @ vectors) ** 2).sum(axis=(0, 1)) / observed)
    certain = reach <= DATUM_LIMIT * np.sqrt(np.maximum(values, 0.0))
    return np.ascontiguousarray(vectors[:, certain & (response > MIN_RESPONSE * reach)])


def datum_covariance(fit: RigidFit, registration: Registration | None) -> FloatArray:
    """Covariance (6, 6) that the error of the registration adds to the motion, metric unknowns at the body's pivot.

    An error of the registration is a rigid motion, the same for all gauges, so it is added once. A rotation w about
    the registration's pivot q and a translation t there are w and `t + w x (p - q)` at p.
    """
    if registration is None:
        return np.zeros((6, 6))
    B = np.eye(6)
    B[3:, :3] = -cross_matrix(fit.pivot - registration.pivot)
    return sandwich(B / fit.scale[:, None], registration.covariance)


def known(fit: RigidFit, datum: FloatArray, places: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Which motions are known to 10 mm at the place that they move most, the registration's error included.

    Parameters
    ----------
    fit : RigidFit
    datum : ndarray of shape (6, 6)
        As `datum_covariance` gives it.
    places : ndarray of shape (m, 3)
        Gauges [m].

    Returns
    -------
    directions : ndarray of shape (6, k)
        Orthonormal metric directions, along which errors are independent.
    variance : ndarray of shape (k,)
        [m^2]
    """
    total = fit.covariance + fit.seen.T @ datum @ fit.seen
    variance, turn = np.linalg.eigh(total)
    directions = fit.seen @ turn
    kept = np.sqrt(np.maximum(variance, 0.0)) * fit.reach(directions, places) <= DATUM_LIMIT
    return np.ascontiguousarray(directions[:, kept]), variance[kept]
