# SPDX-License-Identifier: MIT
"""How certain every quantity of a gauge is: its error, the part of the registration in it, and what noise adds."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich
from scanstrain.neighbourhood.result import PARAMETERS
from scanstrain.strain.axes import turned_components
from scanstrain.strain.bending import bending_strain
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
    gauges: Gauges, moved: Kinematics, axes: FloatArray, bending: FloatArray | None, values: Mapping[str, FloatArray]
) -> dict[str, Certainty]:
    """Gather what is known about the errors of every quantity that can be held against a limit.

    Parameters
    ----------
    gauges : Gauges
    moved : Kinematics
    axes : ndarray of shape (g, 3, 2)
        Tangents u and v of the structure at the fitted gauges.
    bending : ndarray of shape (g, 3, 3), optional
        From a change of curvature to the strain of bending, where a thickness is known.
    values : mapping of str to ndarray of shape (g,)
        The quantities at the fitted gauges; an error is given where the value is.

    Returns
    -------
    dict of str to Certainty
        Over all gauges of the field.
    """
    found = {**_displacements(gauges), **_rotations(gauges, moved), **_strains(gauges, moved, axes)}
    found |= _principal("curv", moved.curvature, moved.curvature_covariance)
    mapping = np.zeros((len(gauges), 3, 3)) if bending is None else bending
    bent, spread = bending_strain(moved.curvature, mapping), sandwich(mapping, moved.curvature_covariance)
    found |= _principal("bend", bent, np.asarray(spread))
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
    own = sandwich(turned_components(axes, gauges.frame), moved.strain_covariance)
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


def _principal(name: str, components: FloatArray, covariance: FloatArray) -> dict[str, Parts]:
    """Errors of the larger and the smaller principal value of tensors that do not depend on the datum."""
    bias = _lengthened(_circle(components, covariance)[1])
    none = np.zeros(len(bias))
    errors = zip(principal_sd(components, covariance), (1.0, -1.0), strict=True)
    return {f"{name}_{number}": (sd, none, sign * bias) for number, (sd, sign) in enumerate(errors, start=1)}


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
