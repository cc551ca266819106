# SPDX-License-Identifier: MIT
"""From the gradient and second derivatives of each gauge to strain, tilt, spin and curvature, with covariances."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import components_2d, sandwich, tensor_2d
from scanstrain.neighbourhood.result import Observed
from scanstrain.strain.bending import curvature_change
from scanstrain.strain.gauges import Gauges
from scanstrain.strain.rotation import spin, tilt_vector
from scanstrain.strain.significance import benjamini_hochberg, wald
from scanstrain.strain.surface import SurfaceMap, map_surface, principal, surface_strain
from scanstrain.strain.uncertainty import jacobian

FloatArray = NDArray[np.float64]

MAX_SMALL_STRAIN = 0.01
"""Above this the linear measure is off by 0.5 % of the strain and more."""

MAX_SMALL_ROTATION = 0.01
"""Rotation [rad] above which a linear measure would show 50 microstrain of false contraction."""

_STRAIN, _TILT, _SPIN, _CURVATURE = slice(0, 3), slice(3, 5), slice(5, 6), slice(6, 9)


@dataclass(frozen=True, slots=True)
class Kinematics:
    """What each fitted gauge did, in its own frame, and how well that is known.

    Parameters
    ----------
    mapped : SurfaceMap
    strain, curvature : ndarray of shape (g, 3)
        (11, 22, 12) of the strain tensor [1] and of the change of curvature [1/m].
    tilt : ndarray of shape (g, 2)
        Rotation of the normal about a1 and a2 [rad].
    spin : ndarray of shape (g,)
        Rotation about the normal [rad].
    strain_covariance, curvature_covariance, tilt_covariance, spin_variance : ndarray
        The first two from observations, the last two with the error of the registration.
    strain_with_curvature : ndarray of shape (g, 3, 3)
        Covariance of strain (rows) and change of curvature (columns), from observations.
    """

    mapped: SurfaceMap
    strain: FloatArray
    curvature: FloatArray
    tilt: FloatArray
    spin: FloatArray
    strain_covariance: FloatArray
    curvature_covariance: FloatArray
    tilt_covariance: FloatArray
    spin_variance: FloatArray
    strain_with_curvature: FloatArray


def _all_of_it(unknowns: FloatArray, shape: FloatArray, measure: str) -> FloatArray:
    mapped = map_surface(unknowns[:, :6].reshape(-1, 3, 2))
    return np.concatenate(
        [
            components_2d(surface_strain(mapped, measure)),
            tilt_vector(mapped),
            spin(mapped)[:, None],
            components_2d(curvature_change(mapped, shape, unknowns[:, 6:])),
        ],
        axis=1,
    )


def kinematics(gauges: Gauges, measure: str) -> Kinematics:
    """Evaluate every gauge and carry its covariance through the exact, nonlinear formulas."""
    unknowns = gauges.parameters[:, 3:]
    values = _all_of_it(unknowns, gauges.shape, measure)
    J = jacobian(lambda q: _all_of_it(q, gauges.shape, measure), unknowns)
    own, datum = gauges.covariance[:, 3:, 3:], gauges.datum_covariance[:, 3:, 3:]
    return Kinematics(
        mapped=map_surface(unknowns[:, :6].reshape(-1, 3, 2)),
        strain=values[:, _STRAIN],
        curvature=values[:, _CURVATURE],
        tilt=values[:, _TILT],
        spin=values[:, 5],
        strain_covariance=sandwich(J[:, _STRAIN], own),
        curvature_covariance=sandwich(J[:, _CURVATURE], own),
        tilt_covariance=sandwich(J[:, _TILT], datum),
        spin_variance=sandwich(J[:, _SPIN], datum)[:, 0, 0],
        strain_with_curvature=J[:, _STRAIN] @ own @ np.swapaxes(J[:, _CURVATURE], 1, 2),
    )


def _any_beyond(size: FloatArray, limit: float, p: FloatArray, rate: float) -> float:
    """Largest `size` among gauges that differ from zero for sure and pass the limit; 0 if none does."""
    sure = benjamini_hochberg(p, rate) & (size > limit)
    return float(size[sure].max()) if sure.any() else 0.0


def choose_measure(gauges: Gauges, *, rate: float) -> tuple[str, str]:
    """Small strain where it is good enough, else Hencky strain, with the reason in words.

    Hencky, because it changes sign when the epochs are exchanged and gives stretch and shortening equal weight.
    Only gauges count whose strain (rotation) differs from zero under false-discovery control: noise beyond a limit is
    no reason.
    """
    k = kinematics(gauges, "small")
    strained, tilted = gauges.has(Observed.STRAIN), gauges.has(Observed.TILT)
    spun = gauges.has(Observed.SPIN)
    e = principal(tensor_2d(k.strain))
    p_strain = wald(k.strain, k.strain_covariance, np.repeat(strained[:, None], 3, axis=1))
    strain = _any_beyond(np.maximum(np.abs(e[0]), np.abs(e[1])), MAX_SMALL_STRAIN, p_strain, rate)
    p_tilt = wald(k.tilt, k.tilt_covariance, np.repeat(tilted[:, None], 2, axis=1))
    p_spin = wald(k.spin[:, None], k.spin_variance[:, None, None], spun[:, None])
    rotation = max(
        _any_beyond(np.hypot(k.tilt[:, 0], k.tilt[:, 1]), MAX_SMALL_ROTATION, p_tilt, rate),
        _any_beyond(np.abs(k.spin), MAX_SMALL_ROTATION, p_spin, rate),
    )
    if strain > 0.0:
        return "hencky", (
            f"Hencky (logarithmic) strain: a significant strain of {100 * strain:.2f} % lies above 1 %, "
            "where small strain is no longer accurate."
        )
    if rotation > 0.0:
        return "hencky", (
            f"Hencky (logarithmic) strain: a significant rotation of {rotation:.4f} rad lies above 0.01 rad "
            "after registration."
        )
    return "small", (
        "Small strain after removal of the local rotation: no significant strain above 1 % and no significant "
        "rotation above 0.01 rad."
    )
