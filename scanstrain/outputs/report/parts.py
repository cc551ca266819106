# SPDX-License-Identifier: MIT
"""Zones, triggers and the budget of even strain as tables."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from scanstrain.outputs.report.tables import MISSING, Cell, Table, measured, neat, plain_number, table
from scanstrain.outputs.triggers import trigger_sentence
from scanstrain.outputs.words import TITLES

Summary = Mapping[str, Any]
SHOWN = ("disp_n", "tilt", "strain_1", "strain_2")
"""Quantities of a zone in the table; `summary.json` holds all of them."""


def zone_table(summary: Summary) -> Table | None:
    """Give mean and extreme of the main quantities in each zone; None where only the whole object is known."""
    zones = summary.get("zones") or {}
    if len(zones) < 2:
        return None
    rows = [
        [name, plain_number(zone["area"], 1, "m²"), plain_number(zone["area_discovered"], 1, "m²"),
         *(_mean(zone, quantity) for quantity in SHOWN[:1]), *(_extreme(zone, quantity) for quantity in SHOWN)]
        for name, zone in zones.items()
    ]  # fmt: skip
    heads = ("Zone", "Area", "Changed", "Mean normal displacement", *(f"{TITLES[name][0]}, extreme" for name in SHOWN))
    note = f"With 95 % intervals. {MISSING}: not observable. `summary.json` holds every quantity of every zone."
    return table("Zones", heads, rows, note=note)


def trigger_table(summary: Summary) -> Table | None:
    """Say how the result stands to each limit of the user; None where there is none."""
    triggers = summary.get("triggers") or []
    if not triggers:
        return None
    rows = [
        [row["name"], row["zone"] or "whole object", TITLES.get(row["quantity"], (row["quantity"],))[0], row["grade"],
         row["exceeded"] or MISSING, row["possible"] or MISSING, neat(trigger_sentence(row))]
        for row in triggers
    ]  # fmt: skip
    heads = ("Trigger", "Where", "Quantity", "Grade", "Level exceeded", "Level possible", "In words")
    note = (
        "Limits are those of the user's configuration; none comes with the program. “Possible”: the 95 % interval "
        "holds the limit."
    )
    return table("Triggers", heads, rows, note=note)


def budget_table(summary: Summary) -> Table | None:
    """Put what could pass for an even strain beside the change of area that was measured."""
    budget = summary.get("budget")
    if not budget:
        return None
    measure = budget["dilation"]
    first: list[Cell | str] = ["Measured, mean of the object"]
    first.append(measured(measure["mean"], measure["sd"], "dilation") if measure else Cell("not observable"))
    rows = [[*first, ""]]
    rows += [
        [line["name"][:1].upper() + line["name"][1:], measured(line["dilation"], line["dilation_sd"], "dilation"),
         line["note"]]
        for line in budget["lines"]
    ]  # fmt: skip
    return table(
        "Relative change of area, and what could make one without strain", ("Part", "Size, 95 %", "Note"), rows
    )


def measure_table(summary: Summary) -> Table | None:
    """Say how far the other strain measures lie from the one used; None where that was not asked for."""
    compared = summary["strain_measure"].get("compared") or []
    if not compared:
        return None
    rows = [
        [row["measure"].replace("_", " "), plain_number(_microstrain(row["difference"]), 3, "µε"),
         measured(row["strain"], row["sd"], "strain_1")]
        for row in compared
    ]  # fmt: skip
    heads = ("Measure", "Largest difference of a principal strain", "That strain in the measure used, 95 %")
    note = "All measures are formed after the local rotation is removed, so small and Biot strain agree."
    return table("Other strain measures", heads, rows, note=note)


def _microstrain(strain: float | None) -> float | None:
    return None if strain is None else 1e6 * strain


def _mean(zone: Mapping[str, Any], quantity: str) -> Cell:
    found = zone["quantities"].get(quantity)
    return measured(found["mean"], found["mean_sd"], quantity) if found else Cell(MISSING)


def _extreme(zone: Mapping[str, Any], quantity: str) -> Cell:
    found = zone["quantities"].get(quantity)
    extreme = found["extreme"] if found else None
    return measured(extreme["value"], extreme["sd"], quantity) if extreme else Cell(MISSING)
