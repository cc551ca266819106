# SPDX-License-Identifier: MIT
"""Variable length records (VLRs) of a LAS file, walked one by one and never beyond the room that they have."""

from __future__ import annotations

import struct
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from scanstrain.io import las_layout as lay
from scanstrain.io.files import refuse

HELD_IN_MEMORY = 4 << 20
"""Longest EVLR payload [byte] that is looked into; longer ones (waveforms) are only copied."""


@dataclass(frozen=True, slots=True)
class Record:
    """One variable length record (or extended one): where it stands in the file and what it holds.

    `payload` is empty for extended records above `HELD_IN_MEMORY`; `start` and `length` cover header and payload.
    """

    user_id: str
    record_id: int
    start: int
    length: int
    head: bytes
    payload: bytes

    def is_a(self, user_id: str, record_id: int) -> bool:
        """Whether the record carries these two identifiers."""
        return self.user_id == user_id and self.record_id == record_id


def read_vlrs(path: Path, stream: BinaryIO, count: int, start: int, end: int) -> tuple[Record, ...]:
    """Read `count` records from byte `start`; all must end before byte `end`.

    Raises
    ------
    InputFileError
        The count or a length does not fit between the header and the points.
    """
    room = end - start
    if count * lay.VLR_HEADER > room:
        raise refuse(path, f"at most {room // lay.VLR_HEADER} records before the points", f"a VLR count of {count}")
    records = []
    for number in range(count):
        stream.seek(start)
        head = stream.read(lay.VLR_HEADER)
        length = struct.unpack_from("<H", head, 20)[0] if len(head) == lay.VLR_HEADER else room
        if start + lay.VLR_HEADER + length > end:
            got = f"record {number + 1} of {count} that ends {start + lay.VLR_HEADER + length - end} bytes after it"
            raise refuse(path, f"VLRs that end before the points at byte {end}", got)
        record_id = struct.unpack_from("<H", head, 18)[0]
        records.append(Record(_text(head[2:18]), record_id, start, lay.VLR_HEADER + length, head, stream.read(length)))
        start += lay.VLR_HEADER + length
    return tuple(records)


def read_evlrs(path: Path, stream: BinaryIO, raw: bytes, minor: int, size: int) -> tuple[Record, ...]:
    """Read the extended records of LAS 1.4 and later from where the header `raw` says, in a file of `size` bytes.

    Raises
    ------
    InputFileError
        The count or a length does not fit into the file.
    """
    if minor < 4:
        return ()
    start, count = struct.unpack_from("<QI", raw, lay.FIRST_EVLR)
    if count and (start < len(raw) or start + count * lay.EVLR_HEADER > size):
        got = f"{count} from byte {start} in a file of {size} bytes"
        raise refuse(path, "extended records (EVLRs) within the file", got)
    records = []
    for number in range(count):
        stream.seek(start)
        head = stream.read(lay.EVLR_HEADER)
        length = struct.unpack_from("<Q", head, 20)[0] if len(head) == lay.EVLR_HEADER else size
        end = start + lay.EVLR_HEADER + length
        if end > size:
            raise refuse(path, "extended records (EVLRs) within the file", f"record {number + 1} runs past the end")
        record_id = struct.unpack_from("<H", head, 18)[0]
        payload = stream.read(length) if length <= HELD_IN_MEMORY else b""
        records.append(Record(_text(head[2:18]), record_id, start, end - start, head, payload))
        start = end
    return tuple(records)


def _text(field: bytes) -> str:
    return field.split(b"\0")[0].decode("latin-1")
