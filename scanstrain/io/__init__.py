# SPDX-License-Identifier: MIT
"""Scan files in, result clouds out. A format is one module; importing it here registers it."""

from __future__ import annotations

from pathlib import Path

from numpy.typing import ArrayLike

from scanstrain.epoch import Epoch
from scanstrain.io import e57, las, ply, text  # noqa: F401 - each registers its format
from scanstrain.io.files import file_size
from scanstrain.io.formats import FORMATS, format_of
from scanstrain.io.frames import check_same_frame
from scanstrain.io.las_result import read_result_cloud, write_result_cloud
from scanstrain.io.stored import expand_to_file
from scanstrain.io.targets import read_targets
from scanstrain.io.transform import read_transform

__all__ = [
    "FORMATS",
    "check_same_frame",
    "expand_to_file",
    "read_result_cloud",
    "read_scan",
    "read_targets",
    "read_transform",
    "write_result_cloud",
]


def read_scan(path: str | Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read one scan, whatever its format; the suffix decides.

    Parameters
    ----------
    path : path
        The file; only read.
    origin : array_like of shape (3,), optional
        Shared origin [m] to subtract; by default the centre of the scan, rounded to a metre. Give the origin of the
        reference when reading the current epoch.
    label : str, optional
        Name of the epoch; by default the name of the file.

    Returns
    -------
    Epoch
        Points in metres. `epoch.provenance` says what was dropped, scaled or doubtful.

    Raises
    ------
    InputFileError
        Missing, empty, cut, damaged or of an unknown kind; degrees; too few points.
    """
    path = Path(path)
    file_size(path)
    return format_of(path).read(path, origin=origin, label=label)
