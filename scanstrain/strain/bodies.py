# SPDX-License-Identifier: MIT
"""Whether a body moved as a block or bends: its own rigid motion after registration, and what is left of the rest."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.linalg import sandwich
from scanstrain.neighbourhood.result import AffineField
from scanstrain.registration.result import Registration, WeakDirection
from scanstrain.strain.body_fit import RigidFit, Sights, datum_covariance, fit_rigid, known, thinned
from scanstrain.strain.body_words import name_motions
from scanstrain.strain.congruence import Congruence, congruence_test
from scanstrain.strain.gauges import fitted_gauges

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

LEVEL = 0.025
"""Each of the two tests that the verdict rests on; together they are wrong about a still body in at most 5 %."""
FEWEST = 3
"""Gauges below which nothing is said of a body."""
LEAK = 0.05
"""Part of a motion that may lie along what is not known (3 degrees) before the motion counts as not known."""
FACING = 0.5
"""Length of the mean normal below which a body faces no one side, as a tunnel does."""
UPRIGHT = 0.3
"""Horizontal part of the mean normal below which a body is a floor or a roof, which does not lean."""
UP = np.array([0.0, 0.0, 1.0])


@dataclass(frozen=True, slots=True)
class BodyMotion:
    """The rigid motion of a body after registration, and what is left after removing it.

    Parameters
    ----------
    name : str
    verdict : {"still", "moved as one body", "deformed", "deformed and moved", "not known"}
        As `body_motion` states.
    gauges, independent : int
        Gauges of the body that observe a displacement, and those among them that share no points, on which the motion
        and its tests rest.
    pivot : ndarray of shape (3,)
        Centroid of these by weight, local coordinates [m].
    rotation, translation : ndarray of shape (3,)
        Rotation vector [rad] and translation of the pivot [m]. Only the part that is known: along `weak_directions`
        they are zero because nothing is known there, not because nothing moved.
    covariance : ndarray of shape (6, 6)
        Of (rotation, translation), registration included; of the known part likewise.
    weak_directions : tuple of WeakDirection
        Motions that are not known to 10 mm at the farthest gauge, in words; `sd` is infinite where nothing sees them.
    normal : ndarray of shape (3,)
        Mean normal of the body; NaN where it faces no one side.
    shift, shift_sd : float
        Translation of the pivot along that normal, positive to the free side [m]. This and the next two with their
        standard errors, registration included; NaN where not known.
    lean, lean_sd : float
        Rotation about the horizontal in the body's plane, positive where the top moved to the free side [rad].
    yaw, yaw_sd : float
        Rotation about the vertical, positive anticlockwise seen from above [rad].
    still, rigid : Congruence
        Tests of "did not move", on the known part of the motion, and of "moved as one rigid body", on the residuals.
    residual_rms, residual_expected : float
        Root mean square of what is left of the normal displacement [m], and what its standard errors explain.
    largest_residual, largest_residual_sd : float
        The residual that exceeds its standard error most, positive to the free side [m].
    largest_place : ndarray of shape (3,)
        Where, in local coordinates [m].
    """

    name: str
    verdict: str
    gauges: int
    independent: int
    pivot: FloatArray
    rotation: FloatArray
    translation: FloatArray
    covariance: FloatArray
    weak_directions: tuple[WeakDirection, ...]
    normal: FloatArray
    shift: float
    shift_sd: float
    lean: float
    lean_sd: float
    yaw: float
    yaw_sd: float
    still: Congruence
    rigid: Congruence
    residual_rms: float
    residual_expected: float
    largest_residual: float
    largest_residual_sd: float
    largest_place: FloatArray


def body_motion(
    field: AffineField,
    *,
    name: str,
    gauges: BoolArray,
    registration: Registration | None = None,
    error_dof: float = np.inf,
) -> BodyMotion:
    """Estimate the rigid motion of a body after registration, and judge what is left.

    The motion is the weighted least-squares fit (`body_fit.fit_rigid`) to the observed displacements of gauges that
    share no points; a body that bends has one too, the block that follows it best. The error of the registration is
    added once, for it is a rigid motion itself. Where the body is the registration's own stable ground both share
    noise, and the standard errors lean to the safe side.

    Two tests of congruence (Pelzer 1971) give the verdict, each at 2.5 %: "moved as one rigid body" on the residuals,
    which needs no registration, and "did not move" on the motion with its covariance. Neither rejected: "still", which
    says that no movement shows, not that there is none. The second alone: "moved as one body"; the first alone:
    "deformed"; both: "deformed and moved". "not known" where fewer than three gauges observe anything or no
    observation is left over to test with.

    Parameters
    ----------
    field : AffineField
        Its covariance should be calibrated (`strain.calibrate`): errors that neighbouring gauges share beyond a gauge
        length pass for deformation unless the standard errors count them.
    name : str
        What the body is called.
    gauges : ndarray of shape (g,), bool
        Gauges of the field that stand on the body; those without a fit are left out.
    registration : Registration, optional
        Without it the registration counts as exact.
    error_dof : float
        Degrees of freedom behind the standard errors, such as the patches of the ground that they were held against;
        infinite where they count as known.

    Returns
    -------
    BodyMotion

    Raises
    ------
    OptionError
        `gauges` is no mask of the field's gauges, `error_dof` is not above 0, or the covariance of the registration is
        not finite.
    """
    _check(field, gauges, error_dof)
    whole = _sights(field, gauges, registration)
    apart = thinned(whole, field.gauge_length)
    fit = fit_rigid(apart, error_dof=error_dof) if len(whole) >= FEWEST else None
    if fit is None:
        return _unknown(name, len(whole))
    datum = datum_covariance(fit, registration)
    directions, variance = known(fit, datum, apart.position)
    scores = directions.T @ fit.motion
    motion, covariance = directions @ scores, (directions * variance) @ directions.T
    weak = np.linalg.svd(directions)[0][:, directions.shape[1] :]
    still = congruence_test(scores, np.diag(variance), dof=error_dof)
    normal = _mean_normal(apart)
    numbers: dict[str, Any] = {}
    for what, row in _motions(normal).items():
        numbers[what], numbers[f"{what}_sd"] = _component(row * fit.scale, motion, covariance, weak)
    return BodyMotion(
        name=name,
        verdict=_verdict(still, fit.rigid),
        gauges=len(whole),
        independent=len(apart),
        pivot=fit.pivot,
        rotation=(motion * fit.scale)[:3],
        translation=(motion * fit.scale)[3:],
        covariance=sandwich(np.diag(fit.scale), covariance),
        weak_directions=_weak_directions(fit, weak, datum, apart),
        normal=normal,
        still=still,
        rigid=fit.rigid,
        **numbers,
        **_residuals(fit, whole, apart),
    )


def _sights(field: AffineField, gauges: BoolArray, registration: Registration | None) -> Sights:
    """Observed displacements of the body's gauges, without the error of the registration."""
    fitted = fitted_gauges(field, registration)
    seen = fitted.observable[:, :3]
    every = Sights(fitted.position, fitted.frame, fitted.displacement, seen, fitted.covariance[:, :3, :3])
    return every.only(np.asarray(gauges)[fitted.fine] & seen.any(axis=1))


