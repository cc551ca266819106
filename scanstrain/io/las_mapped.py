# SPDX-License-Identifier: MIT
"""A LAS or LAZ file as an epoch whose arrays live in files: memory holds a piece at a time."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import Epoch, Provenance
from scanstrain.errors import InputFileError, explain
from scanstrain.io.build import check_kept, step_notices
from scanstrain.io.files import file_size, sha256
from scanstrain.io.las import read_points
from scanstrain.io.las_header import read_header
from scanstrain.io.screening import screen
from scanstrain.mapped import make_mapped, release, slices

FloatArray = NDArray[np.float64]


def count_points(path: Path) -> int:
    """Points of a LAS or LAZ file by its header, which is checked."""
    file_size(path)
    return read_header(path).count


def read_mapped(path: Path, folder: Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read a LAS or LAZ file into arrays in a folder.

    Parameters
    ----------
    path : Path
        The file. It is only read.
    folder : Path
        Where the arrays go; new.
    origin, label : optional
        As of `las.read_las`.

    Returns
    -------
    Epoch
        The same as of `las.read_las`, without colour.

    Raises
    ------
    InputFileError
        As of `las.read_las`.
    """
    folder.mkdir()
    raw = read_points(read_header(path), lambda name, shape, dtype: make_mapped(folder / name, shape, dtype))
    factors = raw.frame.factors
    if factors != (1.0, 1.0, 1.0):
        raw.coordinates *= factors
    screening = screen(raw.coordinates, without_value=raw.without_value, withheld=raw.withheld)
    total, kept = len(screening.kept), len(screening.kept) - screening.dropped
    check_kept(raw.path, total, kept, screening.notices)
    columns: dict[str, Any] = {"points": raw.coordinates, "setup": raw.setup, "classification": raw.classification}
    columns["intensity"] = _as_float32(raw.intensity, folder / "grey")
    if kept < total:
        columns = {name: _compact(values, screening.kept, kept) for name, values in columns.items()}
    centre = _centre(columns["points"], raw.path, origin)
    notices = raw.notices + raw.frame.notices + screening.notices + step_notices(raw.step * max(factors))
    provenance = Provenance(
        path=str(raw.path), sha256=sha256(raw.path), crs=raw.frame.wkt, unit=raw.frame.unit, date=raw.date,
        file_points=total, dropped_points=total - kept, notices=notices, header=raw.header,
        unit_factors=factors, kept=None if kept == total else screening.kept,
    )  # fmt: skip
    grey = columns["intensity"]
    varies = grey is not None and bool(np.ptp(grey) > 0)
    release(*columns.values())
    return Epoch(
        points=columns["points"],
        origin=centre,
        intensity=grey if varies else None,
        setup=columns["setup"],
        classification=columns["classification"],
        label=path.stem if label is None else label,
        provenance=provenance,
    )


def _as_float32(values: NDArray[Any] | None, path: Path) -> NDArray[Any] | None:
    if values is None:
        return None
    out = make_mapped(path, values.shape, np.float32)
    for rows in slices(len(values)):
        out[rows] = values[rows]
    release(values, out)
    return out


def _compact(values: NDArray[Any] | None, kept: NDArray[np.bool_], count: int) -> NDArray[Any] | None:
    """Move the kept rows to the front, in place."""
    if values is None:
        return None
    done = 0
    for rows in slices(len(values)):
        part = values[rows][kept[rows]]
        values[done : done + len(part)] = part
        done += len(part)
    release(values)
    return values[:count]


def _centre(points: FloatArray, path: Path, origin: ArrayLike | None) -> FloatArray:
    """Subtract the origin from the points, in place, and return it."""
    low, high = points.min(axis=0), points.max(axis=0)
    if not (high > low).any():
        raise InputFileError(
            explain(str(path), "points that span a surface", "all points in one place", "export the scan again")
        )
    centre = np.round((low + high) / 2) if origin is None else np.asarray(origin, dtype=np.float64)
    for rows in slices(len(points)):
        points[rows] -= centre
    return np.asarray(centre)
