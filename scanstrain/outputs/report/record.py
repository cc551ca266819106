# SPDX-License-Identifier: MIT
"""The run record: inputs with their hashes, options, versions, times."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from scanstrain.outputs.report.tables import MISSING, Cell, Row, Table, plain_number, table

Summary = Mapping[str, Any]
_INPUT = {
    "label": "Label", "file": "File", "date": "Date", "points": "Points", "dropped_points": "Points left out",
    "crs": "Coordinate system", "unit": "Unit", "sha256": "SHA-256",
}  # fmt: skip


def record_tables(summary: Summary) -> list[Table]:
    """Give everything that it takes to repeat the run."""
    inputs = summary["inputs"]
    rows: list[Row] = [[title, *(_text(inputs[epoch].get(key)) for epoch in inputs)] for key, title in _INPUT.items()]
    options: list[Row] = [[name, _text(value)] for name, value in flat(summary["config"])]
    software: list[Row] = [[name, _text(version)] for name, version in summary["software"].items()]
    timing = summary["timing"]
    stages: list[Row] = [[name, plain_number(seconds, 1, "s")] for name, seconds in timing["stages"].items()]
    memory = timing["peak_memory"]
    note = (
        f"Together {timing['total']:.1f} s"
        + (
            f", {timing['points_per_second']:,.0f} points per second".replace(",", " ")
            if timing["points_per_second"]
            else ""
        )
        + (f", at most {memory / 1e9:.1f} GB of memory" if memory else "")
        + "."
    )
    return [
        table("Inputs", ("", *(epoch.capitalize() for epoch in inputs)), rows, kind="long"),
        table("Options", ("Option", "Value"), options, kind="long"),
        table("Versions", ("Software", "Version"), software, kind="long"),
        table("Time", ("Stage", "Time"), stages, note=note),
    ]


def flat(options: Mapping[str, Any], before: str = "") -> Iterator[tuple[str, Any]]:
    """Write nested options as dotted names.

    >>> list(flat({"a": {"b": 1}, "c": [2], "d": [{"e": 3}]}))
    [('a.b', 1), ('c', [2]), ('d.1.e', 3)]
    """
    for name, value in options.items():
        if isinstance(value, Mapping):
            yield from flat(value, f"{before}{name}.")
        elif isinstance(value, list) and any(isinstance(each, Mapping) for each in value):
            for position, each in enumerate(value, 1):
                yield from flat(each, f"{before}{name}.{position}.")
        else:
            yield f"{before}{name}", value


def _text(value: Any) -> Cell:
    if value is None or value == "":
        return Cell(MISSING)
    if isinstance(value, bool):
        return Cell("yes" if value else "no")
    if isinstance(value, list):
        return Cell(", ".join(str(each) for each in value) or MISSING)
    return Cell(f"{value:,}".replace(",", " ") if isinstance(value, int) else str(value))
