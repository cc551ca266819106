# SPDX-License-Identifier: MIT
"""How a result file is laid out: which bytes of the reference go where, and what comes behind them."""

from __future__ import annotations

import struct
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from scanstrain.errors import OutputError, explain
from scanstrain.io import las_layout as lay
from scanstrain.io.crs import read_frame
from scanstrain.io.files import refuse
from scanstrain.io.las_extra import (
    DESCRIPTOR,
    MOST_DESCRIPTORS,
    ExtraField,
    is_own,
    parse_descriptors,
    renamed,
)
from scanstrain.io.las_header import LasHeader
from scanstrain.io.las_records import Record

PROGRAM = "scanstrain"
LARGEST_RECORD = 65_535  # the record length is a uint16


@dataclass(frozen=True, slots=True)
class Plan:
    """Layout of one result file.

    Parameters
    ----------
    source : LasHeader
        The reference.
    copies : tuple of (int, int, int)
        Bytes [start, stop) of a record of the reference go to a position in a record of the result.
    colour_at : int or None
        Where red, green, blue go, if they are written.
    fields : tuple of ExtraField
        The written attributes, `at` counted from the start of the record.
    vlrs : tuple of bytes
        Every VLR, header included, without the one that describes compression.
    evlrs : tuple of Record
        Records of the reference to copy behind the points.
    """

    source: LasHeader
    minor: int
    encoding: int
    point_format: int
    record_length: int
    copies: tuple[tuple[int, int, int], ...]
    colour_at: int | None
    fields: tuple[ExtraField, ...]
    vlrs: tuple[bytes, ...]
    evlrs: tuple[Record, ...]

    @property
    def extra_bytes(self) -> int:
        """Bytes of a record beyond its point format."""
        return self.record_length - lay.RECORD_SIZE[self.point_format]

    def field_dtype(self) -> np.dtype[np.void]:
        """Return the written attributes, and RGB if written, as a NumPy structure over one whole record."""
        names = [field.name for field in self.fields]
        formats: list[object] = [field.dtype for field in self.fields]
        offsets = [field.at for field in self.fields]
        if self.colour_at is not None:
            names, formats, offsets = [*names, "rgb"], [*formats, "(3,)<u2"], [*offsets, self.colour_at]
        return np.dtype(
            {"names": names, "formats": formats, "offsets": offsets, "itemsize": self.record_length}  # type: ignore[call-overload]
        )


def source_fields(header: LasHeader) -> tuple[ExtraField, ...]:
    """Return the extra fields of a file; bytes that no descriptor covers become undocumented fields.

    Raises
    ------
    InputFileError
        Descriptors for more bytes than a record has, or of a reserved type.
    """
    payload = b"".join(record.payload for record in header.records("LASF_Spec", 4))
    fields = parse_descriptors(payload, header.extra_bytes)
    if fields is None:
        required = f"descriptors for the {header.extra_bytes} extra bytes of a record"
        raise refuse(header.path, required, "descriptors of more bytes or of an unknown type")
    return fields


def made_by_us(header: LasHeader) -> bool:
    """Whether the header names this program as the generating software."""
    start = lay.GENERATING_SOFTWARE
    return header.raw[start : start + 32].startswith(PROGRAM.encode() + b" ")


