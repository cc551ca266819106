# SPDX-License-Identifier: MIT
"""The table of scan formats. A format is one module that adds itself in one line at its end."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from scanstrain.epoch import Epoch
from scanstrain.errors import InputFileError, explain
from scanstrain.registry import Registry


@dataclass(frozen=True, slots=True)
class Format:
    """One file format: its suffixes, lower case with the dot, and `read(path, *, origin, label) -> Epoch`."""

    suffixes: tuple[str, ...]
    read: Callable[..., Epoch]


FORMATS: Registry[Format] = Registry("scan format")


def format_of(path: Path) -> Format:
    """Choose a format by suffix.

    Raises
    ------
    InputFileError
        No format has this suffix.
    """
    suffix = path.suffix.lower()
    known = [s for name in FORMATS for s in FORMATS[name].suffixes]
    for name in FORMATS:
        if suffix in FORMATS[name].suffixes:
            return FORMATS[name]
    raise InputFileError(
        explain(str(path), "a scan file: " + ", ".join(known), f"suffix {suffix!r}", "export the scan as LAS or LAZ")
    )
