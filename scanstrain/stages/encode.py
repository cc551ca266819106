# SPDX-License-Identifier: MIT
"""Frozen dataclasses of arrays as bytes and back: JSON for the structure, NPZ for the arrays, nothing that can run.

An output folder may come from somebody else. So there is no pickle: only the classes of `classes.py` are made, with
exactly their fields, and arrays of plain numbers or text.
"""

from __future__ import annotations

import io
import json
import zipfile
from collections.abc import Sequence
from dataclasses import fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.stages.classes import ALLOWED

TREE = "tree"
"""Name of the entry with the structure."""
KINDS = "biufU"
"""Kinds of array that may be kept: truth values, whole numbers, floats, text."""

Array = NDArray[Any]


class DamagedStageError(ValueError):
    """Bytes that are no kept stage; the stage is then computed again."""


def encode(value: Any) -> bytes:
    """Write a value as bytes; arrays keep type, order in memory and every bit.

    Raises
    ------
    TypeError
        A class that may not be kept: a mistake of the program, not of the data.
    """
    arrays: list[Array] = []
    tree = json.dumps(_fold(value, arrays), allow_nan=True)
    stream = io.BytesIO()
    named: Any = {TREE: np.array(tree), **{f"a{number}": array for number, array in enumerate(arrays)}}
    np.savez(stream, **named)
    return stream.getvalue()


def decode(data: bytes) -> Any:
    """Make the value again that `encode` wrote.

    Raises
    ------
    DamagedStageError
        The bytes hold anything else: other classes, other fields, objects in place of numbers.
    """
    try:
        with np.load(io.BytesIO(data), allow_pickle=False) as found:
            arrays = [found[f"a{number}"] for number in range(len(found.files) - 1)]
            return _unfold(json.loads(str(found[TREE])), arrays)
    except (ValueError, KeyError, TypeError, IndexError, OSError, EOFError, zipfile.BadZipFile) as error:
        raise DamagedStageError(f"no stage of this program: {error}") from error


def _fold(value: Any, arrays: list[Array]) -> Any:
    """Replace what JSON does not have by small tables that say what stood there."""
    kind = type(value)
    if value is None or kind in (bool, int, float, str):
        return value
    if kind is tuple:
        return {"tuple": [_fold(item, arrays) for item in value]}
    if kind is dict:
        return {"dict": [[_text(key), _fold(item, arrays)] for key, item in value.items()]}
    if isinstance(value, np.ndarray | np.generic):
        array = np.asarray(value)
        if array.dtype.kind not in KINDS:
            raise TypeError(f"an array of {array.dtype} cannot be kept")
        arrays.append(array)
        return {"array" if kind is np.ndarray else "number": len(arrays) - 1}
    if ALLOWED.get(kind.__name__) is kind:
        return {"class": kind.__name__, "fields": {f.name: _fold(getattr(value, f.name), arrays) for f in fields(kind)}}
    raise TypeError(f"{kind.__module__}.{kind.__qualname__} cannot be kept: it is not in stages/classes.py")


def _text(key: object) -> str:
    if type(key) is not str:
        raise TypeError(f"a mapping with the key {key!r} cannot be kept")
    return key


def _unfold(tree: Any, arrays: Sequence[Array]) -> Any:
    if tree is None or type(tree) in (bool, int, float, str):
        return tree
    match tree:
        case {"tuple": list(items), **rest} if not rest:
            return tuple(_unfold(item, arrays) for item in items)
        case {"dict": list(items), **rest} if not rest:
            return {_text(key): _unfold(item, arrays) for key, item in items}
        case {"array": int(number), **rest} if not rest:
            return _plain(arrays[number])
        case {"number": int(number), **rest} if not rest:
            return _plain(arrays[number])[()]
        case {"class": str(name), "fields": dict(values), **rest} if not rest:
            return _made(name, values, arrays)
    raise ValueError("a structure of another kind")


def _plain(array: Array) -> Array:
    if array.dtype.kind not in KINDS:
        raise ValueError(f"an array of {array.dtype}")
    return array


def _made(name: str, values: dict[str, Any], arrays: Sequence[Array]) -> Any:
    if name not in ALLOWED:
        raise ValueError(f"the class {name}")
    kind: Any = ALLOWED[name]
    if set(values) != {field.name for field in fields(kind)}:
        raise ValueError(f"{name} with other fields")
    return kind(**{key: _unfold(item, arrays) for key, item in values.items()})
