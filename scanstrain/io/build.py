# SPDX-License-Identifier: MIT
"""From what a file holds to an epoch: units, screening, provenance. Shared by every format."""

from __future__ import annotations

from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import MIN_POINTS, Epoch, Provenance, make_epoch
from scanstrain.errors import InputFileError, explain
from scanstrain.io.crs import FileFrame
from scanstrain.io.files import sha256
from scanstrain.io.screening import screen

COARSE_STEP = 0.001
"""Coordinate step [m] above which rounding (step / sqrt 12) is no longer small beside a scanner's noise."""


@dataclass(slots=True)
class RawScan:
    """What a format reader hands over, one row per point of the file, nothing dropped.

    Parameters
    ----------
    coordinates : ndarray of shape (n, 3), float64
        In the unit of the file. Taken over: scaled in place.
    step : float
        Largest distance between neighbouring coordinate values that the file can hold, in its own unit.
    """

    path: Path
    coordinates: NDArray[np.float64]
    frame: FileFrame
    step: float = 0.0
    intensity: NDArray[np.generic] | None = None
    colour: NDArray[np.generic] | None = None
    setup: NDArray[np.uint16] | None = None
    classification: NDArray[np.uint8] | None = None
    without_value: NDArray[np.bool_] | None = None
    withheld: NDArray[np.bool_] | None = None
    date: str | None = None
    header: Any = None
    notices: tuple[str, ...] = ()


def build_epoch(raw: RawScan, *, origin: ArrayLike | None, label: str | None) -> Epoch:
    """Scale to metres, drop what cannot be a point of the object, and make the epoch.

    Raises
    ------
    InputFileError
        Fewer than 100 usable points, more than half of the points unusable, or all points in one place.
    """
    factors = raw.frame.factors
    if factors != (1.0, 1.0, 1.0):
        raw.coordinates *= factors
    screening = screen(raw.coordinates, without_value=raw.without_value, withheld=raw.withheld)
    total, kept = len(screening.kept), len(screening.kept) - screening.dropped
    check_kept(raw.path, total, kept, screening.notices)
    everything = kept == total
    chosen: Any = slice(None) if everything else screening.kept
    notices = raw.notices + raw.frame.notices + screening.notices + step_notices(raw.step * max(factors))
    provenance = Provenance(
        path=str(raw.path), sha256=sha256(raw.path), crs=raw.frame.wkt, unit=raw.frame.unit, date=raw.date,
        file_points=total, dropped_points=total - kept, notices=notices, header=raw.header,
        unit_factors=factors, kept=None if everything else screening.kept,
    )  # fmt: skip
    epoch = make_epoch(
        raw.coordinates[chosen],
        origin=None if origin is None else np.asarray(origin, dtype=np.float64),
        label=str(raw.path),
        intensity=_varying(raw.intensity, chosen),
        colour=_varying(raw.colour, chosen),
        setup=None if raw.setup is None else raw.setup[chosen],
        classification=None if raw.classification is None else raw.classification[chosen],
        provenance=provenance,
    )
    return replace(epoch, label=raw.path.stem if label is None else label)


def check_kept(path: Path, total: int, kept: int, notices: tuple[str, ...]) -> None:
    """Refuse a file of which too few points serve."""
    if 2 * kept < total:
        got = "; ".join(notices) + f" of {total}"
        raise InputFileError(explain(str(path), "a scan of which most points serve", got, "export the scan again"))
    if kept < MIN_POINTS:
        raise InputFileError(
            explain(str(path), f"at least {MIN_POINTS} points", f"{kept}", "check that this is the whole scan")
        )


def _varying(values: NDArray[np.generic] | None, chosen: Any) -> NDArray[np.float32] | None:
    """Return values as float32, or None where they are all the same and so hold no texture."""
    if values is None:
        return None
    part = values[chosen]
    if (part == part[0]).all():
        return None
    return np.asarray(part, np.float32)


def step_notices(step: float) -> tuple[str, ...]:
    """Say so where coordinates are stored in coarse steps [m]."""
    if step <= COARSE_STEP * (1 + 1e-9):
        return ()
    return (
        f"coordinates are stored in steps of {step * 1e3:.4g} mm: rounding alone has a standard deviation of "
        f"{step * 1e3 / 12**0.5:.3g} mm",
    )
