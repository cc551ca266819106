# SPDX-License-Identifier: MIT
"""Results as a person reads them on a terminal: a screen a comparison or scan, a line a comparison of a batch."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from scanstrain.attributes import BY_NAME, Attribute
from scanstrain.batch import Outcome
from scanstrain.inspection import CAPTURE_RANGE, Inspected, Inspection
from scanstrain.outputs.even_strain import budget_sentences
from scanstrain.outputs.findings import verdict
from scanstrain.outputs.triggers import trigger_sentence
from scanstrain.outputs.words import amount, digits, number, percent

WIDTH = 100
"""Longest line of running text [characters]."""

ENOUGH_OVERLAP = 0.2
"""Share of common points below which a remark is due; an alignment on less hangs on few features."""

SHOWN = ("disp_n", "tilt", "curv_1", "curv_2", "strain_1", "strain_2", "spin")
"""Attributes of the table; `summary.json` has all of them."""

_HEADS = ("5 %", "median", "95 %", "detection limit", "observable", "changed")
Summary = Mapping[str, Any]


def comparison_screen(name: str, folder: Path, summary: Summary, *, verbose: bool = False) -> str:
    """Return the screen of one finished comparison: the verdict, a table of values, warnings, and where it all is."""
    lines = [name, *_paragraphs(verdict(summary)), *_triggers(summary), "", *_values(summary["results"]), ""]
    lines += _paragraphs(f"Warning: {text}" for text in summary["warnings"])
    if verbose:
        lines += _paragraphs(budget_sentences(summary["budget"]))
        lines += _paragraphs(f"Caution: {text}" for text in summary["cautions"])
        lines += [f"  {stage}: {seconds:.1f} s" for stage, seconds in summary["timing"]["stages"].items()]
    return "\n".join([*lines, f"Written to {folder}"])


def _triggers(summary: Summary) -> list[str]:
    """One line for each of the user's own triggers; none where there are none."""
    return _paragraphs(f"Trigger {trigger_sentence(row)}" for row in summary["triggers"])


def _values(results: Mapping[str, Mapping[str, Any]]) -> list[str]:
    rows: list[Sequence[str]] = [("over the gauges", *_HEADS)]
    for name in SHOWN:
        found, attribute = results[name], BY_NAME[name]
        ends = max(abs(found["p05"] or 0.0), abs(found["p95"] or 0.0))
        decimals = digits((found["detection_limit"] or ends) * attribute.factor)
        numbers = [_cell(found[key], attribute, decimals) for key in ("p05", "median", "p95", "detection_limit")]
        shares = [
            "-" if found[key] is None else percent(found[key]) for key in ("share_observable", "share_discovered")
        ]
        rows.append((f"{name} [{attribute.person}]", *numbers, *shares))
    return aligned(rows)


def _cell(value: float | None, attribute: Attribute, decimals: int) -> str:
    return "-" if value is None else number(value * attribute.factor, decimals)


def aligned(rows: Sequence[Sequence[str]]) -> list[str]:
    """Put the first column to the left and the others to the right."""
    widths = [max(len(row[column]) for row in rows) for column in range(len(rows[0]))]
    return [
        (
            "  "
            + row[0].ljust(widths[0])
            + "".join("  " + cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))
        ).rstrip()
        for row in rows
    ]


def _paragraphs(texts: Iterable[str]) -> list[str]:
    return [
        line for text in texts for line in textwrap.wrap(text, WIDTH, initial_indent="  ", subsequent_indent="    ")
    ]


def batch_screen(outcomes: Sequence[Outcome], folder: Path, *, notes: Sequence[str] = ()) -> str:
    """Return a table with one line for each comparison of a batch, its triggers, and notes on the series."""
    rows: list[Sequence[str]] = [("comparison", "result", "gauges", "changed", "normal displacement", "limit", "time")]
    for outcome in outcomes:
        rows.append((outcome.name, outcome.state, *_findings(outcome.summary), f"{outcome.seconds:.0f} s"))
    written = [f"Written to {folder}"] if any(outcome.done for outcome in outcomes) else []
    return "\n".join([*aligned(rows), *_batch_triggers(outcomes), *_paragraphs(notes), *written])


def _batch_triggers(outcomes: Sequence[Outcome]) -> list[str]:
    summaries = [(outcome.name, outcome.summary) for outcome in outcomes if outcome.summary is not None]
    return _paragraphs(
        f"{name}: trigger {trigger_sentence(row)}" for name, summary in summaries for row in summary["triggers"]
    )


def _findings(summary: Summary | None) -> tuple[str, str, str, str]:
    """Gauges with a value, gauges that changed, largest significant normal displacement, and its detection limit."""
    if summary is None:
        return "-", "-", "-", "-"
    gauges, found, attribute = summary["gauges"], summary["results"]["disp_n"], BY_NAME["disp_n"]
    largest, limit = found["largest_change"], found["detection_limit"]
    moved = "-" if largest is None else amount(largest["value"], attribute)
    return (
        f"{gauges['fine']} of {gauges['count']}",
        str(gauges["discovered"]),
        moved,
        "-" if limit is None else amount(limit, attribute),
    )


def inspection_screen(each: Inspected) -> str:
    """Return the screen of one scan."""
    found = each.found
    if found is None:
        return f"{each.file}\n  cannot serve"
    lines = [each.file, *(f"  {name:<13}{value}" for name, value in _facts(found) if value)]
    lines += _paragraphs(f"Note: {text}." for text in found.notices)
    lines += _paragraphs(f"Limit: {text}." for text in found.limits)
    return "\n".join([*lines, *_paragraphs(_overlap(each))])


def _facts(found: Inspection) -> list[tuple[str, str]]:
    x, y, z = found.extent
    box = zip("xyz", found.low, found.high, strict=True)
    texture = "none, or the same everywhere"
    if found.intensity is not None:
        texture = f"{found.intensity[0]:.0f} to {found.intensity[1]:.0f} (5 % to 95 % of the points)"
    return [
        ("file", ", ".join(part for part in (found.point_format, found.date and f"written {found.date}") if part)),
        ("points", number(found.points, 0) + (f", {number(found.dropped, 0)} left out" if found.dropped else "")),
        ("extent", f"{x:.2f} x {y:.2f} x {z:.2f} m"),
        ("from, to", ", ".join(f"{axis} {low:.3f} to {high:.3f}" for axis, low, high in box)),
        ("coordinates", f"{_short_crs(found.crs)}; unit {found.unit}"),
        ("spacing", f"{found.spacing * 1e3:.1f} mm to the nearest point; {number(found.density, 0)} points per m²"),
        (
            "noise",
            f"{found.noise * 1e3:.2f} mm about planes of {found.patch * 1e3:.0f} mm radius, fine relief included",
        ),
        ("intensity", texture),
        ("colour", "yes" if found.colour else "none, or the same everywhere"),
        ("set-ups", str(found.setups) if found.setups else "not told apart"),
        ("duplicates", percent(found.duplicates)),
    ]


def _short_crs(wkt: str) -> str:
    """Return the name that a coordinate system carries in its definition."""
    name = re.search(r'"([^"]+)"', wkt)
    return name[1] if name else wkt or "system not stated"


def _overlap(each: Inspected) -> list[str]:
    if each.overlap is None:
        return []
    words = (
        f"Overlap: {percent(each.overlap)} of the points lie within {CAPTURE_RANGE:g} m of {Path(each.against).name}"
    )
    if each.overlap < ENOUGH_OVERLAP:
        words += ', too few to compare the two as they stand: check the coordinates, or search with start = "coarse"'
    return [words + "."]
