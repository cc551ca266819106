# SPDX-License-Identifier: MIT
"""The classes that a kept stage may hold; no other can be made from a file."""

from __future__ import annotations

from scanstrain.neighbourhood.joint_jumps import JointJumps, Side
from scanstrain.neighbourhood.joint_lines import Joint
from scanstrain.neighbourhood.result import AffineField, Correlation, SharedNoise
from scanstrain.registration.result import Registration, StableBlocks, StableGround, WeakDirection
from scanstrain.registration.seams import Seam
from scanstrain.registration.targets import TargetFit
from scanstrain.shape import Shape
from scanstrain.strain.bodies import BodyMotion
from scanstrain.strain.calibration import Calibration
from scanstrain.strain.congruence import Congruence
from scanstrain.strain.result import Certainty, MeasureDifference, StrainField
from scanstrain.structures import Axis, Section, Wall, WallResult
from scanstrain.structures.bulge import Bulge
from scanstrain.structures.ellipse import Ellipse
from scanstrain.structures.harmonics import Harmonics
from scanstrain.structures.outline import Outline
from scanstrain.structures.wall_parts import Part

ALLOWED: dict[str, type] = {
    each.__name__: each
    for each in (
        AffineField,
        Axis,
        BodyMotion,
        Bulge,
        Calibration,
        Certainty,
        Congruence,
        Correlation,
        Ellipse,
        Harmonics,
        Joint,
        JointJumps,
        MeasureDifference,
        Outline,
        Part,
        Registration,
        Seam,
        Section,
        Shape,
        SharedNoise,
        Side,
        StableBlocks,
        StableGround,
        StrainField,
        TargetFit,
        Wall,
        WallResult,
        WeakDirection,
    )
}
