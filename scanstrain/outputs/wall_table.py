# SPDX-License-Identifier: MIT
"""The tables of a wall: its movement as a whole, by bands and panels, and its bulges."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.section_table import write_rows
from scanstrain.result import Result
from scanstrain.structures import bulge_rows, bulge_units, wall_rows, wall_units


def write_wall_table(result: Result, folder: Path, options: OutputOptions) -> Path | None:  # noqa: ARG001
    """Write `wall.csv` in SI units; nothing where there is no wall."""
    return None if result.wall is None else write_rows(wall_rows(result.wall), wall_units(), folder / "wall.csv")


def write_bulge_table(result: Result, folder: Path, options: OutputOptions) -> Path | None:  # noqa: ARG001
    """Write `bulges.csv` in SI units; nothing where there is no wall."""
    return None if result.wall is None else write_rows(bulge_rows(result.wall), bulge_units(), folder / "bulges.csv")


def wall_data(result: Result) -> dict[str, Any] | None:
    """Return parts and bulges of a wall with what their numbers mean, SI units."""
    if result.wall is None:
        return None
    units = {**wall_units(), **bulge_units()}
    return {
        "definitions": {name: f"{meaning} [{unit}]" for name, (unit, meaning) in units.items()},
        "parts": wall_rows(result.wall),
        "bulges": bulge_rows(result.wall),
    }
