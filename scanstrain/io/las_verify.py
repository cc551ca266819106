# SPDX-License-Identifier: MIT
"""Read a written file back and compare it, bit for bit, with what was meant.

Header, VLRs and descriptors are parsed by hand; the points come through laspy, which did not write them.
"""

from __future__ import annotations

import hashlib
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import InputFileError, OutputError, explain
from scanstrain.io import las_layout as lay
from scanstrain.io.las_chunks import as_bytes, pieces
from scanstrain.io.las_header import LasHeader, read_header
from scanstrain.io.las_plan import Plan, source_fields
from scanstrain.io.las_write import BLOCK, Tally
from scanstrain.io.stored import StoredValues


def verify(path: Path, target: Path, plan: Plan, values: StoredValues, tally: Tally) -> None:
    """Compare the file at `path` with the plan, the values and the reference.

    Raises
    ------
    OutputError
        Anything differs; `target` is named, since `path` is temporary.
    """
    try:
        header = read_header(path)
        _check(target, "header", header.raw[lay.SCALES : lay.BOUNDS], plan.source.raw[lay.SCALES : lay.BOUNDS])
        _check(target, "version", header.minor, plan.minor)
        _check(target, "point count", header.count, plan.source.count)
        _check(target, "point format", header.point_format, plan.point_format)
        _check(target, "VLRs", _vlr_bytes(header), plan.vlrs)
        _check_fields(target, header, plan)
        _check_evlrs(target, header, plan)
        _check_points(target, header, plan, values, tally)
    except (InputFileError, KeyError, ValueError) as error:
        raise _differs(target, str(error)) from error


def _check(target: Path, what: str, got: object, expected: object) -> None:
    if got != expected:
        raise _differs(target, f"{what} not as written")


def _differs(target: Path, what: str) -> OutputError:
    return OutputError(
        explain(
            str(target),
            "a file that reads back as it was written",
            what,
            "check the disk, and write uncompressed .las",
        )
    )


def _vlr_bytes(header: LasHeader) -> tuple[bytes, ...]:
    return tuple(r.head + r.payload for r in header.vlrs if r.user_id != "laszip encoded")


def _check_fields(target: Path, header: LasHeader, plan: Plan) -> None:
    if not plan.fields:
        return
    start = lay.RECORD_SIZE[header.point_format]
    found = {field.name: (field.descriptor, start + field.at) for field in source_fields(header)}
    for field in plan.fields:
        _check(target, f"descriptor of {field.name}", found.get(field.name), (field.descriptor, field.at))


def _check_evlrs(target: Path, header: LasHeader, plan: Plan) -> None:
    source = plan.source
    pairs = [(new.start, new.length, old.start, old.length)
             for new, old in zip(header.evlrs, plan.evlrs, strict=True)]  # fmt: skip
    if source.tail[0]:
        pairs.append((header.tail[0], header.tail[1] - header.tail[0], source.tail[0], source.tail[1] - source.tail[0]))
    for start, length, old_start, old_length in pairs:
        same = length == old_length and _digest(header.path, start, length) == _digest(source.path, old_start, length)
        _check(target, "EVLR", same, True)


def _digest(path: Path, start: int, length: int) -> bytes:
    digest = hashlib.blake2b()
    with path.open("rb") as stream:
        stream.seek(start)
        while length > 0 and (block := stream.read(min(length, BLOCK))):
            digest.update(block)
            length -= len(block)
    return digest.digest()


def _check_points(target: Path, header: LasHeader, plan: Plan, values: StoredValues, tally: Tally) -> None:
    digest = hashlib.blake2b(digest_size=tally.digest.digest_size)
    for start, records in pieces(header):
        rows = as_bytes(records)
        for first, last, to in plan.copies:
            digest.update(np.ascontiguousarray(rows[:, to : to + last - first]).data)
        stop = start + len(rows)
        for field in plan.fields:
            expected = values.piece(field.name, start, stop)
            _check(target, field.name, _same_bits(records[field.name], expected), True)
        if plan.colour_at is not None:
            rgb = np.stack([records[name] for name in ("red", "green", "blue")], axis=1)
            _check(target, "RGB", bool((rgb == values.piece("rgb", start, stop)).all()), True)
    _check(target, "coordinates and fields of the reference", digest.digest(), tally.digest.digest())


def _same_bits(a: NDArray[Any], b: NDArray[Any]) -> bool:
    """Compare as integers, since NaN equals nothing."""
    code = f"<u{b.dtype.itemsize}"
    return a.dtype.itemsize == b.dtype.itemsize and bool((a.view(code) == b.view(code)).all())
