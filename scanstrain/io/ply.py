# SPDX-License-Identifier: MIT
"""PLY scans (.ply): the vertices of ASCII and binary files; faces and everything behind them are ignored.

Format: Turk 1994, "The PLY Polygon File Format" (header keywords from memory, tested against another reader).
"""

from __future__ import annotations

from dataclasses import dataclass
from itertools import islice
from pathlib import Path
from typing import BinaryIO

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import Epoch
from scanstrain.io.build import RawScan, build_epoch
from scanstrain.io.crs import FileFrame
from scanstrain.io.files import refuse
from scanstrain.io.formats import FORMATS, Format

TYPES = {
    "char": "i1", "uchar": "u1", "short": "i2", "ushort": "u2", "int": "i4", "uint": "u4",
    "float": "f4", "double": "f8",
    "int8": "i1", "uint8": "u1", "int16": "i2", "uint16": "u2", "int32": "i4", "uint32": "u4",
    "float32": "f4", "float64": "f8",
}  # fmt: skip
ORDERS = {"ascii": "<", "binary_little_endian": "<", "binary_big_endian": ">"}
INTENSITY_NAMES = ("intensity", "scalar_intensity", "reflectance")
NO_STATEMENT = "is a PLY file and states no coordinate system: coordinates are taken as metres"
LONGEST_HEADER = 1000  # lines


@dataclass(frozen=True, slots=True)
class PlyHeader:
    """Encoding, number of vertices and the type of one vertex."""

    encoding: str
    count: int
    dtype: np.dtype[np.void]


def read_ply(path: Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read the vertices of a PLY file: x, y, z, and where there are any intensity and red, green, blue.

    Raises
    ------
    InputFileError
        Not a PLY file with vertices first, or cut.
    """
    try:
        with path.open("rb") as stream:
            header = _read_header(path, stream)
            vertices = _read_vertices(path, stream, header)
    except OSError as error:
        raise refuse(path, "a file that can be read", error.strerror or str(error), "check the permissions") from error
    names = {name.lower(): name for name in vertices.dtype.names or ()}
    missing = [axis for axis in "xyz" if axis not in names]
    if missing:
        raise refuse(path, "vertices with x, y and z", "none called " + ", ".join(missing))
    xyz = np.stack([vertices[names[axis]] for axis in "xyz"], axis=1)
    widest = np.nanmax(np.abs(xyz), initial=0)
    intensity = next((vertices[names[name]] for name in INTENSITY_NAMES if name in names), None)
    colour = None
    if all(name in names for name in ("red", "green", "blue")):
        colour = np.stack([vertices[names[name]] for name in ("red", "green", "blue")], axis=1)
    raw = RawScan(
        path=path,
        coordinates=xyz.astype(np.float64),
        frame=FileFrame(notices=(NO_STATEMENT,)),
        step=float(np.spacing(widest)) if xyz.dtype.kind == "f" and np.isfinite(widest) else 0.0,
        intensity=intensity,
        colour=colour,
    )
    return build_epoch(raw, origin=origin, label=label)


def _read_header(path: Path, stream: BinaryIO) -> PlyHeader:
    if stream.readline(80).strip() != b"ply":
        raise refuse(path, "a PLY file, which begins with ply", "something else", "check the kind of file")
    encoding, count = "", 0
    fields: list[tuple[str, str]] = []
    element = ""
    for line in islice(iter(lambda: stream.readline(4096), b""), LONGEST_HEADER):
        words = line.decode("latin-1").split()
        if words == ["end_header"]:
            break
        if words[:1] == ["format"] and len(words) == 3:
            encoding = words[1]
        elif words[:1] == ["element"] and len(words) == 3 and words[2].isdecimal():
            if not fields and element:
                raise refuse(path, "vertices as the first element", f"{element} before them")
            element = words[1]
            count = int(words[2]) if element == "vertex" else count
        elif words[:1] == ["property"] and element == "vertex":
            if len(words) != 3 or words[1] not in TYPES:
                raise refuse(path, "vertices of plain numbers", line.decode("latin-1").strip())
            fields.append((words[2], TYPES[words[1]]))
    else:
        raise refuse(path, "a header that ends with end_header", "none: the file is cut")
    if encoding not in ORDERS or not fields or len({name.lower() for name, _ in fields}) != len(fields):
        raise refuse(path, "an encoding and vertices with names of their own", f"encoding {encoding!r}, {fields}")
    return PlyHeader(encoding, count, np.dtype([(name, ORDERS[encoding] + kind) for name, kind in fields]))


def _read_vertices(path: Path, stream: BinaryIO, header: PlyHeader) -> NDArray[np.void]:
    room = path.stat().st_size - stream.tell()
    if header.encoding != "ascii":
        if header.count * header.dtype.itemsize > room:
            raise refuse(path, f"{header.count} vertices", f"room for {room // header.dtype.itemsize}: the file is cut")
        return np.fromfile(stream, header.dtype, header.count)
    if (
        header.count * 2 * len(header.dtype.names or ()) > room + 1
    ):  # every number takes a digit and a space or line end
        raise refuse(path, f"{header.count} vertices", f"{room} bytes: the file is cut")
    lines = (line.decode("latin-1") for line in islice(stream, header.count))
    try:
        vertices = np.loadtxt(lines, dtype=header.dtype, comments=None, ndmin=1)
    except ValueError as error:
        raise refuse(path, "lines of numbers", str(error).splitlines()[0]) from error
    if len(vertices) != header.count:
        raise refuse(path, f"{header.count} vertices", f"{len(vertices)}: the file is cut")
    return vertices


FORMATS.add("ply", Format((".ply",), read_ply))
