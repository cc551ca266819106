# SPDX-License-Identifier: MIT
"""The one table of what is written per point and per gauge: name, unit, kind, meaning.

Descriptions go into LAS extra-byte descriptors, which hold 32 bytes (ASPRS LAS 1.4 R15, table 24).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

Kind = Literal["signed", "magnitude", "error", "probability", "code", "place"]


@dataclass(frozen=True, slots=True)
class Attribute:
    """One written quantity.

    `kind` says how it is coloured: signed about zero, magnitude from zero, standard error, probability, code, or place
    on the object. `person` is the unit for text that a person reads and `factor` what the stored value is multiplied by
    for it.
    """

    name: str
    unit: str
    kind: Kind
    description: str
    dtype: str = "float32"
    person: str = ""
    factor: float = 1.0

    @property
    def numpy_dtype(self) -> np.dtype[np.generic]:
        """The stored NumPy type."""
        return np.dtype(self.dtype)


def _length(name: str, kind: Kind, description: str) -> Attribute:
    return Attribute(name, "m", kind, description, person="mm", factor=1e3)


def _strain(name: str, kind: Kind, description: str) -> Attribute:
    return Attribute(name, "1", kind, description, person="µε", factor=1e6)


def _angle(name: str, kind: Kind, description: str) -> Attribute:
    return Attribute(name, "rad", kind, description, person="mrad", factor=1e3)


def _curvature(name: str, kind: Kind, description: str) -> Attribute:
    return Attribute(name, "1/m", kind, description, person="1/km", factor=1e3)


ATTRIBUTES: tuple[Attribute, ...] = (
    _length("disp_x", "signed", "m displacement x"),
    _length("disp_y", "signed", "m displacement y"),
    _length("disp_z", "signed", "m displacement z"),
    _length("disp_n", "signed", "m displacement to free side"),
    _length("disp_n_sd", "error", "m std error of disp_n"),
    _strain("strain_xx", "signed", "1 surface strain xx"),
    _strain("strain_yy", "signed", "1 surface strain yy"),
    _strain("strain_zz", "signed", "1 surface strain zz"),
    _strain("strain_xy", "signed", "1 tensor shear strain xy"),
    _strain("strain_xz", "signed", "1 tensor shear strain xz"),
    _strain("strain_yz", "signed", "1 tensor shear strain yz"),
    _strain("strain_1", "signed", "1 larger principal, noise-biased"),
    _strain("strain_2", "signed", "1 smaller principal,noise-biased"),
    _strain("strain_1_sd", "error", "1 std error of strain_1"),
    _strain("strain_2_sd", "error", "1 std error of strain_2"),
    _strain("shear_max", "magnitude", "1 strain_1-strain_2, engineering"),
    _strain("dilation", "signed", "1 relative change of area"),
    _strain("strain_u", "signed", "1 hoop or horizontal strain"),
    _strain("strain_v", "signed", "1 axial or upward strain"),
    _strain("shear_uv", "signed", "1 tensor shear strain uv"),
    _angle("rot_x", "signed", "rad rotation vector x"),
    _angle("rot_y", "signed", "rad rotation vector y"),
    _angle("rot_z", "signed", "rad rotation vector z"),
    _angle("tilt", "magnitude", "rad rotation of the normal"),
    _angle("tilt_sd", "error", "rad std error of tilt"),
    _angle("spin", "signed", "rad rotation about the normal"),
    _angle("spin_sd", "error", "rad std error of spin"),
    _curvature("curv_1", "signed", "1/m larger curvature change"),
    _curvature("curv_2", "signed", "1/m smaller curvature change"),
    _curvature("curv_sd", "error", "1/m std error of curvature"),
    _strain("bend_1", "signed", "1 larger face bending strain"),
    _strain("bend_2", "signed", "1 smaller face bending strain"),
    Attribute("significance", "1", "probability", "1 p-value of no change here"),
    Attribute("discovery", "1", "code", "1 = change survives FDR control", "uint8"),
    Attribute("observed", "1", "code", "bits n tilt curv u v strain spin", "uint8"),
    Attribute("status", "1", "code", "0 fine, else a reason code", "uint8"),
    Attribute("stable", "1", "code", "1 = used as stable ground", "uint8"),
    Attribute("gauge_points", "1", "code", "reference points in the fit", "uint16"),
    Attribute("chainage", "m", "place", "m along the tunnel axis", person="m"),
    Attribute("clock", "rad", "place", "rad from the crown, clockwise", person="rad"),
)

BY_NAME = {attribute.name: attribute for attribute in ATTRIBUTES}

JUDGED = (
    "disp_x", "disp_y", "disp_z", "disp_n", "strain_1", "strain_2", "shear_max", "dilation", "strain_u", "strain_v",
    "shear_uv", "tilt", "spin", "curv_1", "curv_2", "bend_1", "bend_2",
)  # fmt: skip
"""Attributes whose error is known at every gauge, so that they can be averaged and held against limits."""

OF_BODIES = {
    "shift": ("m", "movement along the mean normal of a part, positive to its free side"),
    "lean": ("rad", "rotation about the horizontal in the plane of a part, positive where its top came forward"),
    "yaw": ("rad", "rotation of a part about the vertical, anticlockwise seen from above"),
    "mean_disp_n": ("m", "mean normal displacement of a part"),
}
"""Unit and meaning of what the object or a zone has as a whole."""
