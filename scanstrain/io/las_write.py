# SPDX-License-Identifier: MIT
"""Write a planned result file: header, VLRs, points, EVLRs. A piece of the points is in memory at a time."""

from __future__ import annotations

import datetime as dt
import hashlib
import struct
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from importlib.metadata import version
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from scanstrain.io import las_layout as lay
from scanstrain.io.las_chunks import as_bytes
from scanstrain.io.las_header import LasHeader
from scanstrain.io.las_plan import PROGRAM, Plan, make_vlr
from scanstrain.io.stored import StoredValues

BLOCK = 1 << 20
CACHED_ROWS = 2048
Pieces = Iterable[tuple[int, NDArray[np.void]]]


@dataclass(slots=True)
class Tally:
    """Known only after the points have passed: bounds in raw integers, returns, a digest of the copies."""

    low: NDArray[np.int64] = field(default_factory=lambda: np.full(3, np.iinfo(np.int64).max))
    high: NDArray[np.int64] = field(default_factory=lambda: np.full(3, np.iinfo(np.int64).min))
    by_return: NDArray[np.int64] = field(default_factory=lambda: np.zeros(16, np.int64))
    digest: Any = field(default_factory=lambda: hashlib.blake2b(digest_size=16))

    def add(self, plan: Plan, rows: NDArray[np.uint8]) -> None:
        """Take in one piece of the reference, shape (n, record length)."""
        for start, stop, _ in plan.copies:
            self.digest.update(np.ascontiguousarray(rows[:, start:stop]).data)
        header = plan.source
        points = rows.reshape(-1).view(lay.record_dtype(header.point_format, header.record_length))
        self.low = np.minimum(self.low, points["xyz"].min(axis=0))
        self.high = np.maximum(self.high, points["xyz"].max(axis=0))
        mask = 0x0F if lay.has_wide_flags(header.point_format) else 0x07
        self.by_return += np.bincount(points["returns"] & mask, minlength=16)


class Destination:
    """A file for the compressor, which tells of a failed write but not why: the reason is kept here."""

    def __init__(self, stream: BinaryIO) -> None:
        self._stream = stream
        self.failure: OSError | None = None
        self.seek, self.tell, self.flush = stream.seek, stream.tell, stream.flush

    def write(self, data: bytes) -> int:
        """Write, and keep the error if that fails."""
        try:
            return self._stream.write(data)
        except OSError as error:
            self.failure = error
            raise


def write_points(
    path: Path,
    plan: Plan,
    pieces: Pieces,
    values: StoredValues,
    *,
    compress: bool,
    created: dt.date,
) -> Tally:
    """Write the file and return the tally that the reading back is compared with.

    Raises
    ------
    OSError
        From the file system.
    lazrs.LazrsError
        From the compressor.
    """
    import lazrs

    laz = lazrs.LazVlr.new_for_compression(plan.point_format, plan.extra_bytes) if compress else None
    vlrs = plan.vlrs
    if laz is not None:
        vlrs += (make_vlr("laszip encoded", 22204, "compressed points", bytes(laz.record_data())),)
    header = bytearray(plan.source.raw)
    _set_layout(header, plan, vlrs, created=created, compress=compress)
    tally = Tally()
    with path.open("wb") as stream:
        stream.write(header + b"".join(vlrs) + plan.source.gap)
        filled = _fill(plan, pieces, values, tally)
        if laz is None:
            for records in filled:
                stream.write(records.data)
        else:
            _compress(stream, laz, filled)
        stream.seek(0, 2)
        _write_evlrs(stream, header, plan)
        _set_counts(header, plan, tally)
        stream.seek(0)
        stream.write(header)
    return tally


def _fill(plan: Plan, pieces: Pieces, values: StoredValues, tally: Tally) -> Iterator[NDArray[np.uint8]]:
    for start, records in pieces:
        rows = as_bytes(records)
        tally.add(plan, rows)
        yield assemble(plan, rows, values, start)


def _compress(stream: BinaryIO, laz: Any, filled: Iterable[NDArray[np.uint8]]) -> None:
    import lazrs

    destination = Destination(stream)
    try:
        compressor = lazrs.ParLasZipCompressor(destination, laz)
        for records in filled:
            compressor.compress_many(records.reshape(-1))
        compressor.done()
    except lazrs.LazrsError as error:
        if destination.failure is not None:
            raise destination.failure from error
        raise


