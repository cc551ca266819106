# SPDX-License-Identifier: MIT
"""index.html: all comparisons of a batch on one page."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any, Protocol
from urllib.parse import quote

from scanstrain.attributes import BY_NAME
from scanstrain.io.atomic import replacing
from scanstrain.outputs.report.head import SEEN, doubts
from scanstrain.outputs.report.page import render
from scanstrain.outputs.report.tables import MISSING, Cell, Table, measured, neat, table
from scanstrain.outputs.words import amount, number

NAME = "index.html"
MAIN = "disp_n"
"""Quantity of the overview."""
WHOLE = "whole object"


class Finished(Protocol):
    """What the page needs to know of a comparison; `summary` is None where it failed, and `error` says why."""

    @property
    def name(self) -> str:
        """REFERENCE_to_CURRENT."""

    @property
    def folder(self) -> Path:
        """Where its result is."""

    @property
    def summary(self) -> dict[str, Any] | None:
        """The content of `summary.json`."""

    @property
    def error(self) -> str:
        """Why there is none."""


def write_index(outcomes: Sequence[Finished], folder: Path) -> Path:
    """Write the overview of a batch.

    Results of earlier runs that still stand in the folder are listed too, after those of this run.

    Parameters
    ----------
    outcomes : sequence of Finished
        In the order of the batch file.
    folder : Path
        Output folder of the batch; the reports lie in folders below it.

    Returns
    -------
    Path

    Raises
    ------
    OutputError
        The page could not be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rows: list[Row] = [(each.name, _link(each, folder), each.summary, each.error) for each in outcomes]
    rows += [(name, f"{quote(name)}/report.html", summary, "") for name, summary in _earlier(outcomes, folder)]
    failed = sum(summary is None for _, _, summary, _ in rows)
    target = folder / NAME
    with replacing(target) as path:
        path.write_text(render("index.html", overview=_overview(rows), count=len(rows), failed=failed), "utf-8")
    return target


Row = tuple[str, str, Mapping[str, Any] | None, str]


def _overview(rows: Sequence[Row]) -> Table:
    """One row an epoch compared, one column a place."""
    zones = [zone for _, _, summary, _ in rows for zone in (summary or {}).get("zones") or {}]
    places = list(dict.fromkeys((WHOLE, *zones)))
    made = [
        [Cell(name, link=link if summary else ""), _date(summary), _verdict(summary, error),
         *(_largest(summary, place) for place in places)]
        for name, link, summary, error in rows
    ]  # fmt: skip
    heads = ("Comparison", "Date", "Verdict", *(f"{place[:1].upper()}{place[1:]}" for place in places))
    note = f"{MISSING}: not observable, or no such zone. The reports say where, how sure, and what could not be seen."
    caption = "Largest significant normal displacement at each place, with its 95 % interval"
    return table(caption, heads, made, note=note, kind="overview")


def _verdict(summary: Mapping[str, Any] | None, error: str) -> Cell:
    """Say in a few words what came out."""
    if summary is None:
        return Cell(f"Failed. {error}")
    gauges = summary["gauges"]
    regions = summary.get("regions")
    if not gauges["fine"]:
        said = "nothing could be evaluated"
    elif not gauges["discovered"] or (regions and not regions["found"]):
        said = _quiet(summary)
    elif regions:
        many = len(regions["found"])
        said = f"changed: {'one region' if many == 1 else f'{number(many, 0)} regions'}"
    else:
        said = f"changed at {number(gauges['discovered'], 0)} of {number(gauges['fine'], 0)} gauges"
    doubt = "; the datum is doubtful" if doubts(summary) else ""
    return Cell(neat(f"{said[:1].upper()}{said[1:]}{doubt}"))


def _quiet(summary: Mapping[str, Any]) -> str:
    result = summary["results"][MAIN]
    if (result["share_observable"] or 0) < SEEN or result["detection_limit"] is None:
        return "normal displacement is not observable"
    return f"nothing above {amount(result['detection_limit'], BY_NAME[MAIN])}"


def _largest(summary: Mapping[str, Any] | None, place: str) -> Cell:
    """Largest significant value at a place; a limit where nothing is."""
    if summary is None:
        return Cell(MISSING)
    result, regions = summary["results"][MAIN], summary.get("regions")
    if place == WHOLE:
        largest = result["largest_change"]
        if largest and not (regions and not regions["found"]):
            return measured(largest["value"], largest["sd"], MAIN)
        return Cell(_quiet(summary)) if result["detection_limit"] is not None else Cell(MISSING)
    zone = (summary.get("zones") or {}).get(place)
    extreme = ((zone or {}).get("quantities", {}).get(MAIN) or {}).get("extreme")
    if not extreme:
        return Cell(MISSING)
    if extreme["low"] <= 0 <= extreme["high"]:
        bound = max(abs(extreme["low"]), abs(extreme["high"]))
        return Cell(f"nothing above {amount(bound, BY_NAME[MAIN])}")
    return measured(extreme["value"], extreme["sd"], MAIN)


def _date(summary: Mapping[str, Any] | None) -> Cell:
    return Cell(str(((summary or {}).get("inputs") or {}).get("current", {}).get("date") or MISSING))


def _link(outcome: Finished, folder: Path) -> str:
    try:
        inside = outcome.folder.resolve().relative_to(folder.resolve()).as_posix()
    except ValueError:  # a result elsewhere is named and not linked
        return ""
    return f"{quote(inside)}/report.html"


def _earlier(outcomes: Sequence[Finished], folder: Path) -> list[tuple[str, Mapping[str, Any]]]:
    """Results in the folder that this run did not make."""
    known = {outcome.folder.resolve() for outcome in outcomes}
    found = []
    for path in sorted(folder.glob("*/summary.json")):
        if path.parent.resolve() in known or not (path.parent / "report.html").is_file():
            continue
        try:
            summary = json.loads(path.read_text(encoding="utf-8"))
            _overview([(path.parent.name, "", summary, "")])
        except (OSError, ValueError, KeyError, TypeError, AttributeError):
            continue  # not one of ours, or of a version that this one does not know
        found.append((path.parent.name, summary))
    return found
