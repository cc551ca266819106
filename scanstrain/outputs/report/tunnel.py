# SPDX-License-Identifier: MIT
"""The sections of a tunnel: a table of all, drawings of those that changed most."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.figures import Picture, draw_section
from scanstrain.outputs.report.tables import MISSING, Cell, Table, measured, neat, plain_number, table
from scanstrain.outputs.words import NORMAL_95, digits, number, percent
from scanstrain.result import Result
from scanstrain.structures import Section
from scanstrain.structures.outline import unit_variance

FloatArray = NDArray[np.float64]
Summary = Mapping[str, Any]

DRAWN = 2
"""Sections that are drawn: more belong into a drawing set of their own."""
COLUMNS = {
    "horizontal_diameter_change": "Horizontal diameter",
    "vertical_diameter_change": "Vertical diameter",
    "mean_diameter_change": "Mean diameter",
    "ovality_change": "Ovality",
    "crown_up": "Crown, up",
    "invert_up": "Invert, up",
    "springline_left_out": "9 h, outwards",
    "springline_right_out": "3 h, outwards",
}
"""Quantities of the table, all of them changes."""
_CHORD = "_change"


def section_tables(summary: Summary) -> list[Table]:
    """Give the table of all sections, and one of the chords that were asked for."""
    sections = summary.get("sections")
    if not sections:
        return []
    rows = sections["rows"]
    made = [_table("Change of each section, with 95 % intervals", rows, COLUMNS)]
    chords = {name: _words(name) for name in rows[0] if name.endswith(_CHORD) and name.startswith("chord_")}
    return [*made, _table("Change of each chord, with 95 % intervals", rows, chords)] if chords else made


def section_pictures(result: Result) -> Iterator[tuple[str, Picture]]:
    """Draw the sections whose outline or diameters changed most beyond their errors, in the order of chainage."""
    ranked = sorted(result.sections, key=_strength, reverse=True)[:DRAWN]
    for section in sorted(ranked, key=lambda section: section.chainage):
        seen = np.isfinite(section.reference.radius) & np.isfinite(section.current.radius)
        seen &= (section.reference.weight > 0) & (section.current.weight > 0)
        if not seen.any():
            continue
        angle, radius = section.reference.angle[seen], section.reference.radius[seen]
        change, sd = _inwards(section, seen)
        title = f"Section at chainage {section.chainage:.2f} m"
        facts = (f"{percent(section.coverage)} of the ring shows in both epochs",)
        yield f"section_{section.chainage:.2f}", draw_section(angle, radius, change, sd, title=title, facts=facts)


def _inwards(section: Section, seen: NDArray[np.bool_]) -> tuple[FloatArray, FloatArray]:
    """Movement of each piece of arc towards the axis [m], and its error from the scatter of neighbouring pieces."""
    first, second = section.reference, section.current
    change = first.radius - second.radius
    both = np.where(seen, first.weight + second.weight, 1.0)
    weight = np.where(seen, first.weight * second.weight / both, 0.0)
    unit = unit_variance(first.angle, change, weight)
    return change[seen], np.sqrt(unit / weight[seen])


def _strength(section: Section) -> float:
    """How far the clearest of the changes of a section passes its error."""
    ratios = [
        abs(section.values[name]) / section.errors[name]
        for name in COLUMNS
        if name in section.values and section.errors[name] > 0 and math.isfinite(section.values[name])
    ]
    return max(ratios, default=0.0)


def _table(caption: str, rows: list[dict[str, Any]], columns: Mapping[str, str]) -> Table:
    known = {name: title for name, title in columns.items() if name in rows[0]}
    made = [
        [plain_number(row["chainage"], 2, "m"), Cell(percent(row["coverage"]), row["coverage"]),
         *(_cell(row, name) for name in known)]
        for row in rows
    ]  # fmt: skip
    note = f"{MISSING}: the visible arcs do not support it. Longer, upwards and outwards are positive."
    return table(caption, ("Chainage", "Ring seen", *known.values()), made, note=note)


def _cell(row: Mapping[str, Any], name: str) -> Cell:
    value, sd = row[name], row.get(f"{name}_sd")
    if name.startswith("ovality"):
        if value is None or sd is None or not (math.isfinite(value) and math.isfinite(sd)):
            return Cell(MISSING)
        half = 100 * NORMAL_95 * sd
        decimals = digits(half)
        return Cell(neat(f"{number(100 * value, decimals, sign=True)} ± {number(half, decimals)} %"), 100 * value)
    return measured(value, sd, "disp_n")


def _words(name: str) -> str:
    return name.removesuffix(_CHORD).replace("_", " ")
