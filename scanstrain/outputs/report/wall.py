# SPDX-License-Identifier: MIT
"""How a wall moved as a whole, by bands and panels, and where it bulges, as tables."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from scanstrain.outputs.report.tables import MISSING, Cell, Row, Table, measured, neat, plain_number, table

Summary = Mapping[str, Any]
SMALLEST = 0.0001
"""Below this a probability is not written out."""
_PLACE = "disp_n"
"""Attribute whose unit lengths are written in."""
_ANGLE = "spin"
"""The same for angles with a sign."""


def wall_tables(summary: Summary) -> list[Table]:
    """Give the tables of a wall; none where the object is none."""
    wall = summary.get("wall")
    if not wall:
        return []
    return [_parts(wall["parts"]), *([_bulges(wall["bulges"])] if wall["bulges"] else [])]


def _parts(parts: list[Mapping[str, Any]]) -> Table:
    rows: list[Row] = [
        [part["kind"], _span(part["left"], part["right"]), _span(part["bottom"], part["top"]),
         measured(part["displacement"], part["displacement_sd"], _PLACE),
         measured(part["lean_change"], part["lean_change_sd"], _ANGLE),
         measured(part["yaw_change"], part["yaw_change_sd"], _ANGLE),
         measured(part["lean"], part["lean_sd"], _ANGLE), plain_number(part["gauges"])]
        for part in parts
    ]  # fmt: skip
    heads = ("Part", "Along the wall", "Above its foot", "Normal displacement", "Change of lean", "Change of yaw",
             "Lean at the reference date", "Gauges")  # fmt: skip
    note = (
        "With 95 % intervals. Displacement and lean are positive to the free side, yaw where the right end came "
        f"forward. {MISSING}: the data do not support it."
    )
    return table("Movement of the wall, of its bands and panels", heads, rows, note=note)


def _bulges(bulges: list[Mapping[str, Any]]) -> Table:
    rows: list[Row] = [
        [bulge["kind"], plain_number(bulge["along"], 2, "m"), plain_number(bulge["up"], 2, "m"),
         measured(bulge["height"], bulge["height_sd"], _PLACE), plain_number(bulge["area"], 2, "m²"),
         _chance(bulge["chance"]), "" if bulge["closed"] else "may be larger than it seems"]
        for bulge in bulges
    ]  # fmt: skip
    heads = ("Kind", "Along the wall", "Above its foot", "Height, 95 %", "Area", "Chance", "Extent")
    note = "After removal of the best plane. Chance: probability of such a height on a wall that moved as a plane."
    return table("Bulges and hollows", heads, rows, note=note)


def _chance(p: float | None) -> Cell:
    """A probability, and never nought where it is only small."""
    if p is None or p >= SMALLEST:
        return plain_number(p, 4)
    return Cell(f"under {SMALLEST:.4f}", p)


def _span(low: float | None, high: float | None) -> Cell:
    if low is None or high is None:
        return Cell(MISSING)
    return Cell(neat(f"{low:.2f} to {high:.2f} m"), low)