def make_plan(header: LasHeader, results: Sequence[ExtraField], *, colour: bool) -> Plan:
    """Lay out the result.

    Results of an earlier run in the reference give way to `results`; a foreign field of the same name is kept under
    another name. Without new results every extra byte stays as it is.

    Raises
    ------
    OutputError
        More descriptors or a longer record than LAS can hold.
    """
    point_format, copies, colour_at = _base_layout(header.point_format, colour=colour)
    at = lay.RECORD_SIZE[point_format]
    old_base = lay.RECORD_SIZE[header.point_format]
    own_file, kept = made_by_us(header), []
    foreign = [field for field in source_fields(header) if not (results and is_own(field, own_file=own_file))]
    new, taken = {field.name for field in results}, {field.name for field in [*results, *foreign]}
    for field in foreign:
        copies.append((old_base + field.at, old_base + field.at + field.size, at))
        kept.append(renamed(field, taken) if field.name in new else field)
        taken.add(kept[-1].name)
        at += field.size
    placed = []
    for field in results:
        placed.append(ExtraField(field.descriptor, at))
        at += field.size
    if len(kept) + len(placed) > MOST_DESCRIPTORS or at > LARGEST_RECORD:
        got = f"{len(kept)} in the reference, {len(placed)} new, {at} bytes a point"
        required = f"at most {MOST_DESCRIPTORS} extra fields and {LARGEST_RECORD} bytes a point"
        raise OutputError(explain(str(header.path), required, got, "remove extra fields from the reference"))
    return Plan(
        source=header, minor=max(header.minor, 2) if point_format in (2, 3) else header.minor,
        encoding=header.encoding | (lay.WKT_BIT if lay.has_wide_flags(point_format) else 0),
        point_format=point_format, record_length=at, copies=_merged(copies), colour_at=colour_at,
        fields=tuple(placed), vlrs=_vlrs(header, kept + placed, replace=bool(placed)),
        evlrs=tuple(r for r in header.evlrs if not _left_behind(r, replace=bool(placed))),
    )  # fmt: skip


def _base_layout(point_format: int, *, colour: bool) -> tuple[int, list[tuple[int, int, int]], int | None]:
    """Copy the standard fields, and make room for colour where the format has none."""
    size = lay.RECORD_SIZE[point_format]
    if not colour:
        return point_format, [(0, size, 0)], None
    if point_format in lay.RGB_AT:
        at = lay.RGB_AT[point_format]
        return point_format, [(0, at, 0), (at + 6, size, at + 6)], at
    higher, at, room = lay.RGB_INSERT[point_format]
    return higher, [(0, at, 0), (at, size, at + room)], at


def _merged(copies: list[tuple[int, int, int]]) -> tuple[tuple[int, int, int], ...]:
    """Join copies that are neighbours on both sides, so that few and long ones remain."""
    joined: list[tuple[int, int, int]] = []
    for start, stop, to in copies:
        if stop == start:
            continue
        if joined and joined[-1][1] == start and joined[-1][2] + joined[-1][1] - joined[-1][0] == to:
            joined[-1] = (joined[-1][0], stop, joined[-1][2])
        else:
            joined.append((start, stop, to))
    return tuple(joined)


def _left_behind(record: Record, *, replace: bool) -> bool:
    """Whether a record describes the old packing, which the result does not have, or fields that were laid anew."""
    packing = record.user_id == "laszip encoded" or record.user_id == "copc"
    return packing or (replace and record.is_a("LASF_Spec", 4))


def _vlrs(header: LasHeader, fields: list[ExtraField], *, replace: bool) -> tuple[bytes, ...]:
    kept = [r.head + r.payload for r in header.vlrs if not _left_behind(r, replace=replace)]
    wide = lay.has_wide_flags(header.point_format)
    if wide and not header.records("LASF_Projection", 2112):
        text = read_frame(header).wkt  # formats 6 to 10 must state their system as WKT (R15, global encoding)
        if text is not None:
            kept.append(make_vlr("LASF_Projection", 2112, "OGC coordinate system WKT", text.encode() + b"\0"))
    if replace:
        payload = b"".join(field.descriptor for field in fields)
        if len(payload) != DESCRIPTOR * len(fields):
            raise OutputError(explain(str(header.path), "whole descriptors", "a cut one", "report this fault"))
        kept.append(make_vlr("LASF_Spec", 4, "Extra bytes", payload))
    return tuple(kept)


def make_vlr(user_id: str, record_id: int, description: str, payload: bytes) -> bytes:
    """Return one variable length record, header of 54 bytes and payload (R15, section 2.5)."""
    return struct.pack("<2x16sHH32s", user_id.encode(), record_id, len(payload), description.encode()) + payload
