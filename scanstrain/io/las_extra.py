# SPDX-License-Identifier: MIT
"""Descriptors of extra bytes: parsed and made by hand, byte for byte.

Source: ASPRS LAS 1.4 R15, extra bytes VLR (user id LASF_Spec, record id 4): n x 192 bytes. Common libraries write
wrong minima and maxima for scalar fields, so nothing here is left to one.
"""

from __future__ import annotations

import math
import struct
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME, Attribute

DESCRIPTOR = 192
MOST_DESCRIPTORS = 341  # 65 535 bytes of payload / 192
UNDOCUMENTED_MOST = 255  # the size of type 0 stands in one byte

TYPE_CODES = {"uint8": 1, "int8": 2, "uint16": 3, "int16": 4, "uint32": 5, "int32": 6,
              "uint64": 7, "int64": 8, "float32": 9, "float64": 10}  # fmt: skip
TYPE_NAMES = {code: name for name, code in TYPE_CODES.items()}

NO_DATA_BIT, MIN_BIT, MAX_BIT, SCALE_BIT, OFFSET_BIT = 1, 2, 4, 8, 16


@dataclass(frozen=True, slots=True)
class ExtraField:
    """One field in the extra bytes of every record: its descriptor and where its bytes are.

    Parameters
    ----------
    descriptor : bytes
        The 192 bytes as they stand in the file.
    at : int
        Position within the extra bytes of a record.
    """

    descriptor: bytes
    at: int = 0

    @property
    def type_code(self) -> int:
        """Type code, 0 for undocumented bytes."""
        return self.descriptor[2]

    @property
    def options(self) -> int:
        """Option bits, or the size in bytes for type 0."""
        return self.descriptor[3]

    @property
    def name(self) -> str:
        """Name; all 32 bytes may be used, so there need not be a NUL."""
        return self.descriptor[4:36].split(b"\0")[0].decode("utf-8", "replace")

    @property
    def description(self) -> str:
        """Free text."""
        return self.descriptor[160:192].split(b"\0")[0].decode("utf-8", "replace")

    @property
    def size(self) -> int:
        """Bytes in a record; 11 to 30 are the deprecated pairs and triples; a reserved type has no size."""
        if self.type_code == 0:
            return self.options
        if self.type_code > 30:
            return 0
        scalar = np.dtype(TYPE_NAMES[(self.type_code - 1) % 10 + 1]).itemsize
        return scalar * ((self.type_code - 1) // 10 + 1)

    @property
    def dtype(self) -> np.dtype[np.generic] | None:
        """NumPy type of a scalar field, little-endian; None for undocumented bytes, pairs and triples."""
        name = TYPE_NAMES.get(self.type_code)
        return np.dtype(name).newbyteorder("<") if name else None

    def up_cast(self, position: int) -> float | int:
        """Return no_data (40), minimum (64) or maximum (88): 8 bytes as double, uint64 or int64 by the type."""
        kind = np.dtype(TYPE_NAMES[self.type_code]).kind
        code = {"f": "<d", "u": "<Q", "i": "<q"}[kind]
        return struct.unpack_from(code, self.descriptor, position)[0]  # type: ignore[no-any-return]

    @property
    def no_data(self) -> float | int | None:
        """The value that stands for "no value", or None if the field has none."""
        return self.up_cast(40) if self.type_code in TYPE_NAMES and self.options & NO_DATA_BIT else None


def parse_descriptors(payload: bytes, extra_bytes: int) -> tuple[ExtraField, ...] | None:
    """Lay the descriptors of one payload over the extra bytes of a record.

    Bytes that no descriptor covers come last, as undocumented fields. Descriptors for more bytes than a record has
    make the whole VLR invalid (R15): the answer is None.
    """
    fields: list[ExtraField] = []
    at = 0
    for start in range(0, len(payload) - DESCRIPTOR + 1, DESCRIPTOR):
        field = ExtraField(payload[start : start + DESCRIPTOR], at)
        if field.size == 0:
            return None
        fields.append(field)
        at += field.size
    if at > extra_bytes:
        return None
    while at < extra_bytes:
        size = _plain_size(extra_bytes - at)
        field = undocumented(size, len(fields) + 1)
        fields.append(replace(field, at=at))
        at += size
    return tuple(fields)


def _plain_size(size: int) -> int:
    """Return the largest size of type 0 up to `size` that readers take as a size only.

    The size stands where other types have option bits, and laspy 2.7.0 takes 8 and 16 in it for scale and offset.
    """
    size = min(size, UNDOCUMENTED_MOST)
    while size & (SCALE_BIT | OFFSET_BIT):
        size -= 1
    return size


def undocumented(size: int, number: int) -> ExtraField:
    """Describe `size` bytes of which nothing is known, so that fields behind them can be described."""
    return ExtraField(_pack(0, size, f"undocumented_{number}", "bytes without a descriptor"))


def describe(attribute: Attribute, values: NDArray[np.generic], no_data: float) -> ExtraField:
    """Make the descriptor of one written attribute, with true minimum and maximum.

    Parameters
    ----------
    attribute : Attribute
        What is written.
    values : ndarray of shape (n,)
        In the unit of the attribute; NaN where there is no value.
    no_data : float
        What is stored in place of NaN: NaN itself, or a finite value. Integer codes have none.
    """
    dtype = attribute.numpy_dtype
    real = dtype.kind == "f"
    options, empty = (NO_DATA_BIT, struct.pack("<d", no_data)) if real else (0, bytes(8))
    low, high = _extremes(values, dtype)
    code = "<d" if real else "<Q"
    if low is None or high is None:
        least = most = bytes(8)
    else:
        options |= MIN_BIT | MAX_BIT
        least, most = struct.pack(code, low), struct.pack(code, high)
    return ExtraField(_pack(TYPE_CODES[dtype.name], options, attribute.name, attribute.description, empty, least, most))


def _extremes(
    values: NDArray[np.generic], dtype: np.dtype[np.generic]
) -> tuple[float | int | None, float | int | None]:
    if len(values) == 0:
        return None, None
    if dtype.kind != "f":
        return int(values.min()), int(values.max())  # type: ignore[attr-defined]
    # fmin passes over NaN without a copy; rounding to float32 keeps the order, so the extremes can be rounded last
    low, high = float(dtype.type(np.fmin.reduce(values))), float(dtype.type(np.fmax.reduce(values)))
    return (None, None) if math.isnan(low) else (low, high)


def _pack(
    type_code: int,
    options: int,
    name: str,
    description: str,
    no_data: bytes = bytes(8),
    least: bytes = bytes(8),
    most: bytes = bytes(8),
) -> bytes:
    return struct.pack(
        "<2xBB32s4x8s16x8s16x8s16x48x32s",
        type_code, options, name.encode(), no_data, least, most, description.encode(),
    )  # fmt: skip


def is_own(field: ExtraField, *, own_file: bool) -> bool:
    """Whether a field of an input is a result of an earlier run and not somebody else's field of the same name.

    The name must be one of ours, and either the file says that this program made it or the description agrees.
    """
    attribute = BY_NAME.get(field.name)
    return attribute is not None and (own_file or field.description == attribute.description)


def renamed(field: ExtraField, taken: set[str]) -> ExtraField:
    """Give a foreign field whose name a result needs another one: `<name>_input`, numbered if that is taken too."""
    name, number = f"{field.name}_input", 1
    while name in taken:
        number += 1
        name = f"{field.name}_input{number}"
    head = field.descriptor[:4] + name.encode().ljust(32, b"\0")
    return replace(field, descriptor=head + field.descriptor[36:])
