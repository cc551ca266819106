# SPDX-License-Identifier: MIT
"""What the chunks of layered LAZ (point formats 6 to 10) say about themselves, before they are unpacked.

A chunk begins with one whole record, the number of its points, and the size of each layer (four bytes each). Layout
confirmed on files of three writers: the parts add up to the length of the chunk that the table gives.
"""

from __future__ import annotations

import struct

from scanstrain.io.files import refuse
from scanstrain.io.las_header import LasHeader

LAYERED = 3
"""Compressor number in the LAZ record."""

LAYERS = {6: 9, 7: 10, 8: 11, 9: 10, 10: 12}
"""Layers per point format; every extra byte adds one."""


def check_layers(header: LasHeader) -> None:
    """Compare the header's count with the counts in the chunks, and layer sizes with the length of their chunk.

    Without this a count that is too low drops points in silence, and one false layer size makes the decompressor
    reserve up to 4 GB before it fails.

    Raises
    ------
    InputFileError
        The two do not agree.
    """
    import lazrs

    laszip = [record for record in header.vlrs if record.is_a("laszip encoded", 22204)]
    if not header.compressed or struct.unpack_from("<H", laszip[0].payload)[0] != LAYERED:
        return
    layers = LAYERS[header.point_format] + header.extra_bytes
    total, start = 0, header.point_offset + 8
    with header.path.open("rb") as stream:
        stream.seek(header.point_offset)
        for _, length in lazrs.read_chunk_table(stream, lazrs.LazVlr(laszip[0].payload)):
            stream.seek(start + header.record_length)
            count, *sizes = struct.unpack(f"<{1 + layers}I", stream.read(4 + 4 * layers))
            if header.record_length + 4 + 4 * layers + sum(sizes) > length:
                raise refuse(header.path, "points that can be decoded", "damage: a layer longer than its chunk")
            total += count
            start += length
    if total != header.count:
        raise refuse(header.path, f"{header.count} points, as its header says", f"{total} in its chunks")
