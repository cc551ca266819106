# SPDX-License-Identifier: MIT
"""Strict JSON: what is not a number is null, never a literal that other readers refuse (RFC 8259, section 6)."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np


def plain(value: Any) -> Any:
    """Turn NumPy values, tuples and paths into what JSON has; NaN and infinity into None.

    >>> plain({"a": np.array([1.0, np.nan]), "b": (np.int64(3), "x")})
    {'a': [1.0, None], 'b': [3, 'x']}
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, np.ndarray):
        return plain(value.tolist())
    if isinstance(value, (list, tuple)):
        return [plain(item) for item in value]
    if isinstance(value, np.generic):
        return plain(value.item())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    return str(value) if isinstance(value, Path) else value


def write_json(content: Mapping[str, Any], target: Path) -> Path:
    """Write a mapping as UTF-8 JSON for people and programs."""
    text = json.dumps(plain(content), indent=2, ensure_ascii=False, allow_nan=False)
    target.write_text(text + "\n", encoding="utf-8")
    return target