def assemble(plan: Plan, rows: NDArray[np.uint8], values: StoredValues, start: int) -> NDArray[np.uint8]:
    """Make records of the result from records of the reference and the values of the same points.

    Parameters
    ----------
    plan : Plan
        Where each byte goes.
    rows : ndarray of shape (n, record length), uint8
        Records of the reference.
    values : StoredValues
        Of all points of the file.
    start : int
        Number of the first point.

    Returns
    -------
    ndarray of shape (n, record length of the result), uint8
    """
    out = np.zeros((len(rows), plan.record_length), np.uint8)
    for first, last, to in plan.copies:
        out[:, to : to + last - first] = rows[:, first:last]
    fields = out.reshape(-1).view(plan.field_dtype())
    names = fields.dtype.names or ()
    columns = {name: values.piece(name, start, start + len(rows)) for name in names}
    # the fields of a record lie far apart: filling a few thousand records at a time keeps them in the cache
    for low in range(0, len(rows), CACHED_ROWS):
        block = slice(low, low + CACHED_ROWS)
        for name in names:
            fields[name][block] = columns[name][block]
    return out


def _set_layout(header: bytearray, plan: Plan, vlrs: tuple[bytes, ...], *, created: dt.date, compress: bool) -> None:
    struct.pack_into("<H", header, lay.GLOBAL_ENCODING, plan.encoding)
    header[lay.VERSION_MINOR] = plan.minor
    # R15, system identifier: what a file is that was computed from one other file
    struct.pack_into("<32s", header, lay.SYSTEM_IDENTIFIER, b"MODIFICATION")
    struct.pack_into("<32s", header, lay.GENERATING_SOFTWARE, f"{PROGRAM} {version(PROGRAM)}".encode())
    struct.pack_into("<HH", header, lay.CREATION_DAY, created.timetuple().tm_yday, created.year)
    offset = len(header) + sum(map(len, vlrs)) + len(plan.source.gap)
    struct.pack_into(
        "<HIIBH", header, lay.HEADER_SIZE_AT,
        len(header), offset, len(vlrs), plan.point_format | (0x80 if compress else 0), plan.record_length,
    )  # fmt: skip


def _set_counts(header: bytearray, plan: Plan, tally: Tally) -> None:
    source = plan.source
    count, by_return = source.count, [int(number) for number in tally.by_return[1:]]
    legacy = not lay.has_wide_flags(plan.point_format) and count < 2**32
    struct.pack_into("<6I", header, lay.LEGACY_COUNT, *([count, *by_return[:5]] if legacy else [0] * 6))
    if plan.minor >= 4:
        struct.pack_into("<16Q", header, lay.POINT_COUNT, count, *by_return)
    low = tally.low * np.array(source.scales) + source.offsets
    high = tally.high * np.array(source.scales) + source.offsets
    struct.pack_into("<6d", header, lay.BOUNDS, *np.stack([high, low], axis=1).reshape(-1))


def _write_evlrs(stream: BinaryIO, header: bytearray, plan: Plan) -> None:
    """Copy what stands behind the points, and let the header point to its new places."""
    source = plan.source
    moved = {}
    if plan.minor >= 4:
        struct.pack_into("<QI", header, lay.FIRST_EVLR, stream.tell() if plan.evlrs else 0, len(plan.evlrs))
    for record in plan.evlrs:
        moved[record.start] = stream.tell()
        _copy_range(source, stream, record.start, record.length)
    if source.tail[0]:
        moved[source.tail[0]] = stream.tell()
        _copy_range(source, stream, source.tail[0], source.tail[1] - source.tail[0])
    if plan.minor >= 3:
        start = struct.unpack_from("<Q", header, lay.WAVEFORM_START)[0]
        struct.pack_into("<Q", header, lay.WAVEFORM_START, moved.get(start, start))


def _copy_range(source: LasHeader, stream: BinaryIO, start: int, length: int) -> None:
    with source.path.open("rb") as original:
        original.seek(start)
        while length > 0:
            block = original.read(min(length, BLOCK))
            stream.write(block)
            length -= len(block)
