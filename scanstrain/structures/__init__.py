# SPDX-License-Identifier: MIT
"""What kind of object was scanned: the axis of a tunnel and its sections, the face of a wall and its movement."""

from scanstrain.structures.axis import Axis, given_axis
from scanstrain.structures.centreline import fit_axis
from scanstrain.structures.section_table import section_rows, section_units
from scanstrain.structures.sections import Section, cut_sections, slice_thickness
from scanstrain.structures.wall import Wall
from scanstrain.structures.wall_face import fit_wall
from scanstrain.structures.wall_movement import WallResult, measure_wall
from scanstrain.structures.wall_table import bulge_rows, bulge_units, wall_rows, wall_units

__all__ = [
    "Axis",
    "Section",
    "Wall",
    "WallResult",
    "bulge_rows",
    "bulge_units",
    "cut_sections",
    "fit_axis",
    "fit_wall",
    "given_axis",
    "measure_wall",
    "section_rows",
    "section_units",
    "slice_thickness",
    "wall_rows",
    "wall_units",
]
