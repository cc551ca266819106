# SPDX-License-Identifier: MIT
"""The table of sections: one row each, names and units in the first two rows as in the table of gauges."""

from __future__ import annotations

import csv
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np

from scanstrain.outputs.options import OutputOptions
from scanstrain.result import Result
from scanstrain.structures import section_rows, section_units

AXIS = ("axis_x", "axis_y", "axis_z")


def write_section_table(result: Result, folder: Path, options: OutputOptions) -> Path | None:  # noqa: ARG001
    """Write `sections.csv` in SI units and file coordinates; nothing where there are no sections."""
    if not result.sections:
        return None
    return write_rows(section_data(result), section_units(result.config.tunnel.chords), folder / "sections.csv")


def section_data(result: Result) -> list[dict[str, Any]]:
    """Return one mapping a section, places in file coordinates, SI units."""
    rows = section_rows(result.sections)
    for row in rows:
        for name, shift in zip(AXIS, result.reference.origin, strict=True):
            row[name] += float(shift)
    return rows


def write_rows(rows: Sequence[Mapping[str, Any]], units: Mapping[str, tuple[str, str]], target: Path) -> Path:
    """Write rows under their names and units; a cell is empty where there is no value."""
    with target.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(units)
        writer.writerow(unit for unit, _ in units.values())
        writer.writerows([_cell(row[name]) for name in units] for row in rows)
    return target


def _cell(value: float | str | int) -> str:
    if isinstance(value, str):
        return value
    return f"{value:.10g}" if np.isfinite(value) else ""
