# SPDX-License-Identifier: MIT
"""Whole numbers as short text: differences between neighbours, deflated, in base64."""

from __future__ import annotations

import base64
import zlib
from typing import Any

import numpy as np
from numpy.typing import NDArray

LEVEL = 6
"""Effort of deflate: level 9 takes three times as long and saves 1 %."""


def packed(codes: NDArray[np.uint8] | NDArray[np.uint16]) -> str:
    """Pack codes (n,) of 8 or 16 bits.

    Neighbours in space are alike, so the difference to the one before is small. It is taken modulo 2^bits, folded to
    a number without sign (0, -1, 1, -2, ... become 0, 1, 2, 3, ...), and the low bytes stand before the high ones.
    """
    bits = 8 * codes.dtype.itemsize
    steps = np.diff(codes.astype(np.int64), prepend=0)
    half = 1 << (bits - 1)
    steps = np.mod(steps + half, 2 * half) - half
    folded = np.where(steps < 0, -2 * steps - 1, 2 * steps).astype(f"<u{codes.dtype.itemsize}")
    planes = folded.view(np.uint8).reshape(len(codes), -1).T
    return text(zlib.compress(np.ascontiguousarray(planes).tobytes(), LEVEL))


def text(data: bytes | NDArray[Any]) -> str:
    """Write bytes as base64."""
    return base64.b64encode(data if isinstance(data, bytes) else data.tobytes()).decode("ascii")
