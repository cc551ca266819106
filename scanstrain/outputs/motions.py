# SPDX-License-Identifier: MIT
"""Rigid motions besides the registration, in numbers for `summary.json`: bodies, set-ups, targets."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.result import WeakDirection
from scanstrain.registration.seams import Seam
from scanstrain.registration.targets import TargetFit
from scanstrain.strain.bodies import BodyMotion


def directions(weak: tuple[WeakDirection, ...]) -> list[dict[str, Any]]:
    """Describe motions by their words, vector and standard error [m]."""
    return [{"description": each.description, "vector": each.vector, "sd": each.sd} for each in weak]


def body_numbers(body: BodyMotion, origin: NDArray[np.float64]) -> dict[str, Any]:
    """Describe the motion of a body after registration, places in file coordinates; SI units.

    `rotation_vector` and `translation` hold the part that is known: along `weak_directions` they are zero because
    nothing is known there.
    """
    return {
        "verdict": body.verdict,
        "gauges": body.gauges,
        "independent_gauges": body.independent,
        "pivot": body.pivot + origin,
        "rotation_vector": body.rotation,
        "translation": body.translation,
        "covariance": body.covariance,
        "weak_directions": directions(body.weak_directions),
        "normal": body.normal,
        "shift": body.shift,
        "shift_sd": body.shift_sd,
        "lean": body.lean,
        "lean_sd": body.lean_sd,
        "yaw": body.yaw,
        "yaw_sd": body.yaw_sd,
        "p_still": body.still.p,
        "p_rigid": body.rigid.p,
        "residual_rms": body.residual_rms,
        "residual_expected": body.residual_expected,
        "largest_residual": body.largest_residual,
        "largest_residual_sd": body.largest_residual_sd,
        "largest_residual_at": body.largest_place + origin,
    }


def seam_numbers(seam: Seam) -> dict[str, Any]:
    """Describe how the second of two set-ups lies against the first; SI units."""
    return {
        "first": seam.first,
        "second": seam.second,
        "points": seam.points,
        "note": seam.note or None,
        "offset": seam.offset,
        "angle": seam.angle,
        "offset_n": seam.offset_n,
        "offset_n_sd": seam.offset_n_sd,
        "p": seam.p,
        "weak_directions": directions(seam.weak_directions),
    }


def target_numbers(fit: TargetFit) -> dict[str, Any]:
    """Describe the targets that the registration started from: residuals [m] and tests of each."""
    return {
        "rms": fit.rms,
        "variance_factor": fit.variance_factor,
        "p": fit.p_value,
        "redundant": fit.redundant,
        "critical_w": fit.critical,
        "blunders": fit.blunders,
        "residuals": {
            name: {"used": bool(used), "residual": residual, "w": w, "detectable": least}
            for name, used, residual, w, least in zip(
                fit.names, fit.used, fit.residuals, fit.w, fit.detectable, strict=True
            )
        },
    }
