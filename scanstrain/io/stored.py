# SPDX-License-Identifier: MIT
"""Result values as they stand in the file: in table order, in the stored type, no-data filled in."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from tempfile import TemporaryFile
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.io.las_extra import ExtraField, describe
from scanstrain.mapped import is_mapped, release, slices
from scanstrain.registry import unknown_name


@dataclass(frozen=True, slots=True)
class StoredValues:
    """Values of every point of a file, and RGB if given (under the name "rgb")."""

    values: Mapping[str, NDArray[Any]]
    no_data: float

    def piece(self, name: str, start: int, stop: int) -> NDArray[Any]:
        """Return the stored values of points [start, stop): converted piece by piece, so that no copy is large."""
        part = self.values[name][start:stop]
        if name == "rgb":
            return part
        part = part.astype(BY_NAME[name].numpy_dtype)
        release(self.values[name])
        if part.dtype.kind == "f":
            part[np.isnan(part)] = self.no_data
        return part

    def descriptors(self) -> tuple[ExtraField, ...]:
        """Return one descriptor per attribute, in table order."""
        found = []
        for attribute in ATTRIBUTES:
            if attribute.name in self.values:
                found.append(describe(attribute, self.values[attribute.name], self.no_data))
                release(self.values[attribute.name])
        return tuple(found)


def check_values(
    values: Mapping[str, NDArray[Any]],
    colour: NDArray[np.uint16] | None,
    *,
    count: int,
    no_data: float | None,
    source: Path,
) -> StoredValues:
    """Check that values can be stored as they are, without wrapping, truncation or confusion with no-data.

    Raises
    ------
    OptionError
        A name that is not in the table, a wrong length, a code that does not fit, an infinite value, or a value equal
        to `no_data`.
    """
    if no_data is not None and not -np.finfo(np.float32).max <= no_data <= np.finfo(np.float32).max:
        raise OptionError(explain("no_data", "a finite float32 value", str(no_data), "give for example -9999.0"))
    checked: dict[str, NDArray[Any]] = {}
    for name, given in values.items():
        if name not in BY_NAME:
            raise OptionError(unknown_name("attribute", name, list(BY_NAME)))
        array = np.asarray(given)
        _check_shape(source, name, array.shape, (count,))
        _check_range(name, array, no_data)
        release(array)
        checked[name] = array
    if colour is not None:
        rgb = np.asarray(colour)
        _check_shape(source, "colour", rgb.shape, (count, 3))
        if rgb.dtype != np.uint16:
            # 8-bit or 0-to-1 colours would be written as black without a word
            raise OptionError(explain("colour", "uint16 values 0 to 65535", str(rgb.dtype), "multiply 8-bit by 257"))
        checked["rgb"] = rgb
    # the file stores float32: compare with what will stand there
    return StoredValues(checked, float("nan") if no_data is None else float(np.float32(no_data)))


def _check_shape(source: Path, name: str, got: tuple[int, ...], required: tuple[int, ...]) -> None:
    if got != required:
        where = f"{source}: {name}"
        raise OptionError(
            explain(where, f"one row per point of the file, shape {required}", f"shape {got}", "see expand_to_file")
        )


def _check_range(name: str, array: NDArray[Any], no_data: float | None) -> None:
    dtype = BY_NAME[name].numpy_dtype
    if dtype.kind == "f":
        if array.dtype.kind not in "fiu":
            raise OptionError(explain(name, "real values", str(array.dtype), "convert to float32"))
        low, high = np.fmin.reduce(array), np.fmax.reduce(array)
        limit = np.finfo(np.float32).max
        if low < -limit or high > limit:
            raise OptionError(explain(name, "finite values or NaN", f"{low} to {high}", "mark them as NaN"))
        if no_data is not None and low <= no_data <= high and (array.astype(np.float32) == np.float32(no_data)).any():
            raise OptionError(explain("no_data", f"a value that {name} never takes", str(no_data), "give another"))
        return
    if array.dtype.kind not in "uib":
        raise OptionError(explain(name, f"whole numbers ({dtype})", str(array.dtype), f"convert to {dtype}"))
    low, high, most = int(array.min()), int(array.max()), 256**dtype.itemsize - 1
    if low < 0 or high > most:
        required = f"codes from 0 to {most}"
        raise OptionError(explain(name, required, f"{low} to {high}", "cap the values first"))


def expand_to_file(epoch: Epoch, values: Mapping[str, NDArray[Any]], *, dropped_status: int) -> dict[str, NDArray[Any]]:
    """Spread values of the points of an epoch over all points of its file.

    Points that were dropped at reading get NaN, codes get 0, and `status` gets `dropped_status`.

    Parameters
    ----------
    epoch : Epoch
        As read from the file.
    values : mapping of str to ndarray of shape (len(epoch), ...)
    dropped_status : int
        Reason code for dropped points.

    Returns
    -------
    dict of str to ndarray of shape (points of the file, ...)
        The given arrays themselves where nothing was dropped.
    """
    kept = epoch.provenance.kept
    if kept is None:
        return dict(values)
    spread = {}
    for name, array in values.items():
        fill = np.nan if array.dtype.kind == "f" else (dropped_status if name == "status" else 0)
        spread[name] = _room((len(kept), *array.shape[1:]), array)
        done = 0
        for rows in slices(len(kept)):
            chosen = kept[rows]
            part = np.full((len(chosen), *array.shape[1:]), fill, array.dtype)
            count = int(np.count_nonzero(chosen))
            part[chosen] = array[done : done + count]
            spread[name][rows], done = part, done + count
        release(array, spread[name])
    return spread


def _room(shape: tuple[int, ...], like: NDArray[Any]) -> NDArray[Any]:
    """Make an array where another of its kind lives: in memory, or in a file without a name."""
    if not is_mapped(like):
        return np.empty(shape, like.dtype)
    return np.memmap(TemporaryFile(), like.dtype, "w+", shape=shape)
