# SPDX-License-Identifier: MIT
"""index.html: all comparisons of a batch on one page."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
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


def write_index(outcomes: Sequence[Finished], folder: Path, *, series: object | None = None) -> Path:
    """Write the overview of a batch.

    Results of earlier runs that still stand in the folder are listed too, after those of this run.

    Parameters
    ----------
    outcomes : sequence of Finished
        In the order of the batch file. Those of a batch of several places carry the name of theirs as `place`.
    folder : Path
        Output folder of the batch; the reports lie in folders below it.
    series : SeriesPart, optional
        Figures and rates of the epochs followed.

    Returns
    -------
    Path

    Raises
    ------
    OutputError
        The page could not be written.
    """
    folder.mkdir(parents=True, exist_ok=True)
    rows = [
        Row(each.name, _link(each, folder), each.summary, each.error, getattr(each, "place", None) or "")
        for each in outcomes
    ]
    rows += _earlier(outcomes, folder)
    failed = sum(row.summary is None for row in rows)
    target = folder / NAME
    with replacing(target) as path:
        page = render(
            "index.html", overview=_overview(rows), matrix=place_matrix(rows), count=len(rows), failed=failed,
            series=series,
        )  # fmt: skip
        path.write_text(page, "utf-8")
    return target


@dataclass(frozen=True, slots=True)
class Row:
    """One comparison: its name, where its report is, what came out or why nothing did, and its place if it has one."""

    name: str
    link: str
    summary: Mapping[str, Any] | None
    error: str = ""
    place: str = ""


def place_matrix(rows: Sequence[Row]) -> Table | None:
    """Put places beside one another, one row each and one column an epoch; None where the batch has no places."""
    places = list(dict.fromkeys(row.place for row in rows if row.place))
    if not places:
        return None
    epochs = sorted({_epoch(row) for row in rows if row.place})
    found = {(row.place, _epoch(row)): row for row in rows}
    made: list[list[Cell | str]] = []
    for place in places:
        cells = [found.get((place, epoch)) for epoch in epochs]
        made.append([place, *(Cell(MISSING) if row is None else _linked(row) for row in cells)])
    note = f"Each number leads to its report. {MISSING}: no comparison."
    caption = "Largest significant normal displacement at each place and epoch, with its 95 % interval"
    return table(caption, ("Place", *epochs), made, note=note, kind="overview")


def _epoch(row: Row) -> str:
    """Date of the later scan, or its label where there is no date."""
    date = _date(row.summary).text
    return row.name.rpartition("_to_")[2] if date == MISSING else date


def _linked(row: Row) -> Cell:
    if row.summary is None:
        return Cell("failed")
    return replace(_largest(row.summary, WHOLE), link=row.link)


def _overview(rows: Sequence[Row]) -> Table:
    """One row an epoch compared, one column a place."""
    zones = [zone for row in rows for zone in (row.summary or {}).get("zones") or {}]
    places = list(dict.fromkeys((WHOLE, *zones)))
    made = [
        [Cell(f"{row.place}: {row.name}" if row.place else row.name, link=row.link if row.summary else ""),
         _date(row.summary), _verdict(row.summary, row.error), *(_largest(row.summary, place) for place in places)]
        for row in rows
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


def _earlier(outcomes: Sequence[Finished], folder: Path) -> list[Row]:
    """Results in the folder that this run did not make; those of a place lie one folder deeper."""
    known = {outcome.folder.resolve() for outcome in outcomes}
    found = []
    for path in sorted((*folder.glob("*/summary.json"), *folder.glob("*/*/summary.json"))):
        if path.parent.resolve() in known or not (path.parent / "report.html").is_file():
            continue
        inside = path.parent.relative_to(folder)
        place = inside.parts[0] if len(inside.parts) > 1 else ""
        try:
            summary = json.loads(path.read_text(encoding="utf-8"))
            row = Row(inside.name, f"{quote(inside.as_posix())}/report.html", summary, place=place)
            _overview([row])
        except (OSError, ValueError, KeyError, TypeError, AttributeError):
            continue  # not one of ours, or of a version that this one does not know
        found.append(row)
    return found
