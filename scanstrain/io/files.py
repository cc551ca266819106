# SPDX-License-Identifier: MIT
"""Files as such: whether one is there, its size and its hash, and the error for a bad one."""

from __future__ import annotations

import hashlib
from pathlib import Path

from scanstrain.errors import InputFileError, explain


def file_size(path: Path) -> int:
    """Return the size of a regular, non-empty file [byte], or say what is wrong with it."""
    if not path.exists():
        raise InputFileError(explain(str(path), "a scan file", "no such file", "check the path"))
    if not path.is_file():
        raise InputFileError(explain(str(path), "a scan file", "a folder or device", "name the file itself"))
    size = path.stat().st_size
    if size == 0:
        raise InputFileError(explain(str(path), "a scan file", "an empty file (0 bytes)", "export the scan again"))
    return size


def refuse(path: Path, required: str, got: str, remedy: str = "export the scan again") -> InputFileError:
    """Make the error for a damaged file."""
    return InputFileError(explain(str(path), required, got, remedy))


def sha256(path: Path) -> str:
    """Return the SHA-256 of a file as hexadecimal digits, read in pieces."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()
