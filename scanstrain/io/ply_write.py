# SPDX-License-Identifier: MIT
"""Coloured clouds as binary PLY, for viewers that know no LAZ.

Format: Turk 1994, "The PLY Polygon File Format" (header keywords from memory, tested against two other readers).
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME
from scanstrain.epoch import Epoch

PIECE = 500_000
"""Points that are put together at a time: some 30 MB."""
TO_8_BIT = 257
"""Viewers read PLY colours as 8 bits; the 16 bits of our tables are 257 times those, so that nothing is lost."""
NAMES = {"float64": "double", "float32": "float", "uint16": "ushort", "uint8": "uchar"}


def write_ply(
    target: Path,
    epoch: Epoch,
    colour: NDArray[np.uint16],
    values: Mapping[str, NDArray[np.generic]],
    *,
    no_data: float | None = None,
    comments: Sequence[str] = (),
) -> Path:
    """Write points with colours and values, little-endian.

    Coordinates are those of the file of the scan in metres, as 64-bit numbers: in 32 bits survey coordinates would
    come in steps of centimetres.

    Parameters
    ----------
    target : Path
        Ends in .ply; the caller sees to it that a half file is never seen.
    epoch : Epoch
        Of n points.
    colour : ndarray of shape (n, 3), uint16
        Red, green, blue, 0 to 65535.
    values : mapping of str to ndarray of shape (n,)
        Attributes by name; they become properties of the same names.
    no_data : float, optional
        Written in place of NaN.
    comments : sequence of str
        Lines for the head; what is not plain ASCII in them is replaced.

    Returns
    -------
    Path
        `target`.
    """
    types = {name: np.asarray(column).dtype.newbyteorder("<") for name, column in values.items()}
    head = [
        "ply", "format binary_little_endian 1.0", *(f"comment {_line(each)}" for each in comments),
        "comment x, y, z in metres, in the system of the reference scan", *(_described(name) for name in values),
        f"element vertex {len(epoch)}", *(f"property double {axis}" for axis in "xyz"),
        *(f"property uchar {band}" for band in ("red", "green", "blue")),
        *(f"property {NAMES[kind.name]} {name}" for name, kind in types.items()), "end_header",
    ]  # fmt: skip
    with target.open("wb") as stream:
        stream.write(("\n".join(head) + "\n").encode("ascii"))
        for piece in _pieces(epoch, colour, values, types, no_data):
            stream.write(piece.tobytes())
    return target


def _pieces(
    epoch: Epoch, colour: NDArray[np.uint16], values: Mapping[str, NDArray[np.generic]],
    types: Mapping[str, np.dtype[np.generic]], no_data: float | None,
) -> Iterator[NDArray[np.void]]:  # fmt: skip
    vertex = np.dtype([("xyz", "<f8", 3), ("rgb", "u1", 3), *types.items()])
    for start in range(0, len(epoch), PIECE):
        part = slice(start, start + PIECE)
        piece = np.empty(len(epoch.points[part]), vertex)
        piece["xyz"] = epoch.points[part] + epoch.origin
        piece["rgb"] = colour[part] // TO_8_BIT
        for name, column in values.items():
            piece[name] = column[part]
            if no_data is not None and piece[name].dtype.kind == "f":
                piece[name][np.isnan(piece[name])] = no_data
        yield piece


def _described(name: str) -> str:
    return f"comment {name}: {_line(BY_NAME[name].description)}"


def _line(text: str) -> str:
    """Make one line of plain ASCII of a text, whatever is in it."""
    return " ".join(text.encode("ascii", "replace").decode("ascii").split())
