# SPDX-License-Identifier: MIT
"""Byte positions and record layouts of LAS 1.0 to 1.5, as numbers only.

Source: ASPRS LAS 1.4 R15 (July 2019), public header block and point data record formats 0 to 10; the sizes of
the 1.0 to 1.3 headers from memory, confirmed on files of every version.
"""

from __future__ import annotations

import numpy as np

HEADER_SIZE = {0: 227, 1: 227, 2: 227, 3: 235, 4: 375, 5: 391}
"""Smallest public header per minor version [byte]."""

RECORD_SIZE = {0: 20, 1: 28, 2: 26, 3: 34, 4: 57, 5: 63, 6: 30, 7: 36, 8: 38, 9: 59, 10: 67}
"""Bytes of one point without extra bytes, per point format."""

VLR_HEADER = 54
EVLR_HEADER = 60

# positions in the public header [byte]
GLOBAL_ENCODING = 6
VERSION_MINOR = 25
SYSTEM_IDENTIFIER = 26
GENERATING_SOFTWARE = 58
CREATION_DAY = 90
HEADER_SIZE_AT = 94
POINT_FORMAT = 104
LEGACY_COUNT = 107
SCALES = 131
BOUNDS = 179  # max x, min x, max y, min y, max z, min z: the larger one first
WAVEFORM_START = 227
FIRST_EVLR = 235
POINT_COUNT = 247

WKT_BIT = 16
COMPRESSED_BITS = 0xC0  # a LAZ writer sets bit 7 of the format; very old ones bit 6

WITHOUT_VALUE = np.iinfo(np.int32).min
"""Raw coordinate that common writers leave where the value was NaN or did not fit."""

RGB_INSERT = {0: (2, 20, 6), 1: (3, 28, 6), 4: (5, 28, 6), 6: (7, 30, 6), 9: (10, 30, 8)}
"""Format without colour -> (format with colour, where the colour bytes go in, how many; 8 = RGB and NIR)."""

RGB_AT = {2: 20, 3: 28, 5: 28, 7: 30, 8: 30, 10: 30}
"""Position of red, green, blue in the record, per format that has them."""


def has_wide_flags(point_format: int) -> bool:
    """Whether the format is one of 6 to 10: 8-bit classes, 4-bit return numbers, WKT only."""
    return point_format >= 6


def record_dtype(point_format: int, record_length: int) -> np.dtype[np.void]:
    """Return the fields that this program reads, as a NumPy structure over one whole record.

    Parameters
    ----------
    point_format : int
        0 to 10.
    record_length : int
        Bytes of a record, extra bytes included.
    """
    wide = has_wide_flags(point_format)
    fields = {
        "xyz": ("(3,)<i4", 0),
        "intensity": ("<u2", 12),
        "returns": ("u1", 14),
        "flags": ("u1", 15),  # formats 0 to 5: class in the low 5 bits, withheld in bit 7
        "classification": ("u1", 16 if wide else 15),
        "setup": ("<u2", 20 if wide else 18),
    }
    if point_format in RGB_AT:
        fields["rgb"] = ("(3,)<u2", RGB_AT[point_format])
    return np.dtype(
        {
            "names": list(fields),
            "formats": [kind for kind, _ in fields.values()],
            "offsets": [at for _, at in fields.values()],
            "itemsize": record_length,
        }
    )
