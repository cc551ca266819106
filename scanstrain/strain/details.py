# SPDX-License-Identifier: MIT
"""What is known of a gauge beside the attributes: the direction of its principal strain, bending and membrane strain.

The strain of a scanned face is that of the middle of the thickness (membrane) plus that of bending. Both parts come
from one fit, so their errors are correlated, and that of the difference counts it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich, transpose
from scanstrain.neighbourhood.result import Observed
from scanstrain.strain.axes import turned_components
from scanstrain.strain.bending import bending_strain
from scanstrain.strain.gauges import Gauges
from scanstrain.strain.kinematics import Kinematics
from scanstrain.strain.significance import wald

FloatArray = NDArray[np.float64]

DETAILS = {
    "direction_1": "rad",
    "direction_1_sd": "rad",
    "bend_u": "1",
    "bend_v": "1",
    "membrane_u": "1",
    "membrane_v": "1",
    "membrane_u_sd": "1",
    "membrane_v_sd": "1",
}
"""Unit of each: angle of the larger principal strain from u towards v, in (-pi/2, pi/2]; strain of bending and of the
middle of the thickness along u and v."""

DIFFERENT = 0.05
"""A direction is given where a test of "both principal strains are equal" has a smaller p-value [1]."""


def details(gauges: Gauges, moved: Kinematics, axes: FloatArray, bending: FloatArray | None) -> dict[str, FloatArray]:
    """Return every one of `DETAILS` over all gauges of the field, NaN where it is not supported.

    Parameters
    ----------
    gauges : Gauges
    moved : Kinematics
    axes : ndarray of shape (g, 3, 2)
        Tangents u and v of the structure at the fitted gauges.
    bending : ndarray of shape (g, 3, 3), optional
        From `bending_map`, where a thickness is known.

    Returns
    -------
    dict of str to ndarray
    """
    turn = turned_components(axes, gauges.frame)
    strained = gauges.has(Observed.STRAIN)
    found = _direction(_turned(turn, moved.strain), sandwich(turn, moved.strain_covariance), strained)
    found |= _parts(gauges, moved, turn, bending)
    return {name: np.asarray(gauges.scatter(found[name], np.nan), dtype=np.float64) for name in DETAILS}


def _direction(strain: FloatArray, covariance: FloatArray, known: NDArray[np.bool_]) -> dict[str, FloatArray]:
    """Angle of the larger principal strain from u, given only where the two values differ for sure.

    They differ by twice the length of ((uu - vv) / 2, uv), so "equal" is a test of that vector with two degrees of
    freedom. Its own angle is twice that of the strain; the error is of first order, from noise across the vector.
    """
    rows = np.array([[0.5, -0.5, 0.0], [0.0, 0.0, 1.0]])
    circle, spread = strain @ rows.T, sandwich(np.broadcast_to(rows, (len(strain), 2, 3)), covariance)
    p = wald(circle, np.asarray(spread), np.repeat(known[:, None], 2, axis=1))
    given = p < DIFFERENT
    double, length = np.arctan2(circle[:, 1], circle[:, 0]), np.hypot(*circle.T)
    across = np.stack([-np.sin(double), np.cos(double)], axis=-1)
    # rounding leaves a little below zero where nothing is observed
    noise = np.sqrt(np.maximum(np.einsum("gi,gij,gj->g", across, spread, across), 0.0))
    return {
        "direction_1": np.where(given, 0.5 * double, np.nan),
        "direction_1_sd": np.where(given, 0.5 * noise / np.where(given, length, 1.0), np.nan),
    }


def _parts(gauges: Gauges, moved: Kinematics, turn: FloatArray, bending: FloatArray | None) -> dict[str, FloatArray]:
    missing = np.full((len(gauges), 3), np.nan)
    bent, membrane, sd = missing, missing, missing
    if bending is not None:
        bends, strained = gauges.has(Observed.CURVATURE), gauges.has(Observed.STRAIN)
        bent = np.where(bends[:, None], _turned(turn, bending_strain(moved.curvature, bending)), np.nan)
        shared = moved.strain_with_curvature @ transpose(bending)
        middle = moved.strain_covariance + sandwich(bending, moved.curvature_covariance) - shared - transpose(shared)
        both = (bends & strained)[:, None]
        membrane = np.where(both, _turned(turn, moved.strain) - bent, np.nan)
        variance = np.einsum("gii->gi", sandwich(turn, middle))
        sd = np.where(both, np.sqrt(np.maximum(variance, 0.0)), np.nan)
    named = {"bend": bent, "membrane": membrane}
    found = {f"{name}_{axis}": part[:, k] for name, part in named.items() for k, axis in enumerate("uv")}
    return found | {f"membrane_{axis}_sd": sd[:, k] for k, axis in enumerate("uv")}


def _turned(turn: FloatArray, components: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("gij,gj->gi", turn, components))
