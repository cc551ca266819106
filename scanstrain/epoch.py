# SPDX-License-Identifier: MIT
"""One scan of the object at one date, in a local frame shared by the epochs that are compared."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import InputFileError, explain

FloatArray = NDArray[np.float64]

MIN_POINTS = 100
"""Fewer points cannot show a surface and its noise."""


@dataclass(frozen=True, slots=True)
class Provenance:
    """Where an epoch came from; carried into `summary.json`, never used by the numerics.

    `unit` names the unit of the file and `unit_factors` are metres per file unit along x, y, z. `kept` says which
    points of the file are points of the epoch (None: all of them); `crs` is WKT.
    """

    path: str = ""
    sha256: str = ""
    crs: str | None = None
    unit: str = "metre"
    date: str | None = None
    file_points: int = 0
    dropped_points: int = 0
    notices: tuple[str, ...] = ()
    header: Any = None
    unit_factors: tuple[float, float, float] = (1.0, 1.0, 1.0)
    kept: NDArray[np.bool_] | None = field(default=None, compare=False, repr=False)


@dataclass(frozen=True, slots=True)
class Epoch:
    """Points of one scan, in metres, after subtraction of `origin`.

    Parameters
    ----------
    points : ndarray of shape (n, 3), float64
        Local coordinates [m]: file coordinates minus `origin`.
    origin : ndarray of shape (3,), float64
        What was subtracted [m]. Epochs that are compared share one origin.
    intensity : ndarray of shape (n,), float32, optional
        Returned intensity in the file's own units.
    colour : ndarray of shape (n, 3), float32, optional
        Red, green, blue in the file's own units.
    setup : ndarray of shape (n,), uint16, optional
        Number of the scanner set-up (LAS point source id).
    classification : ndarray of shape (n,), uint8, optional
        LAS classification codes.
    label : str
        Name of the epoch in messages and folder names.
    """

    points: FloatArray
    origin: FloatArray
    intensity: NDArray[np.float32] | None = None
    colour: NDArray[np.float32] | None = None
    setup: NDArray[np.uint16] | None = None
    classification: NDArray[np.uint8] | None = None
    label: str = ""
    provenance: Provenance = field(default_factory=Provenance)

    def __len__(self) -> int:
        return len(self.points)

    def moved(self, T: FloatArray) -> Epoch:
        """Return the epoch with its local points transformed by the 4x4 matrix `T`."""
        return replace(self, points=moved_points(self.points, T))

    def shifted(self, origin: FloatArray) -> Epoch:
        """Return the same points relative to another origin [m]."""
        return replace(self, points=self.points + (self.origin - origin), origin=np.asarray(origin, float))


def moved_points(points: FloatArray, T: FloatArray) -> FloatArray:
    """Transform points (n, 3) by a 4x4 matrix."""
    return np.asarray(points @ T[:3, :3].T + T[:3, 3])


def make_epoch(
    coordinates: FloatArray,
    *,
    origin: FloatArray | None = None,
    label: str = "scan",
    **attributes: Any,
) -> Epoch:
    """Make an epoch from file coordinates, checking what every later stage relies on.

    Parameters
    ----------
    coordinates : array_like of shape (n, 3)
        Coordinates [m], large survey values welcome.
    origin : array_like of shape (3,), optional
        Shared origin [m]. By default the centre of the bounding box, rounded to a metre.
    label : str
        Name for messages.
    **attributes
        `intensity`, `colour`, `setup`, `classification`, `provenance`, as in `Epoch`.

    Raises
    ------
    InputFileError
        Wrong shape, values that are not finite, fewer than 100 points, or all points in one place.
    """
    xyz = np.asarray(coordinates, dtype=np.float64)
    if xyz.ndim != 2 or xyz.shape[1] != 3:
        raise InputFileError(explain(label, "coordinates of shape (n, 3)", f"shape {xyz.shape}", "stack x, y, z"))
    if len(xyz) < MIN_POINTS:
        raise InputFileError(
            explain(label, f"at least {MIN_POINTS} points", f"{len(xyz)}", "check that this is the whole scan")
        )
    if not np.isfinite(xyz).all():
        bad = int((~np.isfinite(xyz).all(axis=1)).sum())
        raise InputFileError(explain(label, "finite coordinates", f"{bad} points with NaN or infinity", "remove them"))
    low, high = xyz.min(axis=0), xyz.max(axis=0)
    if not (high > low).any():
        raise InputFileError(
            explain(label, "points that span a surface", "all points in one place", "export the scan again")
        )
    centre = np.round((low + high) / 2) if origin is None else np.asarray(origin, dtype=np.float64)
    for name in ("intensity", "colour", "setup", "classification"):
        values = attributes.get(name)
        if values is not None and len(values) != len(xyz):
            raise InputFileError(
                explain(
                    f"{label}: {name}",
                    f"one value a point ({len(xyz)})",
                    f"{len(values)}",
                    "match the lengths",
                )
            )
    return Epoch(points=xyz - centre, origin=centre, label=label, **attributes)
