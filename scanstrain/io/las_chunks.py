# SPDX-License-Identifier: MIT
"""The points of a checked LAS or LAZ file, a piece at a time: the only place that lets laspy read."""

from __future__ import annotations

import struct
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import InputFileError
from scanstrain.io.files import refuse
from scanstrain.io.las_header import LasHeader
from scanstrain.io.laz_layers import check_layers

PIECE = 200_000
"""Points a piece: four LAZ chunks of the usual 50 000, so that two cores have work, and some 30 MB of result."""

GEOMETRY, EVERYTHING = "geometry", "everything"


@contextmanager
def reading(path: Path) -> Iterator[None]:
    """Turn what laspy and lazrs raise on damaged files into one kind of error."""
    import laspy
    import lazrs

    damage = (
        laspy.errors.LaspyException, lazrs.LazrsError, struct.error, ValueError, TypeError, KeyError, IndexError,
        OverflowError, EOFError, MemoryError, OSError, AttributeError,
    )  # fmt: skip
    try:
        yield
    except InputFileError:
        raise
    except damage as error:
        reason = str(error).strip().splitlines()
        what = reason[0] if reason else type(error).__name__
        raise refuse(path, "points that can be decoded", f"damage: {what}") from error
    except BaseException as error:
        # A fault inside the Rust decompressor arrives as a panic that no `except Exception` sees.
        if type(error).__name__ != "PanicException":
            raise
        raise refuse(path, "points that can be decoded", "damage: the decompressor gave up") from error


def pieces(header: LasHeader, *, fields: str = EVERYTHING, size: int = PIECE) -> Iterator[tuple[int, NDArray[np.void]]]:
    """Yield (number of the first point, records) until the whole file is read, or refuse it.

    Parameters
    ----------
    header : LasHeader
        Of a file that passed the header check.
    fields : {"everything", "geometry"}
        With "geometry" the layers of a LAZ file that no epoch needs (times, waveforms, extra bytes) stay packed
        and hold zeros: half the time for point formats 6 to 10.
    size : int
        Most points in a piece.

    Raises
    ------
    InputFileError
        The points cannot be decoded, or there are fewer than the header counts.
    """
    done = 0
    with reading(header.path), _open(header, fields) as stream:
        check_layers(header)
        for points in stream.chunk_iterator(size):
            records = points.array
            if records.dtype.itemsize != header.record_length:
                raise refuse(
                    header.path, f"records of {header.record_length} bytes", f"{records.dtype.itemsize} described"
                )
            if len(records) == 0:
                break
            yield done, records
            done += len(records)
    if done != header.count:
        raise refuse(header.path, f"{header.count} points", f"{done}: the file is cut")


def _open(header: LasHeader, fields: str) -> Any:
    import laspy

    # texts of VLRs are not always UTF-8, and none of them matters here
    options = {"read_evlrs": False, "encoding_errors": "replace"}
    if fields == EVERYTHING:
        return laspy.open(header.path, **options)
    part = laspy.DecompressionSelection
    wanted = part.base() | part.Z | part.CLASSIFICATION | part.FLAGS | part.INTENSITY | part.POINT_SOURCE_ID | part.RGB
    return laspy.open(header.path, decompression_selection=wanted, **options)


def as_bytes(records: NDArray[np.generic]) -> NDArray[np.uint8]:
    """View records as rows of bytes, shape (n, record length)."""
    contiguous = np.ascontiguousarray(records)
    return contiguous.view(np.uint8).reshape(len(contiguous), -1)
