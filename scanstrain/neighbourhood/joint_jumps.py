# SPDX-License-Identifier: MIT
"""From the two sides of a joint to opening, slip, step and hinge angle, with standard errors and tests."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.result import STATUS_WORDS, Status

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

JUMPS = ("opening", "slip", "step", "hinge")
"""Order of the components of a jump."""
NOT_OBSERVABLE = "the data do not support it"
_UNKNOWN = (0, 1, 2, 7)
_SIGN = (1.0, 1.0, 1.0, -1.0)
# Of a joint, right minus left: u1 opens it, u2 slips, un steps; a slope gn1 that falls opens it at the free side.
OVERLAP = (0.44, 0.44, 0.31, 0.38)
"""Correlation of each component at places one radius apart: their half discs share points. From the weights of an
affine (opening, slip) and a quadratic fit (step, hinge) to evenly spread points."""


@dataclass(frozen=True, slots=True)
class Side:
    """One side of a joint, extrapolated to the places along it.

    Parameters
    ----------
    values, covariance : ndarray of shape (k, 12), (k, 12, 12)
        Unknowns of the affine map in the axes of the joint (right, along, normal), in the order of
        `result.PARAMETERS` [m, 1, 1/m].
    observable : ndarray of shape (k, 12), bool
        Whether the data support each of them.
    status : ndarray of shape (k,), uint8
        A `Status` for each place.
    points : ndarray of shape (k,), int64
        Reference points behind the fit.
    """

    values: FloatArray
    covariance: FloatArray
    observable: BoolArray
    status: NDArray[np.uint8]
    points: NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class JointJumps:
    """What a joint did, at places along it and as a whole.

    Components are opening [m], slip [m], step [m] and hinge angle [rad]. Positive: it opens; seen across it, the other
    side moves to the left; the side to the right of the line moves to the free side; it opens at the free side.

    Parameters
    ----------
    name : str
        Of the joint.
    along : ndarray of shape (k,)
        Distance of the places from the start of the line [m].
    position : ndarray of shape (k, 3)
        The places, local coordinates [m].
    frame : ndarray of shape (k, 3, 3)
        Columns: right of the line, along it, and the normal to the free side.
    values : ndarray of shape (k, 4)
        The components; NaN where they are not observable.
    covariance : ndarray of shape (k, 4, 4)
        Of the components. The registration has no part in it.
    observable : ndarray of shape (k, 4), bool
        Whether both sides support each component.
    status : ndarray of shape (k, 2), uint8
        A `Status` for the right and the left side of each place.
    points : ndarray of shape (k, 2), int64
        Reference points behind both fits.
    significance : ndarray of shape (k,)
        p-value of "no jump here" from the observable components; NaN where there is none.
    mean, mean_sd : ndarray of shape (4,)
        Weighted means along the joint and their standard errors; NaN where no place supports a component.
    mean_significance : float
        p-value of "no jump anywhere along the joint".
    """

    name: str
    along: FloatArray
    position: FloatArray
    frame: FloatArray
    values: FloatArray
    covariance: FloatArray
    observable: BoolArray
    status: NDArray[np.uint8]
    points: NDArray[np.int64]
    significance: FloatArray
    mean: FloatArray
    mean_sd: FloatArray
    mean_significance: float

    def __len__(self) -> int:
        return len(self.along)

    @property
    def sd(self) -> FloatArray:
        """Standard errors of `values`, NaN where these are, shape (k, 4)."""
        return np.where(self.observable, np.sqrt(np.einsum("kii->ki", self.covariance)), np.nan)

    def reason(self, place: int) -> str:
        """Why a component is missing at a place, in words; empty where none is."""
        for side, status in zip(("right", "left"), self.status[place], strict=True):
            if status != Status.FINE:
                return f"{side} side: {STATUS_WORDS[Status(status)]}"
        missing = [name for name, seen in zip(JUMPS, self.observable[place], strict=True) if not seen]
        return f"{' and '.join(missing)}: {NOT_OBSERVABLE}" if missing else ""


def jumps_between(
    name: str, along: FloatArray, position: FloatArray, frame: FloatArray, right: Side, left: Side
) -> JointJumps:
    """Subtract the left side of a joint from the right one; parameters as of `JointJumps`."""
    index, sign = np.array(_UNKNOWN), np.array(_SIGN)
    observable = right.observable[:, index] & left.observable[:, index]
    values = np.where(observable, sign * (right.values - left.values)[:, index], np.nan)
    both = (right.covariance + left.covariance)[:, index][:, :, index]
    covariance = both * sign[:, None] * sign
    statistic, freedom = _wald(values, covariance, observable)
    mean, mean_sd = _means(values, np.sqrt(np.einsum("kii->ki", covariance)))
    return JointJumps(
        name,
        along,
        position,
        frame,
        values,
        covariance,
        observable,
        np.stack([right.status, left.status], axis=1),
        np.stack([right.points, left.points], axis=1),
        _tail(statistic, freedom),
        mean,
        mean_sd,
        _whole(statistic, freedom),
    )


def _wald(values: FloatArray, covariance: FloatArray, observable: BoolArray) -> tuple[FloatArray, FloatArray]:
    """Squared jump in units of its covariance at every place, and the number of its components."""
    statistic = np.zeros(len(values))
    for k, seen in enumerate(observable):
        d, S = values[k, seen], covariance[k][np.ix_(seen, seen)]
        statistic[k] = d @ np.linalg.solve(S, d)
    return statistic, observable.sum(axis=1).astype(np.float64)


def _tail(statistic: FloatArray, freedom: FloatArray) -> FloatArray:
    from scipy.special import chdtrc

    return np.where(freedom > 0, chdtrc(np.maximum(freedom, 1.0), statistic), np.nan)


def _whole(statistic: FloatArray, freedom: FloatArray) -> float:
    """p-value over all places.

    Places one apart share points, those two apart do not: each half of them is tested by its sum, and the smaller of
    both p-values counts twice (Bonferroni).
    """
    sums = [(statistic[half::2].sum(), freedom[half::2].sum()) for half in (0, 1)]
    tested = _tail(*(np.array(column) for column in zip(*sums, strict=True)))
    tested = tested[np.isfinite(tested)]
    return float(min(1.0, len(tested) * tested.min())) if len(tested) else float("nan")


def _means(values: FloatArray, sd: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Mean of every component weighted by its variance, and its standard error with what neighbours share."""
    mean, error = np.full(len(JUMPS), np.nan), np.full(len(JUMPS), np.nan)
    for k, overlap in enumerate(OVERLAP):
        seen = np.isfinite(values[:, k])
        if not seen.any():
            continue
        weight = np.where(seen, 1.0 / sd[:, k] ** 2, 0.0)
        weight /= weight.sum()
        part = weight * np.where(seen, sd[:, k], 0.0)
        mean[k] = np.sum(weight[seen] * values[seen, k])
        error[k] = np.sqrt(np.sum(part**2) + 2.0 * overlap * np.sum(part[1:] * part[:-1]))
    return mean, error
