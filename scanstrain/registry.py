# SPDX-License-Identifier: MIT
"""Named variants of one kind (strain measures, file formats, outputs): added in one line, never overwritten."""

from __future__ import annotations

import difflib
from collections.abc import Iterator
from typing import Generic, TypeVar

from scanstrain.errors import OptionError, explain

T = TypeVar("T")


class Registry(Generic[T]):
    """A small ordered table of named things.

    >>> colours = Registry("colour")
    >>> colours.add("red", 1)
    >>> colours["red"], list(colours)
    (1, ['red'])
    """

    def __init__(self, kind: str) -> None:
        self.kind = kind
        self._items: dict[str, T] = {}

    def add(self, name: str, item: T) -> None:
        """Register `item`; a name that is taken raises `ValueError`."""
        if name in self._items:
            raise ValueError(f"{self.kind} {name!r} is registered already")
        self._items[name] = item

    def __getitem__(self, name: str) -> T:
        if name not in self._items:
            raise OptionError(unknown_name(self.kind, name, list(self._items)))
        return self._items[name]

    def __contains__(self, name: object) -> bool:
        return name in self._items

    def __iter__(self) -> Iterator[str]:
        return iter(self._items)

    def __len__(self) -> int:
        return len(self._items)


def unknown_name(kind: str, name: str, known: list[str]) -> str:
    """Say that `name` is not known, and which known name it resembles."""
    near = difflib.get_close_matches(name, known, n=1)
    remedy = f"did you mean {near[0]!r}" if near else "choose one of these"
    return explain(kind, "one of " + ", ".join(known), repr(name), remedy)
