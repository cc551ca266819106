# SPDX-License-Identifier: MIT
"""Every quantity of a result: its figure, its numbers, and how much of it can be seen."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from scanstrain.outputs.report.images import Shown
from scanstrain.outputs.report.tables import MISSING, Cell, Row, Table, measured, neat, plain_number, sized, table
from scanstrain.outputs.words import NORMAL_95, TITLES, number, percent

Summary = Mapping[str, Any]
LISTED = (
    "disp_n", "disp_x", "disp_y", "disp_z", "tilt", "strain_1", "strain_2", "strain_u", "strain_v", "shear_uv",
    "shear_max", "dilation", "spin", "curv_1", "curv_2", "bend_1", "bend_2",
)  # fmt: skip
"""Quantities in the table, in its order."""


@dataclass(frozen=True, slots=True)
class Quantity:
    """One quantity with its map.

    Parameters
    ----------
    name : str
    title, meaning : str
    facts : tuple of (str, str)
        Numbers beside the map.
    figure : Shown or None
        None where the map stands elsewhere on the page.
    """

    name: str
    title: str
    meaning: str
    facts: tuple[tuple[str, str], ...]
    figure: Shown | None


def quantity_table(summary: Summary) -> Table:
    """Put the numbers of all quantities side by side."""
    rows: list[Row] = []
    for name in LISTED:
        result = summary["results"][name]
        largest = result["largest_change"]
        change = measured(largest["value"], largest["sd"], name) if largest and _clear(largest) else Cell(MISSING)
        rows.append([
            TITLES[name][0], sized(result["p05"], name), sized(result["median"], name), sized(result["p95"], name),
            change, sized(result["detection_limit"], name), _share(result["share_observable"]),
        ])  # fmt: skip
    heads = ("Quantity", "5 %", "Median", "95 %", "Largest change, 95 %", "Detection limit, median", "Observable")
    note = (
        "Over gauges. The largest change is that of all gauges that changed beyond the false-discovery control, single "
        f"ones included. {MISSING}: none beyond its own interval, not observable, or no error of its own is stored."
    )
    return table("All quantities", heads, rows, note=note)


def quantities(summary: Summary, figures: Sequence[Shown], *, elsewhere: str) -> list[Quantity]:
    """Pair each map of a quantity with its numbers.

    Parameters
    ----------
    summary : mapping
    figures : sequence of Shown
        The maps, named map_<attribute>.
    elsewhere : str
        Name of the map that stands at the top of the page already.
    """
    found = []
    for figure in figures:
        name = figure.name.removeprefix("map_")
        facts = tuple(_facts(summary["results"][name], name))
        title, meaning = TITLES[name]
        found.append(Quantity(name, title, meaning, facts, None if figure.name == elsewhere else figure))
    return found


def _facts(result: Mapping[str, Any], name: str) -> Iterator[tuple[str, str]]:
    if result["share_observable"] is not None:
        yield "Observable", f"{percent(result['share_observable'])} of the gauges"
    if result["share_discovered"] is not None:
        yield "Changed", f"{percent(result['share_discovered'])} of those"
    if result["median"] is not None:
        yield "Median", sized(result["median"], name).text
        yield "From 5 % to 95 %", f"{sized(result['p05'], name).text} to {sized(result['p95'], name).text}"
    if result["detection_limit"] is not None:
        yield "Detection limit", f"{sized(result['detection_limit'], name).text} (95 %, median)"
    largest = result["largest_change"]
    if largest and _clear(largest):
        yield "Largest change", f"{measured(largest['value'], largest['sd'], name).text} (95 %)"
        yield "Found at", neat("x {:.2f}, y {:.2f}, z {:.2f}".format(*largest["at"]))


def quality_tables(summary: Summary) -> list[Table]:
    """Say how many gauges carry numbers and why others do not, what noise was found, and how errors were calibrated."""
    gauges = summary["gauges"]
    count = max(gauges["count"], 1)
    status: list[Row] = [
        [word[:1].upper() + word[1:], plain_number(many), _share(many / count)]
        for word, many in sorted(gauges["by_status"].items(), key=lambda pair: -pair[1])
    ]
    seen: list[Row] = [
        [TITLES[name][0], _share(summary["results"][name]["share_observable"])]
        for name in ("disp_n", "tilt", "curv_1", "strain_1", "spin")
    ]
    found = [
        table("Gauges by status", ("Status", "Gauges", "Share"), status,
              note=f"{number(gauges['count'], 0)} gauges of {number(gauges['gauge_length'], 2)} m, "
                   f"{number(gauges['gauge_spacing'], 2)} m apart."),
        table("What is observable", ("Component", "Share of the gauges"), seen),
    ]  # fmt: skip
    return [*found, *_calibration(summary["calibration"])]


def _calibration(calibration: Mapping[str, Any]) -> Iterator[Table]:
    groups = list(dict.fromkeys(group for factors in calibration["factors"].values() for group in factors))
    if not groups:
        return
    rows = [
        [kind[:1].upper() + kind[1:], *(plain_number(factors.get(group), 2) for group in groups)]
        for kind, factors in calibration["factors"].items()
    ]
    note = (
        f"Factors on the standard errors, from the scatter on the ground called “{calibration['ground']}” "
        f"({number(calibration['gauges'], 0)} gauges); 1.00 leaves them as they are."
    )
    yield table("Calibration of the standard errors", ("Component", *groups), rows, note=note)


def _clear(largest: Mapping[str, Any]) -> bool:
    """Whether a change passes its own interval: a gauge counts as changed if any of its components did."""
    return largest["sd"] is not None and abs(largest["value"]) > NORMAL_95 * largest["sd"]


def _share(share: float | None) -> Cell:
    return Cell(MISSING) if share is None else Cell(percent(share), share)
