# SPDX-License-Identifier: MIT
"""The head of the report: which epochs, what the datum is worth, and whether anything changed."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from scanstrain.attributes import BY_NAME
from scanstrain.outputs.findings import verdict
from scanstrain.outputs.report.places import Places
from scanstrain.outputs.report.tables import neat
from scanstrain.outputs.words import amount, listed, number

Summary = Mapping[str, Any]
LABEL = 80
"""Letters of a label in a heading; the whole label stands in the run record."""
SEEN = 0.005
"""Below this share of the gauges a component counts as not observable, as in the verdict."""
GROUND = "stable ground"
"""Words by which the registration names its doubts about the ground."""


@dataclass(frozen=True, slots=True)
class Head:
    """What stands at the top.

    Parameters
    ----------
    title : str
        For the window.
    epochs : tuple of (label, date)
        Reference and current.
    doubts : tuple of str
        What makes displacements doubtful; said before anything else.
    answer : str
        Whether anything changed, in a sentence or two.
    tone : {"changed", "quiet", "unknown"}
    verdict : tuple of str
        The sentences of the verdict.
    """

    title: str
    epochs: tuple[tuple[str, str], tuple[str, str]]
    doubts: tuple[str, ...]
    answer: str
    tone: str
    verdict: tuple[str, ...]


def head_of(summary: Summary, places: Places) -> Head:
    """Write the head from the summary and the regions that changed."""
    first, second = (_epoch(summary["inputs"][name]) for name in ("reference", "current"))
    answer, tone = _answer(summary, places)
    title = " → ".join(" ".join(part for part in epoch if part) for epoch in (first, second))
    sentences = tuple(neat(sentence) for sentence in verdict(summary))
    return Head(title, (first, second), tuple(doubts(summary)), neat(answer), tone, sentences)


def doubts(summary: Summary) -> list[str]:
    """Collect what makes displacement, tilt and rotation doubtful as a whole."""
    registration = summary["registration"]
    found = []
    if not registration["converged"]:
        found.append("The registration did not converge: displacement, tilt and rotation must not be used.")
    about = [each for each in summary["warnings"] if GROUND in each or "shares one" in each]
    return [*found, *(neat(f"{each[:1].upper()}{each[1:]}".rstrip(".") + ".") for each in about)]


def _answer(summary: Summary, places: Places) -> tuple[str, str]:
    gauges = summary["gauges"]
    if not gauges["fine"]:
        return "Nothing can be said: no gauge could be evaluated.", "unknown"
    if places.regions:
        size = f"{number(places.area, 2 if places.area < 10 else 1)} m²"
        if len(places.regions) == 1:
            return f"Changed: one region of {size}. There {places.largest} (95 %).", "changed"
        many = f"{number(len(places.regions), 0)} regions, {size} together"
        return f"Changed: {many}. In the clearest one {places.largest} (95 %).", "changed"
    limits, hidden = _limits(summary)
    if not limits:
        return "Nothing can be said: no component of movement is observable.", "unknown"
    text = f"Nothing above {listed(limits)}."
    if places.isolated:
        text += f" Only isolated gauges stand out: {number(places.isolated, 0)}."
    if hidden:
        text += f" Not observable: {listed(hidden)}."
    return text, "quiet"


def _limits(summary: Summary) -> tuple[list[str], list[str]]:
    """Detection limits of what can be seen, and what cannot."""
    seen, hidden = [], []
    for name, words in (("disp_n", "normal displacement"), ("tilt", "tilt"), ("strain_1", "in-plane strain")):
        result = summary["results"][name]
        limit = result["detection_limit"]
        if (result["share_observable"] or 0) < SEEN or limit is None:
            hidden.append(words)
        else:
            seen.append(f"{amount(limit, BY_NAME[name])} {words}")
    return seen, hidden


def _epoch(given: Mapping[str, Any]) -> tuple[str, str]:
    label, date = str(given["label"]), str(given["date"] or "")
    label = label if len(label) <= LABEL else f"{label[: LABEL - 1]}…"
    return label, "" if date and date in label else date
