# SPDX-License-Identifier: MIT
"""Neighbourhood stage: local affine maps from the reference to the current surface."""

from scanstrain.neighbourhood.affine import fit_affine
from scanstrain.neighbourhood.result import AffineField, Observed, Status

__all__ = ["AffineField", "Observed", "Status", "fit_affine"]
