# SPDX-License-Identifier: MIT
"""Tables of a page: what is read, and what they are sorted by."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from dataclasses import dataclass

from scanstrain.attributes import BY_NAME, Attribute
from scanstrain.outputs.words import amount, interval, number

MISSING = "–"
"""Stands where there is no number."""
NARROW, FIXED = "\u202f", "\u00a0"
"""Spaces that no line is broken at: between thousands, and between a number and its unit."""
_HYPHEN = re.compile(r"(?<![\w.\-])-(?=[\d.])")
_THOUSANDS = re.compile(r"(?<=\d)\s(?=\d{3}(?!\d))")
_TOGETHER = re.compile(r"(?<=\d) (?=(?:±|%|mm|m²|m|mrad|rad|µε|1/km|ppm|h)(?:[\s.,;)]|$))|(?<=±) (?=\d)")


@dataclass(frozen=True, slots=True)
class Cell:
    """One cell.

    Parameters
    ----------
    text : str
        What is read.
    sort : float or None
        What a column is sorted by, instead of the text.
    link : str
        Where it leads; empty if nowhere.
    """

    text: str
    sort: float | None = None
    link: str = ""

    @property
    def right(self) -> bool:
        """Whether it is set to the right, as numbers are."""
        return self.sort is not None or self.text == MISSING


@dataclass(frozen=True, slots=True)
class Table:
    """A table with a caption; the first cell of a row names the row.

    Parameters
    ----------
    caption : str
    heads : tuple of str
    rows : tuple of tuple of Cell
    note : str
        What belongs under it.
    kind : {"", "brief", "long"}
        How it is set: "long" breaks long words.
    """

    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[Cell, ...], ...]
    note: str = ""
    kind: str = ""

    def right(self, column: int) -> bool:
        """Whether a column holds numbers."""
        return bool(self.rows) and all(row[column].right for row in self.rows)


Row = list[Cell | str]
"""Cells of a row; plain strings become cells."""


def table(
    caption: str, heads: Sequence[str], rows: Sequence[Sequence[Cell | str]], *, note: str = "", kind: str = ""
) -> Table:
    """Make a table; plain strings become cells."""
    cells = tuple(tuple(each if isinstance(each, Cell) else Cell(each) for each in row) for row in rows)
    return Table(caption, tuple(heads), cells, note, kind)


def neat(text: str) -> str:
    """Set minus signs before numbers, and spaces within numbers that no line is broken at.

    >>> neat("from -3.5 to -2; false-discovery")
    'from −3.5 to −2; false-discovery'
    >>> neat("-1 857 ± 12 µε at x 5").replace(FIXED, "~").replace(NARROW, "'")
    "−1'857~±~12~µε at x 5"
    """
    return _TOGETHER.sub(FIXED, _THOUSANDS.sub(NARROW, _HYPHEN.sub("−", text)))


def measured(value: float | None, sd: float | None, name: str) -> Cell:
    """Write a stored value of an attribute with its 95 % interval."""
    attribute = BY_NAME[name]
    if value is None or sd is None or not (math.isfinite(value) and math.isfinite(sd)):
        return Cell(MISSING)
    return Cell(neat(interval(value, sd, attribute)), value * attribute.factor)


def sized(value: float | None, name: str) -> Cell:
    """Write a stored value of an attribute with its unit."""
    if value is None or not math.isfinite(value):
        return Cell(MISSING)
    attribute: Attribute = BY_NAME[name]
    return Cell(neat(amount(value, attribute)), value * attribute.factor)


def plain_number(value: float | None, decimals: int = 0, unit: str = "") -> Cell:
    """Write a number with so many decimals."""
    if value is None or not math.isfinite(value):
        return Cell(MISSING)
    return Cell(neat(f"{number(value, decimals)} {unit}".rstrip()), float(value))
