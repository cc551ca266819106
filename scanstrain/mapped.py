# SPDX-License-Identifier: MIT
"""Arrays that live in files: made, walked in pieces, and let go of, so that they do not count as memory in use."""

from __future__ import annotations

import mmap
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

ROWS = 1_000_000
"""Rows that are taken at a time."""


def make_mapped(path: Path, shape: tuple[int, ...], dtype: Any) -> NDArray[Any]:
    """Make an array of zeros in a new file."""
    return np.memmap(path, dtype=dtype, mode="w+", shape=shape)


def is_mapped(array: object) -> bool:
    """Whether an array, or what it is a view of, lives in a file."""
    while isinstance(array, np.ndarray):
        if isinstance(array, np.memmap):
            return True
        array = array.base
    return False


def release(*arrays: object) -> None:
    """Let the pages of arrays in files go; what they hold stays, and comes back when it is looked at."""
    for array in arrays:
        while isinstance(array, np.ndarray) and not isinstance(array.base, mmap.mmap):
            array = array.base
        held = array.base if isinstance(array, np.ndarray) else None
        if isinstance(held, mmap.mmap):
            held.madvise(mmap.MADV_DONTNEED)


def slices(count: int, rows: int = ROWS) -> Iterator[slice]:
    """Yield the slices that cover so many rows."""
    for start in range(0, count, rows):
        yield slice(start, min(start + rows, count))
