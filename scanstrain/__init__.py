# SPDX-License-Identifier: MIT
"""Surface strain, rotation and displacement between two laser scans of the same structure.

Three stages, each a plain function: `register`, `fit_affine`, `compute_strain`; `compare` runs them all. Names are
loaded when first used, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from scanstrain.config import CompareConfig
    from scanstrain.epoch import Epoch, make_epoch
    from scanstrain.errors import ScanstrainError
    from scanstrain.io import read_scan
    from scanstrain.neighbourhood import AffineField, fit_affine
    from scanstrain.outputs import write_result
    from scanstrain.pipeline import compare, compare_epochs
    from scanstrain.registration import Registration, register
    from scanstrain.result import Result
    from scanstrain.strain import StrainField, compute_strain

__version__ = "0.1.0"

_HOMES = {
    "AffineField": "neighbourhood",
    "CompareConfig": "config",
    "Epoch": "epoch",
    "Registration": "registration",
    "Result": "result",
    "ScanstrainError": "errors",
    "StrainField": "strain",
    "compare": "pipeline",
    "compare_epochs": "pipeline",
    "compute_strain": "strain",
    "fit_affine": "neighbourhood",
    "make_epoch": "epoch",
    "read_scan": "io",
    "register": "registration",
    "write_result": "outputs",
}

__all__ = [
    "AffineField",
    "CompareConfig",
    "Epoch",
    "Registration",
    "Result",
    "ScanstrainError",
    "StrainField",
    "__version__",
    "compare",
    "compare_epochs",
    "compute_strain",
    "fit_affine",
    "make_epoch",
    "read_scan",
    "register",
    "write_result",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'scanstrain' has no attribute {name!r}")
    value = getattr(import_module(f"scanstrain.{_HOMES[name]}"), name)
    globals()[name] = value
    return value
