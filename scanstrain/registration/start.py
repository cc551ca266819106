# SPDX-License-Identifier: MIT
"""Starts of the registration that come from outside: a matrix or targets, with what is known of their error."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.linalg import polar
from scanstrain.registration.match import Metric
from scanstrain.registration.rigid import is_rigid
from scanstrain.registration.targets import TargetFit

FloatArray = NDArray[np.float64]

START_SIGMAS = 3.0
"""Without a covariance the capture range is taken as the three-sigma limit of the start along held directions."""
SOURCES = ("file", "targets", "given")


@dataclass(frozen=True, slots=True)
class GivenStart:
    """Where the fine fit begins, from outside.

    Parameters
    ----------
    T_ref_cur : ndarray of shape (4, 4)
        Takes local current coordinates to local reference coordinates [m].
    source : {"file", "targets", "given"}
    covariance : ndarray of shape (6, 6), optional
        Of (rotation vector [rad], translation at the pivot [m]) in the reference frame.
    pivot : ndarray of shape (3,), optional
        Local point that the covariance refers to [m]; needed with it.
    targets : TargetFit, optional
        The fit that the start comes from.
    """

    T_ref_cur: FloatArray
    source: str = "given"
    covariance: FloatArray | None = None
    pivot: FloatArray | None = None
    targets: TargetFit | None = None


def start_from_matrix(
    T_ref_cur: FloatArray,
    origin: FloatArray,
    *,
    source: str = "file",
    covariance: FloatArray | None = None,
    pivot: FloatArray | None = None,
) -> GivenStart:
    """Make a start from a matrix in file coordinates.

    Parameters
    ----------
    T_ref_cur : ndarray of shape (4, 4)
        Takes current file coordinates to reference file coordinates [m].
    origin : ndarray of shape (3,)
        Shared origin of the local frame in file coordinates [m].
    source : {"file", "targets", "given"}
    covariance : ndarray of shape (6, 6), optional
        Of (rotation vector [rad], translation at the pivot [m]).
    pivot : ndarray of shape (3,), optional
        What the covariance refers to, in file coordinates [m].

    Returns
    -------
    GivenStart

    Raises
    ------
    OptionError
        The matrix is no rigid motion.
    """
    T = np.array(T_ref_cur, np.float64)
    check_start(T)
    T[:3, 3] += T[:3, :3] @ origin - origin
    # Printed digits leave a rotation that is none by rounding; it is made one only where coordinates are small.
    T[:3, :3] = polar(T[:3, :3])[0]
    return GivenStart(T, source, covariance, None if pivot is None else np.asarray(pivot, np.float64) - origin)


def start_from_targets(fit: TargetFit, origin: FloatArray) -> GivenStart:
    """Make a start from targets that were fitted in file coordinates.

    Parameters
    ----------
    fit : TargetFit
        In file coordinates.
    origin : ndarray of shape (3,)
        Shared origin of the local frame in file coordinates [m].

    Returns
    -------
    GivenStart
    """
    start = start_from_matrix(fit.T_ref_cur, origin, source="targets", covariance=fit.covariance, pivot=fit.pivot)
    return GivenStart(start.T_ref_cur, "targets", start.covariance, start.pivot, fit)


def check_start(start: FloatArray | GivenStart) -> None:
    """Refuse a start that is no rigid motion, or whose covariance is none.

    Parameters
    ----------
    start : ndarray of shape (4, 4) or GivenStart

    Raises
    ------
    OptionError
    """
    given = start if isinstance(start, GivenStart) else GivenStart(start)
    if not is_rigid(given.T_ref_cur):
        raise OptionError(
            explain(
                "start",
                "a 4x4 matrix of a rotation and a translation",
                "a matrix that scales, mirrors, shears or is not finite",
                "give a rigid motion, local current to local reference coordinates",
            )
        )
    if given.source not in SOURCES:
        raise OptionError(explain("start", f"a source out of {', '.join(SOURCES)}", repr(given.source), "name one"))
    if given.covariance is not None:
        _check_covariance(given.covariance, given.pivot)


def _check_covariance(covariance: FloatArray, pivot: FloatArray | None) -> None:
    C = np.asarray(covariance, np.float64)
    good = C.shape == (6, 6) and bool(np.isfinite(C).all()) and (np.diag(C) > 0).all()
    if good:
        scale = np.sqrt(np.outer(np.diag(C), np.diag(C)))
        good = np.abs(C - C.T).max() <= 1e-6 * C.max() and np.linalg.eigvalsh((C + C.T) / 2 / scale)[0] > -1e-6
    if not good or pivot is None or np.shape(pivot) != (3,) or not np.isfinite(pivot).all():
        raise OptionError(
            explain(
                "start",
                "a symmetric 6x6 covariance without negative variances, and the pivot that it refers to",
                f"shape {C.shape}, pivot {pivot}",
                "give both, or neither",
            )
        )


def held_covariance(
    start: object, weak: FloatArray, reach: FloatArray, metric: Metric, capture_range: float
) -> FloatArray:
    """Covariance of the motions that are held at the start.

    From the covariance of the start where it has one. Otherwise a third of the capture range at the place that each
    motion moves most.

    Parameters
    ----------
    start : object
        As `register` was called with; anything but a `GivenStart` carries no covariance.
    weak : ndarray of shape (6, k)
        Orthonormal directions in metric unknowns.
    reach : ndarray of shape (k,)
        How far a unit motion moves the place that it moves most [1].
    metric : Metric
    capture_range : float
        [m]

    Returns
    -------
    ndarray of shape (k, k)
        In metric unknowns [m^2].
    """
    if not isinstance(start, GivenStart) or start.covariance is None or start.pivot is None:
        return np.diag((capture_range / START_SIGMAS / reach) ** 2)
    x, y, z = metric.pivot - start.pivot
    # A rotation w about the start's pivot moves the metric's own pivot by w x arm.
    J = np.zeros((6, 6))
    J[:3, :3] = metric.arm * np.eye(3)
    J[3:, :3] = [[0.0, z, -y], [-z, 0.0, x], [y, -x, 0.0]]
    J[3:, 3:] = np.eye(3)
    B = weak.T @ J
    return np.asarray(B @ start.covariance @ B.T)
