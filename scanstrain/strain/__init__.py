# SPDX-License-Identifier: MIT
"""Strain stage: from local affine maps to strain, rotation and bending with standard errors."""

from scanstrain.strain.calibration import Calibration, calibrate, share_around
from scanstrain.strain.comparison import compare_measures
from scanstrain.strain.compute import compute_strain
from scanstrain.strain.points import blend_to_points
from scanstrain.strain.result import StrainField

__all__ = [
    "Calibration",
    "StrainField",
    "blend_to_points",
    "calibrate",
    "compare_measures",
    "compute_strain",
    "share_around",
]
