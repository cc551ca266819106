# SPDX-License-Identifier: MIT
"""What one comparison of two epochs gives: everything that the outputs are written from."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from dataclasses import field as default
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.joint_jumps import JointJumps
from scanstrain.neighbourhood.result import AffineField
from scanstrain.registration.result import Registration
from scanstrain.registration.seams import Seam
from scanstrain.strain.bodies import BodyMotion
from scanstrain.strain.calibration import Calibration
from scanstrain.strain.result import StrainField
from scanstrain.structures import Axis, Section, WallResult

FloatArray = NDArray[np.float64]

WHOLE = "whole object"
"""Name of the part that all gauges belong to."""


@dataclass(frozen=True, slots=True)
class Result:
    """One finished comparison; holds arrays and provenance, nothing that is open or written.

    Parameters
    ----------
    reference, current : Epoch
        The two scans as read, in one shared local frame, the current one not yet moved.
    registration : Registration
        The rigid motion from the current epoch into the reference frame.
    field : AffineField
        Local affine maps, one per gauge.
    calibration : Calibration
        Factors by which standard errors were raised to match the scatter on stable ground.
    strain : StrainField
        Strain, rotation and their errors, one row per gauge, in the same order as `field`.
    points : mapping of str to ndarray of shape (n,)
        Every attribute of `scanstrain.attributes.ATTRIBUTES` at the n points of `reference`, in their order and in
        the attribute's type; NaN where the data do not support a value.
    config : pydantic model
        The resolved configuration; anything with `model_dump(mode="json")` and the tables that outputs ask for.
    timing : mapping of str to float
        Seconds per stage.
    warnings : tuple of str
        Sentences for the user, in the order in which they arose.
    bodies : tuple of BodyMotion
        Rigid motion after registration of the whole object and of each zone.
    zones : mapping of str to ndarray of shape (g,), bool
        Gauges of each zone by its name.
    seams : mapping of str to tuple of Seam
        For "reference" and "current": how the set-ups of the epoch lie against one another.
    axis : Axis or None
        Of a tunnel, found on the reference epoch or given.
    sections : tuple of Section
        Square to that axis.
    wall : WallResult or None
        Movement of the face of a wall and of its parts.
    joints : tuple of JointJumps
        What the joints did that the user named.
    scratch : optional
        Holds the files of arrays that do not live in memory.
    """

    reference: Epoch
    current: Epoch
    registration: Registration
    field: AffineField
    calibration: Calibration
    strain: StrainField
    points: Mapping[str, NDArray[np.generic]]
    config: Any
    timing: Mapping[str, float]
    warnings: tuple[str, ...] = ()
    bodies: tuple[BodyMotion, ...] = ()
    zones: Mapping[str, NDArray[np.bool_]] = default(default_factory=dict)
    seams: Mapping[str, tuple[Seam, ...]] = default(default_factory=dict)
    axis: Axis | None = None
    sections: tuple[Section, ...] = ()
    wall: WallResult | None = None
    joints: tuple[JointJumps, ...] = ()
    scratch: TemporaryDirectory[str] | None = None

    def close(self) -> None:
        """Remove the files behind the arrays of a result from tiles, which cannot be used after that."""
        if self.scratch is not None:
            self.scratch.cleanup()

    @property
    def gauge_positions(self) -> FloatArray:
        """Gauge places in file coordinates, shape (g, 3) [m]."""
        return np.asarray(self.strain.position + self.reference.origin)
