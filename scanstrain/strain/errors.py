# SPDX-License-Identifier: MIT
"""How certain every quantity of a gauge is: its error, the part of the registration in it, and what noise adds."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich
from scanstrain.neighbourhood.result import PARAMETERS
from scanstrain.strain.gauges import Gauges
from scanstrain.strain.kinematics import Kinematics
from scanstrain.strain.result import Certainty
from scanstrain.strain.uncertainty import magnitude_sd, principal_sd

FloatArray = NDArray[np.float64]

NULL_LENGTH = 0.8862269254527580
"""Mean length of a vector of two equal, independent normal errors, over the root of the trace of their covariance [1]:
the square root of pi / 4. No true length and no other shape of the noise lengthens it more on average."""

_TILT = [PARAMETERS.index("gn1"), PARAMETERS.index("gn2")]
_SPIN = [PARAMETERS.index("g12"), PARAMETERS.index("g21")]


def certainties(
    gauges: Gauges, moved: Kinematics, axes: FloatArray, thickness: float | None, values: Mapping[str, FloatArray]
) -> dict[str, Certainty]:
    """Gather what is known about the errors of every quantity that can be held against a limit.

    Parameters
    ----------
    gauges : Gauges
    moved : Kinematics
    axes : ndarray of shape (g, 3, 2)
        Tangents u and v of the structure at the fitted gauges.
    thickness : float, optional
        Of the wall or lining [m].
    values : mapping of str to ndarray of shape (g,)
        The quantities at the fitted gauges; an error is given where the value is.

    Returns
    -------
    dict of str to Certainty
        Over all gauges of the field.
    """
    found = {**_displacements(gauges), **_rotations(gauges, moved), **_strains(gauges, moved, axes)}
    found |= _bendings(moved, thickness or 0.0)
    return {name: _over_the_field(gauges, parts, np.isfinite(values[name])) for name, parts in found.items()}


Parts = tuple[FloatArray, FloatArray, FloatArray]
"""Error, part of the registration, and largest mean of what noise adds; each of shape (g,)."""


def _over_the_field(gauges: Gauges, parts: Parts, known: NDArray[np.bool_]) -> Certainty:
    sd, datum, bias = (
        np.asarray(gauges.scatter(np.where(known, part, np.nan), np.nan), dtype=np.float64) for part in parts
    )
    return Certainty(sd=sd, datum_sd=datum, noise_bias=bias)


def _displacements(gauges: Gauges) -> dict[str, Parts]:
    total = gauges.datum_covariance[:, :3, :3]
    shared = total - gauges.covariance[:, :3, :3]
    none = np.zeros(len(gauges))
    found = {"disp_n": (_root(total[:, 2, 2]), _root(shared[:, 2, 2]), none)}
    total, shared = sandwich(gauges.frame, total), sandwich(gauges.frame, shared)
    for k, name in enumerate(("disp_x", "disp_y", "disp_z")):
        found[name] = _root(total[:, k, k]), _root(shared[:, k, k]), none
    return found


def _rotations(gauges: Gauges, moved: Kinematics) -> dict[str, Parts]:
    shared = gauges.datum_covariance - gauges.covariance
    tilt = np.linalg.eigvalsh(shared[:, _TILT][:, :, _TILT])[:, -1]
    half = np.array([[-0.5, 0.5]])
    spin = sandwich(np.broadcast_to(half, (len(gauges), 1, 2)), shared[:, _SPIN][:, :, _SPIN])[:, 0, 0]
    return {
        "tilt": (
            magnitude_sd(moved.tilt, moved.tilt_covariance),
            _root(np.asarray(tilt, dtype=np.float64)),
            _lengthened(moved.tilt_covariance),
        ),
        "spin": (np.sqrt(moved.spin_variance), _root(spin), np.zeros(len(gauges))),
    }


def _strains(gauges: Gauges, moved: Kinematics, axes: FloatArray) -> dict[str, Parts]:
    (a, b), (c, d) = np.moveaxis(np.einsum("gia,gib->gab", axes, gauges.frame[:, :, :2]), 0, -1)
    turn = np.stack([a * a, b * b, 2 * a * b, c * c, d * d, 2 * c * d, a * c, b * d, a * d + b * c], -1)
    own = sandwich(turn.reshape(-1, 3, 3), moved.strain_covariance)
    none = np.zeros(len(gauges))
    found = {name: (_root(own[:, k, k]), none, none) for k, name in enumerate(("strain_u", "strain_v", "shear_uv"))}
    larger, smaller = principal_sd(moved.strain, moved.strain_covariance)
    circle, spread = _circle(moved.strain, moved.strain_covariance)
    bias = _lengthened(spread)
    # the change of area is the sum of both strains to first order, which is enough for an error
    area = np.einsum("gij->g", moved.strain_covariance[:, :2, :2])
    return found | {
        "strain_1": (larger, none, bias),
        "strain_2": (smaller, none, -bias),
        "shear_max": (2.0 * magnitude_sd(circle, spread), none, 2.0 * bias),
        "dilation": (_root(area), none, none),
    }


def _bendings(moved: Kinematics, thickness: float) -> dict[str, Parts]:
    errors = principal_sd(moved.curvature, moved.curvature_covariance)
    bias = _lengthened(_circle(moved.curvature, moved.curvature_covariance)[1])
    none = np.zeros(len(bias))
    found = {}
    for number, (sd, sign) in enumerate(zip(errors, (1.0, -1.0), strict=True), start=1):
        found[f"curv_{number}"] = sd, none, sign * bias
        found[f"bend_{number}"] = 0.5 * thickness * sd, none, 0.5 * thickness * sign * bias
    return found


def _circle(components: FloatArray, covariance: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Radius of Mohr's circle as a vector (g, 2) and its covariance."""
    rows = np.array([[0.5, -0.5, 0.0], [0.0, 0.0, 1.0]])
    spread = sandwich(np.broadcast_to(rows, (len(components), 2, 3)), covariance)
    return np.asarray(components @ rows.T), np.asarray(spread)


def _lengthened(covariance: FloatArray) -> FloatArray:
    """Mean that noise adds to the length of a vector (g, 2, 2) at most: where the true length is zero."""
    return np.asarray(NULL_LENGTH * np.sqrt(np.einsum("gii->g", covariance)))


def _root(variance: FloatArray) -> FloatArray:
    return np.asarray(np.sqrt(np.maximum(variance, 0.0)))
