# SPDX-License-Identifier: MIT
"""The table of joints: one row a place and one for each joint as a whole, names and units in the first two rows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.joint_jumps import JUMPS, JointJumps
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.section_table import write_rows
from scanstrain.result import Result

FloatArray = NDArray[np.float64]
Row = dict[str, float | int | str]

FILE = "joints.csv"
WHOLE = "whole"
"""In the column `place` of the row that speaks of a joint as a whole."""

COLUMNS: Mapping[str, tuple[str, str]] = {
    "joint": ("", "name of the joint"),
    "place": ("", "number of the place along the line, or the joint as a whole"),
    "along": ("m", "distance from the start of the line"),
    "x": ("m", "place, file coordinates"),
    "y": ("m", "place, file coordinates"),
    "z": ("m", "place, file coordinates"),
    "opening": ("m", "across the joint in the surface; positive = it opens"),
    "opening_sd": ("m", "its standard error"),
    "slip": ("m", "along the joint; positive = seen across it, the other side moves to the left"),
    "slip_sd": ("m", "its standard error"),
    "step": ("m", "along the normal; positive = the side to the right of the line moves to the free side"),
    "step_sd": ("m", "its standard error"),
    "hinge": ("rad", "rotation about the line; positive = it opens at the free side"),
    "hinge_sd": ("rad", "its standard error"),
    "significance": ("1", "p-value of no movement across the joint"),
    "points_right": ("1", "reference points behind the fit of the right side"),
    "points_left": ("1", "reference points behind the fit of the left side"),
    "reason": ("", "why a value is missing"),
}
"""Unit and meaning of every column."""


def joint_rows(joints: Sequence[JointJumps], origin: FloatArray) -> list[Row]:
    """Return one row for each place and, after them, one for the joint as a whole.

    Parameters
    ----------
    joints : sequence of JointJumps
        What the joints did.
    origin : ndarray of shape (3,)
        Of local coordinates, in file coordinates [m].

    Returns
    -------
    list of dict
        Keys as in `COLUMNS`; SI units, places in file coordinates, NaN for what the data do not support.
    """
    rows: list[Row] = []
    for joint in joints:
        rows += [_place_row(joint, k, origin) for k in range(len(joint))]
        whole: Row = dict.fromkeys(COLUMNS, "")
        whole |= {"joint": joint.name, "place": WHOLE, "significance": joint.mean_significance}
        rows.append(whole | _jump(joint.mean, joint.mean_sd))
    return rows


def write_joint_table(result: Result, folder: Path, options: OutputOptions) -> Path | None:  # noqa: ARG001
    """Write `joints.csv` in SI units and file coordinates; nothing where there are no joints."""
    if not result.joints:
        return None
    return write_rows(joint_rows(result.joints, result.reference.origin), COLUMNS, folder / FILE)


def _place_row(joint: JointJumps, k: int, origin: FloatArray) -> Row:
    x, y, z = (float(c) for c in joint.position[k] + origin)
    right, left = (int(n) for n in joint.points[k])
    row: Row = {"joint": joint.name, "place": k + 1, "along": float(joint.along[k]), "x": x, "y": y, "z": z}
    row |= _jump(joint.values[k], joint.sd[k])
    row |= {"significance": float(joint.significance[k]), "points_right": right, "points_left": left}
    return row | {"reason": joint.reason(k)}


def _jump(values: FloatArray, errors: FloatArray) -> Row:
    """Components and standard errors by name."""
    named: Row = {}
    for name, value, error in zip(JUMPS, values, errors, strict=True):
        named[name], named[f"{name}_sd"] = float(value), float(error)
    return named
