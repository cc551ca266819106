# SPDX-License-Identifier: MIT
"""The rigid transform alone, in a file that another program can apply."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.strict import write_json
from scanstrain.registration.result import Registration
from scanstrain.result import Result

COVARIANCE_ORDER = ("rotation_x", "rotation_y", "rotation_z", "translation_x", "translation_y", "translation_z")
DIRECTION = (
    "Multiply the CURRENT epoch's file coordinates (column vector x, y, z, 1) by this matrix "
    "to obtain the REFERENCE frame. Both are in metres: where a file has another unit, "
    "multiply by metres_per_file_unit first."
)
PIVOT = "reference = R (current - pivot) + pivot + translation, with R from the rotation vector"


def write_registered(result: Result, folder: Path, options: OutputOptions) -> Path:  # noqa: ARG001
    """Write `registered.json`."""
    content = {
        "reads": DIRECTION,
        "reference": Path(result.reference.provenance.path).name or result.reference.label,
        "current": Path(result.current.provenance.path).name or result.current.label,
        "axes": ["x", "y", "z"],
        "unit": "metre",
        "metres_per_file_unit": {
            epoch: getattr(result, epoch).provenance.unit_factors for epoch in ("reference", "current")
        },
        **rigid_motion(result.registration),
        "converged": result.registration.converged,
    }
    return write_json(content, folder / "registered.json")


def rigid_motion(registration: Registration) -> dict[str, Any]:
    """Describe the rigid motion from the current into the reference epoch in file coordinates.

    Returns
    -------
    dict
        `matrix` (4x4, row by row), `rotation_vector` [rad], `translation` [m] at `pivot` [m], and `covariance` (6x6)
        of rotation and translation in `covariance_order`.
    """
    from scipy.spatial.transform import Rotation

    R, t = registration.T_ref_cur[:3, :3], registration.T_ref_cur[:3, 3]
    pivot = registration.pivot
    return {
        "matrix": registration.file_matrix(),
        "matrix_order": "row-major, 4x4, current to reference, file coordinates",
        "rotation_vector": Rotation.from_matrix(R).as_rotvec(),
        "translation": R @ pivot + t - pivot,
        "pivot": pivot + registration.origin,
        "pivot_form": PIVOT,
        "covariance": registration.covariance,
        "covariance_order": COVARIANCE_ORDER,
    }
