# SPDX-License-Identifier: MIT
"""Plain text scans (.xyz, .txt, .pts): x y z [intensity] [red green blue], one point a line.

A .pts file gives the number of points in its first line, and again before every further set-up.
"""

from __future__ import annotations

from collections.abc import Iterator
from itertools import chain, islice
from pathlib import Path
from typing import TextIO

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import InputFileError
from scanstrain.io.build import RawScan, build_epoch
from scanstrain.io.crs import FileFrame
from scanstrain.io.files import refuse
from scanstrain.io.formats import FORMATS, Format

INTENSITY, COLOUR = {4: 3, 7: 3}, {6: 3, 7: 4}
"""Number of columns -> the column of intensity, the first column of colour."""

NO_STATEMENT = "is text and states no coordinate system: coordinates are taken as metres"
COMMENTS = ("#", "//")


def read_text(path: Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read a text scan; spaces, tabs, semicolons or commas separate the columns, a dot is the decimal sign.

    Raises
    ------
    InputFileError
        Not text, not 3, 4, 6 or 7 numbers a line, fewer points than a count in the file says.
    """
    try:
        with path.open(encoding="utf-8-sig") as stream:
            blocks = list(_blocks(path, stream))
    except (OSError, ValueError) as error:
        if isinstance(error, InputFileError):
            raise
        raise refuse(path, "lines of numbers", str(error).splitlines()[0], "check the lines of the file") from error
    if len({block.shape[1] for block in blocks}) > 1:
        raise refuse(path, "the same columns in every block", "blocks that differ", "export the scan as LAS")
    table = np.concatenate(blocks)
    columns = table.shape[1]
    if columns not in (3, 4, 6, 7):
        required = "x y z, then intensity, or red green blue, or all four"
        raise refuse(path, required, f"{columns} columns", "remove the other columns")
    at, first = INTENSITY.get(columns), COLOUR.get(columns)
    setup = np.repeat(np.arange(1, len(blocks) + 1), [len(block) for block in blocks]).astype(np.uint16)
    raw = RawScan(
        path=path,
        coordinates=table[:, :3].copy(),
        frame=FileFrame(notices=(NO_STATEMENT,)),
        intensity=None if at is None else table[:, at],
        colour=None if first is None else table[:, first : first + 3],
        setup=setup,
    )
    return build_epoch(raw, origin=origin, label=label)


def _blocks(path: Path, stream: TextIO) -> Iterator[NDArray[np.float64]]:
    """Yield the table of every set-up: one for each count, or a single one in a file without counts."""
    lines = (line for line in stream if line.strip() and not line.lstrip().startswith(COMMENTS))
    first = next(lines, None)
    if first is None:
        raise refuse(path, "lines of numbers", "none")
    if not _is_count(first):
        if _is_heading(first):
            first = next(lines, "")
        yield _table(path, chain([first], lines), _separator(path, first))
        return
    while first is not None:
        if not _is_count(first):
            raise refuse(path, "as many points as the count before them says", "more")
        count, sample = int(first), next(lines, "")
        block = _table(path, islice(chain([sample], lines), count), _separator(path, sample))
        if len(block) != count:
            raise refuse(path, f"{count} points, as the count before them says", f"{len(block)}: the file is cut")
        yield block
        first = next(lines, None)


def _is_count(line: str) -> bool:
    return line.strip().isdecimal()


def _is_heading(line: str) -> bool:
    return line.lstrip()[0].isalpha() and not line.lstrip().lower().startswith(("nan", "inf"))


def _separator(path: Path, line: str) -> str | None:
    if ";" in line:
        found: str | None = ";"
    else:
        found = "," if "," in line and len(line.split(",")) > 2 and "." in line else None
    if "," in line and found != ",":
        raise refuse(path, "a dot as decimal sign", f"commas in {line.strip()[:40]!r}", "export with decimal dots")
    return found


def _table(path: Path, lines: Iterator[str], separator: str | None) -> NDArray[np.float64]:
    table = np.loadtxt(lines, delimiter=separator, comments=None, ndmin=2)
    if table.shape[0] == 0:
        raise refuse(path, "lines of numbers", "none")
    return table


FORMATS.add("text", Format((".xyz", ".txt", ".pts"), read_text))
