# SPDX-License-Identifier: MIT
"""A rigid motion from a file: sixteen numbers as text, or a `registered.json`."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import InputFileError
from scanstrain.io.files import file_size, refuse

FloatArray = NDArray[np.float64]

LARGEST_FILE = 1_000_000
"""A file with a matrix and its covariance is a few thousand bytes; far more is something else [byte]."""
TOLERANCE = 1e-6
"""Largest deviation of R R' from the identity: what seven printed digits leave."""
MATRIX = "a 4x4 matrix of a rotation and a translation in metres, current to reference, row by row"
COVARIANCE_ORDER = ["rotation_x", "rotation_y", "rotation_z", "translation_x", "translation_y", "translation_z"]


@dataclass(frozen=True, slots=True)
class FileTransform:
    """Rigid motion from the current to the reference epoch, in file coordinates in metres.

    Parameters
    ----------
    T_ref_cur : ndarray of shape (4, 4)
        [m]
    covariance : ndarray of shape (6, 6) or None
        Of (rotation vector [rad], translation at the pivot [m]).
    pivot : ndarray of shape (3,) or None
        [m]
    """

    T_ref_cur: FloatArray
    covariance: FloatArray | None = None
    pivot: FloatArray | None = None


def read_transform(path: Path) -> FileTransform:
    """Read a rigid motion.

    Text holds sixteen numbers, row by row, with spaces, commas or semicolons between them; lines that begin with #
    are comments. JSON is a `registered.json` as this program writes it, with its covariance where it has one.

    Parameters
    ----------
    path : Path

    Returns
    -------
    FileTransform

    Raises
    ------
    InputFileError
        Not such a file, or a matrix that is no rigid motion.
    """
    if file_size(path) > LARGEST_FILE:
        raise refuse(path, MATRIX, "a file that is far larger", "name the file with the matrix")
    try:
        text = path.read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise refuse(path, MATRIX, "a file that is not text", "name the file with the matrix") from error
    if text.lstrip().startswith(("{", "[")):
        return _from_json(path, text)
    return FileTransform(_checked(path, _numbers(path, text)))


def _numbers(path: Path, text: str) -> FloatArray:
    kept = [line for line in text.splitlines() if not line.lstrip().startswith("#")]
    words = " ".join(kept).replace(",", " ").replace(";", " ").split()
    values = []
    for word in words:
        try:
            values.append(float(word))
        except ValueError as error:
            raise refuse(path, "sixteen numbers", f"{word[:40]!r}", "keep the numbers only") from error
    if len(values) != 16:
        got = f"{len(values)} numbers"
        raise refuse(path, "sixteen numbers, four in a row, with decimal dots", got, "write the whole 4x4 matrix")
    return np.array(values).reshape(4, 4)


def _from_json(path: Path, text: str) -> FileTransform:
    try:
        content = json.loads(text)
    except ValueError as error:
        raise refuse(path, "a registered.json", f"JSON that cannot be read: {error}", "write it again") from error
    if not isinstance(content, dict) or not {"matrix", "reads"} <= content.keys():
        raise refuse(path, "a registered.json with matrix and reads", "JSON of something else", "name the right file")
    if content.get("unit", "metre") != "metre":
        raise refuse(path, "a matrix in metres", f"the unit {content['unit']!r}", "convert its translation")
    T = _checked(path, _array(path, content, "matrix", (4, 4)))
    if content.get("covariance") is None:
        return FileTransform(T)
    if content.get("covariance_order", COVARIANCE_ORDER) != COVARIANCE_ORDER:
        raise refuse(path, f"a covariance in the order {COVARIANCE_ORDER}", f"{content['covariance_order']}", "reorder")
    return FileTransform(T, _array(path, content, "covariance", (6, 6)), _array(path, content, "pivot", (3,)))


def _array(path: Path, content: dict[str, Any], name: str, shape: tuple[int, ...]) -> FloatArray:
    try:
        values = np.array(content.get(name), np.float64)
    except (TypeError, ValueError) as error:
        raise refuse(path, f"{name} as numbers of shape {shape}", "something else", "write the file again") from error
    if values.shape != shape or not np.isfinite(values).all():
        raise refuse(path, f"{name} as finite numbers of shape {shape}", f"shape {values.shape}", "write it again")
    return values


def _checked(path: Path, T: FloatArray) -> FloatArray:
    """Return the matrix if it is rigid, or say what it looks like."""
    if not np.isfinite(T).all():
        raise refuse(path, MATRIX, "NaN or infinity", "write the matrix again")
    if np.abs(T[3] - [0, 0, 0, 1]).max() > TOLERANCE:
        raise _last_row(path, T)
    R = T[:3, :3]
    if np.abs(R @ R.T - np.eye(3)).max() <= TOLERANCE and np.linalg.det(R) > 0:
        T[3] = [0, 0, 0, 1]
        return T
    scale = float(np.cbrt(abs(np.linalg.det(R))))
    if scale > 0 and np.abs(R @ R.T / scale**2 - np.eye(3)).max() <= TOLERANCE * 10:
        if np.linalg.det(R) < 0:
            raise refuse(path, MATRIX, "a matrix that mirrors (determinant below 0)", "check the order of the axes")
        got = f"a matrix that scales by {scale:.9g}"
        raise refuse(path, MATRIX, got, "take the scale out: it would absorb strain")
    off = float(np.abs(R @ R.T - np.eye(3)).max())
    got = f"nine numbers that are no rotation: R R' differs from the identity by {off:.2g}"
    raise refuse(path, MATRIX, got, "write the matrix with at least nine digits")


def _last_row(path: Path, T: FloatArray) -> InputFileError:
    if np.abs(T[:, 3] - [0, 0, 0, 1]).max() <= TOLERANCE:
        return refuse(path, MATRIX, "a transposed matrix, with the translation in the last row", "transpose it")
    return refuse(path, MATRIX, f"a last row of {T[3].tolist()}", "end it with 0 0 0 1")
