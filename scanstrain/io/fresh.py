# SPDX-License-Identifier: MIT
"""A LAS 1.4 header and records for a scan that came in another format."""

from __future__ import annotations

import struct
from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import OutputError, explain
from scanstrain.io import las_layout as lay
from scanstrain.io.formats import format_of
from scanstrain.io.las_chunks import PIECE
from scanstrain.io.las_header import LasHeader
from scanstrain.io.las_plan import make_vlr
from scanstrain.io.las_records import Record
from scanstrain.io.las_write import Pieces

SCALE = 0.0001
"""Metre: rounding to a tenth of a millimetre has a standard deviation of 0.03 mm, far below scanner noise, and the
range around the offset is 214 km. Common libraries take 0.01 m by default, which would hide what is looked for."""

PLAIN, COLOURED = 6, 7
FULL = 65_535


def fresh_source(
    path: Path, values: Mapping[str, NDArray[Any]], colour: NDArray[np.uint16] | None
) -> tuple[LasHeader, Pieces, Mapping[str, NDArray[Any]], NDArray[np.uint16] | None]:
    """Read a scan that is no LAS file and present it as one, without the points that were dropped at reading.

    Parameters
    ----------
    path : Path
        The scan.
    values, colour
        One row per point of the file; returned with one row per kept point.

    Raises
    ------
    OutputError
        The scan is too large for the scale.
    """
    epoch = format_of(path).read(path, origin=None, label=None)
    kept = epoch.provenance.kept
    if kept is not None:
        values = {name: array[kept] if len(array) == len(kept) else array for name, array in values.items()}
        colour = colour[kept] if colour is not None and len(colour) == len(kept) else colour
    return _header(path, epoch), _records(epoch), values, colour


def _header(path: Path, epoch: Epoch) -> LasHeader:
    point_format = PLAIN if epoch.colour is None else COLOURED
    size = lay.HEADER_SIZE[4]
    raw = bytearray(size)
    raw[:4], raw[24], raw[lay.VERSION_MINOR] = b"LASF", 1, 4
    offsets = tuple(float(o) for o in epoch.origin)
    struct.pack_into("<6d", raw, lay.SCALES, SCALE, SCALE, SCALE, *offsets)
    if epoch.points.max(initial=0) > 2**31 * SCALE or epoch.points.min(initial=0) < -(2**31) * SCALE:
        required = f"a scan within {2**31 * SCALE / 1e3:.0f} km"
        raise OutputError(explain(str(path), required, "a larger one", "cut the scan"))
    vlrs: tuple[Record, ...] = ()
    if epoch.provenance.crs:
        vlr = make_vlr("LASF_Projection", 2112, "OGC coordinate system WKT", epoch.provenance.crs.encode() + b"\0")
        vlrs = (Record("LASF_Projection", 2112, size, len(vlr), vlr[:54], vlr[54:]),)
    return LasHeader(
        path=path, raw=bytes(raw), minor=4, encoding=lay.WKT_BIT, point_offset=size, point_format=point_format,
        compressed=False, record_length=lay.RECORD_SIZE[point_format], count=len(epoch), scales=(SCALE,) * 3,
        offsets=(offsets[0], offsets[1], offsets[2]), bounds=(0.0,) * 6, gap=b"", vlrs=vlrs, evlrs=(), tail=(0, 0),
        unread=0,
    )  # fmt: skip


def _records(epoch: Epoch) -> Iterator[tuple[int, NDArray[np.void]]]:
    point_format = PLAIN if epoch.colour is None else COLOURED
    dtype = lay.record_dtype(point_format, lay.RECORD_SIZE[point_format])
    intensity = None if epoch.intensity is None else full_range(epoch.intensity)
    colour = None if epoch.colour is None else colour_16bit(epoch.colour)
    for start in range(0, len(epoch), PIECE):
        rows = slice(start, min(start + PIECE, len(epoch)))
        records = np.zeros(rows.stop - start, dtype)
        records["xyz"] = np.rint(epoch.points[rows] / SCALE)
        records["returns"] = 0x11  # return 1 of 1
        if intensity is not None:
            records["intensity"] = intensity[rows]
        if epoch.setup is not None:
            records["setup"] = epoch.setup[rows]
        if epoch.classification is not None:
            records["classification"] = epoch.classification[rows]
        if colour is not None:
            records["rgb"] = colour[rows]
        yield start, records


def full_range(values: NDArray[np.float32]) -> NDArray[np.uint16]:
    """Store intensity as 16 bit: whole numbers that fit as they are, anything else stretched over the full range."""
    low, high = float(values.min()), float(values.max())
    if low >= 0 and high <= FULL and high > 1 and bool((values == np.rint(values)).all()):
        return np.asarray(values, np.uint16)
    return np.asarray(np.rint((values - low) * (FULL / (high - low or 1.0))), np.uint16)


def colour_16bit(values: NDArray[np.float32]) -> NDArray[np.uint16]:
    """Store colour as 16 bit.

    Whole numbers up to 255 count as 8 bit and are multiplied by 257, so that 255 becomes 65535; fractions up to 1
    are multiplied by 65535.
    """
    top, whole = float(values.max()), bool((values == np.rint(values)).all())
    factor = float(FULL) if top <= 1 and not whole else 257.0 if top <= 255 else 1.0
    return np.asarray(np.rint(np.clip(values * factor, 0, FULL)), np.uint16)