def _check(field: AffineField, gauges: BoolArray, error_dof: float) -> None:
    mask = np.asarray(gauges)
    if mask.shape != (len(field),) or mask.dtype != np.bool_:
        raise OptionError(
            explain(
                "gauges",
                f"one bool a gauge, shape ({len(field)},)",
                f"{mask.dtype} of shape {mask.shape}",
                "make a mask of the field's gauges",
            )
        )
    if not error_dof > 0:
        raise OptionError(explain("error_dof", "a number above 0", f"{error_dof}", "leave it out where unknown"))


def _unknown(name: str, gauges: int) -> BodyMotion:
    """A body of which nothing can be said."""
    nothing, untested = np.full(3, np.nan), Congruence(np.nan, 0, np.nan)
    numbers = ("shift", "shift_sd", "lean", "lean_sd", "yaw", "yaw_sd", "residual_rms", "residual_expected")
    return BodyMotion(
        name=name,
        verdict="not known",
        gauges=gauges,
        independent=0,
        pivot=nothing,
        rotation=nothing,
        translation=nothing,
        covariance=np.full((6, 6), np.nan),
        weak_directions=(),
        normal=nothing,
        still=untested,
        rigid=untested,
        largest_residual=np.nan,
        largest_residual_sd=np.nan,
        largest_place=nothing,
        **dict.fromkeys(numbers, np.nan),
    )


