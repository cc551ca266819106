# SPDX-License-Identifier: MIT
"""What kind of object was scanned: the axis of a tunnel and its sections."""

from scanstrain.structures.axis import Axis, given_axis
from scanstrain.structures.centreline import fit_axis
from scanstrain.structures.section_table import section_rows, section_units
from scanstrain.structures.sections import Section, cut_sections, slice_thickness

__all__ = [
    "Axis",
    "Section",
    "cut_sections",
    "fit_axis",
    "given_axis",
    "section_rows",
    "section_units",
    "slice_thickness",
]
