# SPDX-License-Identifier: MIT
"""Values of every point on disk, one file an attribute, written in the order of the points and read as arrays."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray


class Columns(Mapping[str, NDArray[Any]]):
    """A mapping of arrays in files of one folder.

    Every look-up maps its file anew, so that the pages of one attribute are let go before the next one is read.
    """

    def __init__(self, folder: Path) -> None:
        folder.mkdir()
        self._folder = folder
        self._kind: dict[str, np.dtype[Any]] = {}

    def append(self, values: Mapping[str, NDArray[Any]]) -> None:
        """Add the values of the next points; the same names every time."""
        for name, part in values.items():
            self._kind.setdefault(name, part.dtype)
            with (self._folder / name).open("ab") as stream:
                np.ascontiguousarray(part, self._kind[name]).tofile(stream)

    def __getitem__(self, name: str) -> NDArray[Any]:
        if name not in self._kind:
            raise KeyError(name)
        return np.memmap(self._folder / name, dtype=self._kind[name], mode="r")

    def __iter__(self) -> Iterator[str]:
        return iter(self._kind)

    def __len__(self) -> int:
        return len(self._kind)
