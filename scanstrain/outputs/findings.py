# SPDX-License-Identifier: MIT
"""The few sentences that a person reads first, from the summary alone."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from scanstrain.attributes import BY_NAME, Attribute
from scanstrain.outputs.words import amount, interval, listed, number, percent

Summary = Mapping[str, Any]
UNKNOWN = "What is below these limits, not observable, not visible in both scans, or happened in between is not known."
RARELY = 0.005
"""Below this share of the gauges a component counts as not observable in the sentences."""


def verdict(summary: Summary) -> list[str]:
    """Say in three to six sentences what was found and what could not be.

    Parameters
    ----------
    summary : mapping
        From `outputs.summary.summary`, or read from `summary.json`.

    Returns
    -------
    list of str
        Plain sentences with units. None of them states that a structure is sound.
    """
    parts: list[str | None] = [_change(summary)]
    if summary["gauges"]["fine"]:
        parts += [_normal(summary), _in_plane(summary)]
    parts += [_gaps(summary), _registration(summary), UNKNOWN]
    return [part for part in parts if part]


def _change(summary: Summary) -> str:
    gauges = summary["gauges"]
    found, fine = gauges["discovered"], gauges["fine"]
    if not fine:
        return f"None of the {number(gauges['count'], 0)} gauges could be evaluated."
    whole = f"the {number(fine, 0)} gauges that could be evaluated"
    if not found:
        return f"No change beyond the false-discovery control at any of {whole}."
    alone = ", nowhere three side by side: some such are expected by chance" if _scattered(summary) else ""
    return f"{number(found, 0)} of {whole} changed beyond the false-discovery control{alone}{_regions(summary)}."


def _regions(summary: Summary) -> str:
    """How many regions they form, and how many of these are more than neighbours that err together."""
    found = (summary.get("regions") or {"found": []})["found"]
    if not found or any(region.get("confirmed") is None for region in found):
        return ""
    sure = sum(region["confirmed"] for region in found)
    said = f"{number(len(found), 0)} region{'s' if len(found) > 1 else ''}"
    if sure == len(found):
        return f", in {said} too large or too clear for chance"
    return f", in {said}, of which {number(sure, 0) if sure else 'none'} too large or too clear for chance"


def _scattered(summary: Summary) -> bool:
    """Whether what changed are single gauges or pairs only; an older summary does not tell."""
    regions = summary.get("regions")
    return regions is not None and not regions["found"]


def _normal(summary: Summary) -> str:
    parts = []
    for name, title in (("disp_n", "normal displacement"), ("tilt", "tilt")):
        result, attribute = summary["results"][name], BY_NAME[name]
        if (result["share_observable"] or 0) < RARELY:
            parts.append(f"{title} is not observable")
            continue
        largest = result["largest_change"]
        said = _limit_said(result, attribute)
        if largest is not None and not _scattered(summary):
            value = interval(largest["value"], largest["sd"] or 0.0, attribute)
            parts.append(f"{title} reaches {value} (95 %) at {_place(largest['at'])}{said}")
        else:
            span = f"{amount(result['p05'], attribute)} to {amount(result['p95'], attribute)}"
            parts.append(f"{title} lies within {span} at 90 % of the gauges, with no change found{said}")
    text = "; ".join(parts)
    return f"{text[0].upper()}{text[1:]}."


def _limit_said(result: Summary, attribute: Attribute) -> str:
    """State the detection limit, and what is found four times out of five where the summary knows it."""
    limit, found = result["detection_limit"], result.get("detectable_80")
    if limit is None:
        return ""
    power = f"; {amount(found, attribute)} is found with 80 % probability" if found is not None else ""
    return f" (95 % detection limit {amount(limit, attribute)}, median{power})"


def _in_plane(summary: Summary) -> str:
    larger, smaller = summary["results"]["strain_1"], summary["results"]["strain_2"]
    attribute, gauges = BY_NAME["strain_1"], summary["gauges"]
    share = min(1.0, larger["share_observable"] * gauges["count"] / gauges["fine"])
    hidden, why = percent(1.0 - share), "the surface carries too little texture or relief there"
    if share < RARELY:
        return f"In-plane strain is not observable at {hidden} of these gauges: {why}."
    said = _limit_said(larger, attribute)
    span = f"{amount(smaller['p05'], attribute)} to {amount(larger['p95'], attribute)}"
    rest = f"; at the other {hidden} {why}" if share < 1 else ""
    seen = f"In-plane strain is observable at {percent(share)} of these gauges"
    return f"{seen}, with principal strains from {span}{said}{rest}."


def _registration(summary: Summary) -> str:
    registration = summary["registration"]
    weak = [each["description"] for each in registration["weak_directions"]]
    not_fixed = f"; not fixed by the surfaces: {listed(weak)}" if weak else ""
    state = "Registration" if registration["converged"] else "Registration did not converge"
    rms = registration["rms"]
    spread = f"{amount(rms, BY_NAME['disp_n'])} rms" if rms is not None else "rms not known"
    return (
        f"{state}: {spread}, {percent(registration['stable_fraction'])} of the reference as stable ground{not_fixed}."
    )


def _gaps(summary: Summary) -> str | None:
    gauges = summary["gauges"]
    reasons = sorted(
        ((count, word) for word, count in gauges["by_status"].items() if word != "fine" and count), reverse=True
    )
    if not reasons or not gauges["count"]:
        return None
    missing = sum(count for count, _ in reasons)
    return (
        f"{percent(missing / gauges['count'])} of the {number(gauges['count'], 0)} gauges carry no number, "
        f"mostly because: {reasons[0][1]}."
    )


def _place(at: list[float]) -> str:
    return "x {:.2f}, y {:.2f}, z {:.2f}".format(*at)
