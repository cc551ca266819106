# SPDX-License-Identifier: MIT
"""What the joints did that the user named, as a table."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from scanstrain.outputs.joint_table import WHOLE
from scanstrain.outputs.report.tables import MISSING, Cell, Table, measured, plain_number, table

Summary = Mapping[str, Any]
_LENGTH, _ANGLE = "disp_n", "spin"
"""Attributes whose units lengths and angles are written in."""
SMALLEST = 0.0001
"""Below this a probability is not written out."""


def joint_tables(summary: Summary) -> list[Table]:
    """Give one table with every joint as a whole, and one with the places along them; none without joints."""
    rows = summary.get("joints") or []
    if not rows:
        return []
    whole = [[row["joint"], *_jump(row)] for row in rows if row["place"] == WHOLE]
    places = [
        [f"{row['joint']}, {row['place']}", plain_number(row["along"], 2, "m"), *_jump(row), row["reason"] or ""]
        for row in rows
        if row["place"] != WHOLE
    ]  # fmt: skip
    jumps = ("Opening", "Slip", "Step", "Hinge", "p-value of no movement")
    note = (
        "With 95 % intervals. Opening is positive where the joint opens, slip where the other side moves to the left, "
        "step where the right side comes forward, hinge where it opens at the free side. "
        f"{MISSING}: the data do not support it."
    )
    made = [table("Joints as a whole", ("Joint", *jumps), whole, note=note)]
    if places:
        made.append(table("Places along the joints", ("Joint, place", "Along it", *jumps, "Why not"), places))
    return made


def _jump(row: Mapping[str, Any]) -> list[Cell]:
    lengths = [measured(row[name], row[f"{name}_sd"], _LENGTH) for name in ("opening", "slip", "step")]
    p = row["significance"]
    chance = Cell(f"under {SMALLEST:.4f}", p) if p is not None and p < SMALLEST else plain_number(p, 4)
    return [*lengths, measured(row["hinge"], row["hinge_sd"], _ANGLE), chance]
