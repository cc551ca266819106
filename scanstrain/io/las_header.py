# SPDX-License-Identifier: MIT
"""Look at the header of a LAS or LAZ file before any library does, and refuse what cannot be true.

A false VLR count makes common readers hang, a cut file reads short in silence, a zero scale makes a flat cloud.
Everything here is bounded by the size of the file.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from scanstrain.errors import InputFileError, explain
from scanstrain.io import las_layout as lay
from scanstrain.io.files import file_size, refuse
from scanstrain.io.las_records import Record, read_evlrs, read_vlrs

SMALLEST_HEADER = 227
NEWEST_MINOR = 5
SMALLEST_SCALE = 1e-12
LARGEST_COORDINATE = 1e13
"""In file units; nothing on Earth is so far out, and a false exponent in the header is."""


@dataclass(frozen=True, slots=True)
class LasHeader:
    """What the header of a checked file says; `raw` is the header itself, user bytes included.

    Parameters
    ----------
    minor : int
        Version 1.`minor`.
    scales, offsets : tuple of 3 float
        Coordinate = raw * scale + offset, in the unit of the file.
    gap : bytes
        What stands between the last VLR and the points (LAS 1.0 asks for two bytes there).
    vlrs, evlrs : tuple of Record
        Records before and after the points.
    tail : tuple of int
        Start and end of a LAS 1.3 waveform record after the points; both 0 if there is none.
    unread : int
        Bytes after the points of an uncompressed file that nothing in the header accounts for.
    """

    path: Path
    raw: bytes
    minor: int
    encoding: int
    point_offset: int
    point_format: int
    compressed: bool
    record_length: int
    count: int
    scales: tuple[float, float, float]
    offsets: tuple[float, float, float]
    bounds: tuple[float, ...]
    gap: bytes
    vlrs: tuple[Record, ...]
    evlrs: tuple[Record, ...]
    tail: tuple[int, int]
    unread: int

    @property
    def extra_bytes(self) -> int:
        """Bytes of a record beyond its point format."""
        return self.record_length - lay.RECORD_SIZE[self.point_format]

    def records(self, user_id: str, record_id: int) -> list[Record]:
        """Return every VLR, then every EVLR, with these identifiers."""
        return [r for r in self.vlrs + self.evlrs if r.is_a(user_id, record_id)]


def read_header(path: Path) -> LasHeader:
    """Read and check the header, the VLRs and the EVLRs of a LAS or LAZ file.

    Raises
    ------
    InputFileError
        Not a file, not readable, not LAS 1.0 to 1.5, or a header that contradicts itself or the size of the file.
    """
    size = file_size(path)
    try:
        with path.open("rb") as stream:
            return _read_header(path, stream, size)
    except OSError as error:
        raise InputFileError(
            explain(str(path), "a file that can be read", error.strerror or str(error), "check the permissions")
        ) from error


def _read_header(path: Path, stream: BinaryIO, size: int) -> LasHeader:
    start = stream.read(SMALLEST_HEADER)
    if start[:4] != b"LASF":
        raise refuse(path, "a LAS or LAZ file, which begins with LASF", repr(start[:4]), "check the kind of file")
    if len(start) < SMALLEST_HEADER:
        raise refuse(path, f"a header of at least {SMALLEST_HEADER} bytes", f"{size} bytes: the file is cut")
    major, minor = start[24], start[25]
    if major != 1 or minor > NEWEST_MINOR:
        raise refuse(path, "LAS version 1.0 to 1.5", f"version {major}.{minor}", "export as LAS 1.4")
    head_size, point_offset, vlr_count, format_byte, length = struct.unpack_from("<HIIBH", start, lay.HEADER_SIZE_AT)
    if head_size < lay.HEADER_SIZE[minor] or not head_size <= point_offset <= size:
        got = f"header of {head_size} bytes, points from byte {point_offset}, {size} bytes in all"
        raise refuse(path, f"a header of {lay.HEADER_SIZE[minor]} bytes or more, then points, within the file", got)
    stream.seek(0)
    raw = stream.read(head_size)
    vlrs = read_vlrs(path, stream, vlr_count, head_size, point_offset)
    vlr_end = vlrs[-1].start + vlrs[-1].length if vlrs else head_size
    stream.seek(vlr_end)
    gap = stream.read(point_offset - vlr_end)
    point_format, compressed = format_byte & 0x3F, bool(format_byte & lay.COMPRESSED_BITS)
    _check_format(path, point_format, minor, length)
    count = _point_count(path, raw, minor, point_format)
    scales, offsets = _scaling(path, raw)
    evlrs = read_evlrs(path, stream, raw, minor, size)
    points_end = point_offset + count * length
    _check_extent(path, stream, compressed, vlrs, count, point_offset, points_end, size)
    tail = _waveform_tail(raw, minor, size)
    claimed = [record.start for record in evlrs] + ([tail[0]] if tail[0] else []) + [size]
    return LasHeader(
        path=path, raw=raw, minor=minor, encoding=struct.unpack_from("<H", raw, lay.GLOBAL_ENCODING)[0],
        point_offset=point_offset, point_format=point_format, compressed=compressed, record_length=length,
        count=count, scales=scales, offsets=offsets, bounds=struct.unpack_from("<6d", raw, lay.BOUNDS), gap=gap,
        vlrs=vlrs, evlrs=evlrs, tail=tail, unread=0 if compressed else max(min(claimed) - points_end, 0),
    )  # fmt: skip


def _check_format(path: Path, point_format: int, minor: int, length: int) -> None:
    if point_format not in lay.RECORD_SIZE:
        raise refuse(path, "point format 0 to 10", f"format {point_format}", "export as LAS 1.4, format 6 or 7")
    if lay.has_wide_flags(point_format) and minor < 4:
        raise refuse(path, "version 1.4 for point formats 6 to 10", f"format {point_format} in version 1.{minor}")
    if length < lay.RECORD_SIZE[point_format]:
        required = f"records of at least {lay.RECORD_SIZE[point_format]} bytes in point format {point_format}"
        raise refuse(path, required, f"{length} bytes")


def _point_count(path: Path, raw: bytes, minor: int, point_format: int) -> int:
    legacy = int(struct.unpack_from("<I", raw, lay.LEGACY_COUNT)[0])
    count = int(struct.unpack_from("<Q", raw, lay.POINT_COUNT)[0]) if minor >= 4 else legacy
    if minor >= 4 and legacy not in (0, count):
        raise refuse(path, "one point count", f"two in the header, {legacy} and {count}")
    if count == 0:
        raise refuse(path, "points", f"a header that counts 0 points (format {point_format})")
    return count


def _scaling(path: Path, raw: bytes) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    values = struct.unpack_from("<6d", raw, lay.SCALES)
    scales, offsets = values[:3], values[3:]
    if not all(math.isfinite(s) and s > SMALLEST_SCALE for s in scales):
        raise refuse(path, f"finite coordinate scales above 0 (at least {SMALLEST_SCALE:g})", f"scales {scales}")
    if not all(abs(o) + 2.0**31 * s < LARGEST_COORDINATE for s, o in zip(scales, offsets, strict=True)):
        required = f"coordinates that stay below {LARGEST_COORDINATE:g}"
        raise refuse(path, required, f"offsets {offsets} with scales {scales}")
    return (scales[0], scales[1], scales[2]), (offsets[0], offsets[1], offsets[2])


def _waveform_tail(raw: bytes, minor: int, size: int) -> tuple[int, int]:
    if minor != 3:
        return 0, 0
    start = int(struct.unpack_from("<Q", raw, lay.WAVEFORM_START)[0])
    return (start, size) if len(raw) < start < size else (0, 0)


def _check_extent(
    path: Path,
    stream: BinaryIO,
    compressed: bool,
    vlrs: tuple[Record, ...],
    count: int,
    start: int,
    end: int,
    size: int,
) -> None:
    if not compressed:
        if end > size:
            raise refuse(path, f"{end} bytes for {count} points", f"{size} bytes: the file is cut")
        return
    laszip = [v for v in vlrs if v.is_a("laszip encoded", 22204)]
    if not laszip or len(laszip[0].payload) < 34:
        raise refuse(path, "the record that says how the points are compressed", "none in the header")
    compressor, chunk_size = struct.unpack_from("<H10xI", laszip[0].payload, 0)
    if compressor not in (2, 3):  # without chunks there is no table to check against
        return
    chunks = _chunk_count(path, stream, start, size)
    fixed = chunk_size not in (0, 0xFFFFFFFF)
    least, most = (-(-count // chunk_size),) * 2 if fixed else (1, count)
    if not least <= chunks <= most:
        required = f"{least} to {most} compressed chunks for {count} points"
        raise refuse(path, required, f"{chunks} chunks: the point count is false or the file is cut")


def _chunk_count(path: Path, stream: BinaryIO, start: int, size: int) -> int:
    stream.seek(start)
    position = int.from_bytes(stream.read(8), "little", signed=True)
    if position == -1:  # a writer that could not seek put it at the very end
        stream.seek(max(size - 8, 0))
        position = int.from_bytes(stream.read(8), "little", signed=True)
    if not start + 8 <= position <= size - 8:
        raise refuse(path, "a table of the compressed chunks within the file", "none: the file is cut or damaged")
    stream.seek(position)
    return int(struct.unpack("<II", stream.read(8))[1])