def _verdict(still: Congruence, rigid: Congruence) -> str:
    if rigid.rank < 1:
        return "not known"
    if still.rank < 1:
        return "deformed" if rigid.p < LEVEL else "not known"
    words = {
        (False, False): "still",
        (False, True): "moved as one body",
        (True, False): "deformed",
        (True, True): "deformed and moved",
    }
    return words[rigid.p < LEVEL, still.p < LEVEL]


def _mean_normal(sights: Sights) -> FloatArray:
    mean = sights.frame[:, :, 2].mean(axis=0)
    length = float(np.linalg.norm(mean))
    return np.asarray(mean / length if length > FACING else np.full(3, np.nan))


def _motions(normal: FloatArray) -> dict[str, FloatArray]:
    """Rows (6,) that take (rotation, translation) to the shift along the normal, the lean and the yaw.

    A point a height h above the pivot moves by `h w x up`, along the normal n by `h w . (up x n)`: that product is
    the lean.
    """
    level, none = np.cross(UP, normal), np.zeros(3)
    size = float(np.linalg.norm(level))
    lean = level / size if size > UPRIGHT else np.full(3, np.nan)
    return {"shift": np.r_[none, normal], "lean": np.r_[lean, none], "yaw": np.r_[UP, none]}


def _component(row: FloatArray, motion: FloatArray, covariance: FloatArray, weak: FloatArray) -> tuple[float, float]:
    """Value and standard error of one number of the motion; NaN where it hangs on what is not known."""
    if not np.linalg.norm(weak.T @ row) <= LEAK * np.linalg.norm(row):
        return np.nan, np.nan
    return float(row @ motion), float(np.sqrt(row @ covariance @ row))


def _weak_directions(fit: RigidFit, weak: FloatArray, datum: FloatArray, sights: Sights) -> tuple[WeakDirection, ...]:
    """Name what is not known, each with its standard error at the gauge that it moves most."""
    total = fit.seen @ fit.covariance @ fit.seen.T + datum
    found = []
    for words, vector in name_motions(weak, sights.frame[:, :, 2]):
        seen = np.linalg.norm(fit.seen.T @ vector) > 1 - LEAK
        reach = float(fit.reach(vector[:, None], sights.position)[0])
        sd = float(np.sqrt(vector @ total @ vector)) * reach if seen else np.inf
        found.append(WeakDirection(description=words, vector=vector, sd=sd))
    return tuple(found)


def _residuals(fit: RigidFit, whole: Sights, apart: Sights) -> dict[str, Any]:
    """What is left of the normal displacement: its size over gauges that share no points, the largest over all."""
    left, variance = _normal_residual(fit, apart)
    claimed = variance - _fitted_variance(fit, apart, fit.formal)
    every, noise = _normal_residual(fit, whole)
    sd = np.sqrt(noise + _fitted_variance(fit, whole, fit.covariance))
    if not apart.seen[:, 2].any():
        return {
            "residual_rms": np.nan,
            "residual_expected": np.nan,
            "largest_residual": np.nan,
            "largest_residual_sd": np.nan,
            "largest_place": np.full(3, np.nan),
        }
    largest = int(np.nanargmax(np.abs(every) / sd))
    return {
        "residual_rms": float(np.sqrt(np.nanmean(left**2))),
        "residual_expected": float(np.sqrt(np.nanmean(np.maximum(claimed, 0.0)))),
        "largest_residual": float(every[largest]),
        "largest_residual_sd": float(sd[largest]),
        "largest_place": whole.position[largest],
    }


def _normal_residual(fit: RigidFit, sights: Sights) -> tuple[FloatArray, FloatArray]:
    """Residual [m] and variance [m^2] of the normal displacement; NaN where it is not observed."""
    seen = sights.seen[:, 2]
    left = np.where(seen, sights.displacement[:, 2] - fit.predicted(sights)[:, 2], np.nan)
    return left, np.where(seen, sights.covariance[:, 2, 2], np.nan)


def _fitted_variance(fit: RigidFit, sights: Sights, covariance: FloatArray) -> FloatArray:
    """Variance of the fitted normal displacement at gauges [m^2]."""
    row = fit.rows(sights)[:, 2]
    return np.einsum("gi,ij,gj->g", row, covariance, row)
