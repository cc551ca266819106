# SPDX-License-Identifier: MIT
"""LAS and LAZ files as epochs: versions 1.0 to 1.5, point formats 0 to 10; COPC is read as LAZ."""

from __future__ import annotations

import datetime as dt
import struct
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import Epoch
from scanstrain.io import las_layout as lay
from scanstrain.io.build import RawScan, build_epoch
from scanstrain.io.crs import read_frame
from scanstrain.io.formats import FORMATS, Format
from scanstrain.io.las_chunks import GEOMETRY, pieces
from scanstrain.io.las_header import LasHeader, read_header
from scanstrain.io.las_plan import source_fields

SUFFIXES = (".las", ".laz")
NARROW_CLASS_BITS = 0x1F
WITHHELD_BIT = {False: ("flags", 0x80), True: ("flags", 0x04)}
"""Where the withheld bit is: with the class in formats 0 to 5, with the flags in formats 6 to 10."""


def read_las(path: Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read a LAS or LAZ file.

    Parameters
    ----------
    path : Path
        The file. It is only read.
    origin : array_like of shape (3,), optional
        Shared origin [m] to subtract; by default the centre of the scan, rounded to a metre.
    label : str, optional
        Name of the epoch; by default the name of the file.

    Raises
    ------
    InputFileError
        The header contradicts itself or the size of the file, the points cannot be decoded or are fewer than the
        header counts, the coordinates are degrees, or too few points serve (see `scanstrain.io.screening`).
    """
    header = read_header(path)
    return build_epoch(read_points(header), origin=origin, label=label)


def _in_memory(_name: str, shape: tuple[int, ...], dtype: Any) -> NDArray[Any]:
    return np.zeros(shape, dtype)


def read_points(header: LasHeader, make: Callable[[str, tuple[int, ...], Any], NDArray[Any]] = _in_memory) -> RawScan:
    """Read what an epoch needs of every point of a checked file.

    Parameters
    ----------
    header : LasHeader
    make : callable
        Makes an array by its name, shape and type, in memory or elsewhere.

    Raises
    ------
    InputFileError
        As of `read_las`.
    """
    source_fields(header)
    frame = read_frame(header)  # both refuse a file before its points are read
    dtype = lay.record_dtype(header.point_format, header.record_length)
    wide = lay.has_wide_flags(header.point_format)
    n = header.count
    xyz = make("points", (n, 3), np.float64)
    intensity, setup = make("intensity", (n,), np.uint16), make("setup", (n,), np.uint16)
    classification = make("classification", (n,), np.uint8)
    withheld, lost = np.zeros(n, bool), np.zeros(n, bool)
    colour = make("colour", (n, 3), np.uint16) if "rgb" in (dtype.names or ()) else None
    field, bit = WITHHELD_BIT[wide]
    for start, records in pieces(header, fields=GEOMETRY):
        points = records.view(dtype)
        rows = slice(start, start + len(points))
        raw = points["xyz"]
        np.multiply(raw, header.scales, out=xyz[rows])
        lost[rows] = (raw == lay.WITHOUT_VALUE).any(axis=1)
        intensity[rows], setup[rows] = points["intensity"], points["setup"]
        classification[rows] = points["classification"] if wide else points["classification"] & NARROW_CLASS_BITS
        withheld[rows] = points[field] & bit != 0
        if colour is not None:
            colour[rows] = points["rgb"]
    xyz += header.offsets
    return RawScan(
        path=header.path, coordinates=xyz, frame=frame, step=_step(header, xyz), intensity=intensity, colour=colour,
        setup=setup, classification=classification, without_value=lost, withheld=withheld, date=creation_date(header),
        header=header, notices=_notices(header, xyz[~lost] if lost.any() else xyz),
    )  # fmt: skip


def _step(header: LasHeader, xyz: NDArray[np.float64]) -> float:
    """Return the coarser of the scale and the spacing of float64 numbers at the largest coordinate."""
    return max(*header.scales, float(np.spacing(max(abs(xyz.min()), abs(xyz.max())))))


def _notices(header: LasHeader, xyz: NDArray[np.float64]) -> tuple[str, ...]:
    notices = []
    if header.unread:
        notices.append(f"{header.unread} bytes after the last point are not mentioned in the header and were not read")
    high, low = np.array(header.bounds[0::2]), np.array(header.bounds[1::2])
    slack = np.array(header.scales)
    if len(xyz) and ((xyz.min(axis=0) < low - slack) | (xyz.max(axis=0) > high + slack)).any():
        notices.append("its header gives bounds that do not enclose the points: the points are believed")
    return tuple(notices)


def creation_date(header: LasHeader) -> str | None:
    """Return the creation date of the file as YYYY-MM-DD, None where the header holds none."""
    day, year = struct.unpack_from("<HH", header.raw, lay.CREATION_DAY)
    if not (1 <= day <= 366 and 1 <= year <= 9999):
        return None
    try:
        return (dt.date(year, 1, 1) + dt.timedelta(days=day - 1)).isoformat()
    except OverflowError:
        return None


FORMATS.add("las", Format(SUFFIXES, read_las))
