# SPDX-License-Identifier: MIT
"""Standard errors held against ground that did not move.

Point noise explains only part of the scatter of real scans: footprints overlap, range is biased by incidence and
reflectance, a scanner bends its scene a little. On stable ground every change is error, so standardised values there
must spread by one; where they spread more, standard errors grow by that factor (null-pair calibration, common practice
in deformation surveys). They never shrink.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.registration.result import Registration
from scanstrain.strain.uncertainty import registration_covariance

FloatArray = NDArray[np.float64]

GROUPS: dict[str, tuple[int, ...]] = {
    "normal displacement": (2,),
    "tilt": (7, 8),
    "change of curvature": (9, 10, 11),
    "in-plane displacement": (0, 1),
    "in-plane strain and spin": (3, 4, 5, 6),
}
"""Unknowns that share a factor, by their place in `neighbourhood.result.PARAMETERS`."""

KINDS = ("with relief or texture", "bare")
ONE_SIGMA = 0.6826894921370859
"""Share of a normal distribution within one standard deviation."""
FEWEST_PATCHES = 15
"""Patches' worth of stable ground below which its scatter says too little."""
FEWEST_AT_ALL = 2
"""The same where no ground is established: even a poor measure of the background is better than none."""
WHOLLY_STABLE = 0.95
"""Share of the points about a gauge that must be stable for the gauge to count."""
ESTABLISHED = 0.5
"""Share of the common surface that must be stable before it is taken as the measure of error. With less, nobody
knows which part stood still, and what the whole surface does is taken as background."""


@dataclass(frozen=True, slots=True)
class Calibration:
    """What the calibration found.

    Parameters
    ----------
    factors : dict of str to dict of str to float
        For each kind of surface ("with relief or texture", "bare") the factor on the standard errors of each group
        of unknowns [1]; 1 where it could not be judged.
    ground : str
        "stable ground", "whole surface" or "none".
    gauges : int
        Gauges on that ground.
    steady : ndarray of shape (g,), bool
        Gauges whose whole patch was used as stable ground by the registration.
    """

    factors: dict[str, dict[str, float]]
    ground: str
    gauges: int
    steady: NDArray[np.bool_]


def calibrate(
    field: AffineField, registration: Registration, points: FloatArray, *, thinning: int = 1
) -> tuple[AffineField, Calibration, tuple[str, ...]]:
    """Scale the covariance of a field so that stable ground shows unit spread.

    Parameters
    ----------
    field : AffineField
    registration : Registration
        Its `stable` tells the ground, its covariance is part of what a gauge there may show.
    points : ndarray of shape (n, 3)
        Reference points, in the order of `registration.stable`, local coordinates [m].
    thinning : int
        One in how many of all reference points they are.

    Returns
    -------
    field : AffineField
        With a covariance that is as large or larger.
    calibration : Calibration
    warnings : tuple of str
    """
    steady = share_around(field, points, registration.stable, thinning=thinning) >= WHOLLY_STABLE
    established, ground = _ground(field, registration, steady)
    fewest = FEWEST_PATCHES if established else FEWEST_AT_ALL
    values = np.concatenate([field.displacement, field.gradient.reshape(-1, 6), field.hessian], axis=1)
    error = field.covariance + registration_covariance(field.position, field.frame, registration)
    z = np.abs(values) / np.sqrt(np.einsum("gii->gi", error))
    scale = np.ones((len(field), 12))
    factors = {kind: dict.fromkeys(GROUPS, 1.0) for kind in KINDS}
    whole = _patches(field, ground)
    # What limits the fit differs: interpolation of relief and texture on the one, noise alone on the other.
    shows = field.observable[:, :2].all(axis=1)
    for kind, here in zip(KINDS, (shows, ~shows), strict=True):
        judged = ground & here if _patches(field, ground & here) >= fewest else ground
        for name, columns in GROUPS.items() if whole >= fewest else ():
            known = z[judged][:, columns]
            known = known[np.isfinite(known)]
            if len(known) >= fewest * len(columns):
                factors[kind][name] = max(float(np.quantile(known, ONE_SIGMA)), 1.0)
            for column in columns:
                scale[here, column] = factors[kind][name]
    if whole < fewest:
        return field, Calibration(factors, "none", 0, steady), ()
    calibrated = replace(field, covariance=field.covariance * scale[:, :, None] * scale[:, None, :])
    where = "stable ground" if established else "whole surface"
    return calibrated, Calibration(factors, where, int(ground.sum()), steady), _warnings(factors, established)


def _ground(
    field: AffineField, registration: Registration, steady: NDArray[np.bool_]
) -> tuple[bool, NDArray[np.bool_]]:
    """Whether stable ground is established, and the fitted gauges on it, or else all fitted ones."""
    fine = field.status == Status.FINE
    if registration.stable_fraction < ESTABLISHED * registration.overlap:
        return False, fine
    if _patches(field, fine & steady) < FEWEST_PATCHES and registration.stable_fraction < ESTABLISHED:
        return False, fine
    return True, fine & steady


def _patches(field: AffineField, gauges: NDArray[np.bool_]) -> float:
    """Independent patches' worth of overlapping gauges."""
    return float(gauges.sum() * (field.gauge_spacing / field.gauge_length) ** 2)


def share_around(
    field: AffineField, points: FloatArray, belongs: NDArray[np.bool_], *, thinning: int = 1
) -> FloatArray:
    """Share of the points within a gauge radius that belong to something, from an even sample of some hundred a gauge.

    Parameters
    ----------
    field : AffineField
    points : ndarray of shape (n, 3)
        Local coordinates [m].
    belongs : ndarray of shape (n,), bool
    thinning : int
        One in how many of all reference points are given.

    Returns
    -------
    ndarray of shape (g,)
        [1]; 0 for a gauge without points.
    """
    from scipy.spatial import cKDTree

    step = max(1, int(np.median(field.points[field.status == Status.FINE])) // (200 * thinning))
    sample, known = points[::step], belongs[::step]
    tree, gauges = cKDTree(sample), cKDTree(field.position)
    pairs = gauges.sparse_distance_matrix(tree, field.gauge_length / 2, output_type="ndarray")
    total = np.bincount(pairs["i"], minlength=len(field))
    steady = np.bincount(pairs["i"], known[pairs["j"]], minlength=len(field))
    return np.asarray(steady / np.maximum(total, 1))


def _warnings(factors: dict[str, dict[str, float]], established: bool) -> tuple[str, ...]:
    said = []
    if not established:
        said.append(
            "Less than half of the surface could be established as stable ground, so the typical change of the whole "
            "surface was taken as the error of the survey: only changes that stand out from it count as significant. "
            "Include ground that is known not to have moved in both scans to judge the rest."
        )
    worst = {name: max(each[name] for each in factors.values()) for name in GROUPS}
    large = [f"{name} x {factor:.1f}" for name, factor in worst.items() if factor > 1.5]
    if large:
        said.append(
            "The ground that did not move scatters more than the noise of points explains; standard errors were "
            f"raised to match ({', '.join(large)})."
        )
    return tuple(said)
