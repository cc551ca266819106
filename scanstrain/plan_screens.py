# SPDX-License-Identifier: MIT
"""What a planned set-up can show, and what the user's own scans prove, as a person reads it on a terminal."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

from scanstrain.attributes import BY_NAME
from scanstrain.forecast import Detectable, SetUp
from scanstrain.outputs.words import TITLES, amount, percent
from scanstrain.proof import Proof
from scanstrain.screens import WIDTH, aligned

STANDS_FOR = {
    "normal displacement": "disp_n",
    "tilt": "tilt",
    "change of curvature": "curv_1",
    "bending strain at the face": "bend_1",
    "in-plane displacement": "disp_x",
    "strain": "strain_u",
    "spin": "spin",
}
"""The attribute whose unit for a person a quantity is written in."""

ASSUMED = (
    "For one place tested by itself. A map of many places needs about one and a half times as much, because false "
    "discoveries are held down over all of them.",
    "Assumed: both epochs see the whole gauge at this spacing from a set-up of its own, and the surface has no joint "
    "there. Registration counts only as far as --datum-sd says. Intervals are normal ones.",
    "A plan, not a promise: take two scans without change on site and see what `scanstrain prove` says.",
)


def forecast_screen(setup: SetUp, found: Sequence[Detectable]) -> str:
    """Return the table of what a set-up can show, and what it rests on."""
    head = (
        f"Gauge of {setup.gauge_length:g} m, points every {setup.spacing * 1e3:g} mm with {setup.noise * 1e3:g} mm of "
        f"noise, {percent(setup.shared)} of its variance shared over {setup.shared_length * 1e3:g} mm"
    )
    rows: list[tuple[str, str, str, str]] = [
        ("smallest change that shows", "standard error", "95 % limit", "seen in 80 of 100 cases")
    ]
    for each in found:
        if each.sd is None or each.limit is None or each.with_power is None:
            rows.append((each.name, each.reason, "", ""))
            continue
        unit = BY_NAME[STANDS_FOR[each.name]]
        rows.append((each.name, amount(each.sd, unit), amount(each.limit, unit), amount(each.with_power, unit)))
    return "\n".join([*_wrapped(head), "", *_table(rows), "", *(line for text in ASSUMED for line in _wrapped(text))])


def forecast_data(setup: SetUp, found: Sequence[Detectable]) -> dict[str, Any]:
    """Return the same in a form that JSON can hold, in metre, radian and strain."""
    quantities = [
        {
            "name": each.name,
            "unit": each.unit,
            "standard_error": each.sd,
            "detection_limit": each.limit,
            "detectable_80": each.with_power,
            "reason": each.reason or None,
        }
        for each in found
    ]
    return {"set_up": asdict(setup), "quantities": quantities, "assumed": list(ASSUMED)}


def proof_screen(proof: Proof) -> str:
    """Return what a pair without change gave, and what came back of the change put into it."""
    alarms, change = proof.alarms, proof.change
    scatter = ", ".join(f"{_title(name).lower()} {value:.2f}" for name, value in alarms.scatter.items())
    rows: list[tuple[str, ...]] = [("put in, and back", "largest", "back / put in", "in 95 % interval", "values")]
    for each in proof.recovered:
        size = amount(each.largest, BY_NAME[each.name])
        if not each.values:
            rows.append((_title(each.name), size, "not observable", "-", "0"))
            continue
        ratio = f"{each.ratio:.2f} ± {1.96 * each.ratio_sd:.2f}" if math.isfinite(each.ratio) else "too little put in"
        rows.append((_title(each.name), size, ratio, percent(each.coverage), str(each.values)))
    said = [
        f"No change: {percent(alarms.share)} of {alarms.gauges} gauges have p < 0.05, where all is well 5 % "
        f"(± {196 * alarms.share_sd:.0f} % by chance); {alarms.discoveries} are discoveries.",
        f"Mean square of values over their standard errors (1 where these are right): {scatter}.",
        f"Then a widening of {amount(change.strain, BY_NAME['strain_u'])} and a bulge of "
        f"{amount(change.height, BY_NAME['disp_n'])}, {change.width:.2f} m wide, were put into the second scan:",
    ]
    last = (
        f"Found: {_share(proof.found)} of the gauges where a component is clear (2.8 standard errors). Of all "
        f"discoveries {_share(proof.false)} lie where next to nothing was put in."
    )
    lines = [proof.name, *(line for text in said for line in _wrapped(f"  {text}")), *aligned(rows)]
    lines += _wrapped(f"  {last}")
    return "\n".join([*lines, *(line for text in proof.warnings for line in _wrapped(f"  Warning: {text}"))])


def proof_data(proof: Proof) -> dict[str, Any]:
    """Return the same in a form that JSON can hold; what could not be judged is null."""
    recovered = [{key: _plain(value) for key, value in asdict(each).items()} for each in proof.recovered]
    change = {"strain": proof.change.strain, "height": proof.change.height, "width": proof.change.width}
    return {
        "name": proof.name,
        "no_change": {key: _plain(value) for key, value in asdict(proof.alarms).items()},
        "put_in": change,
        "recovered": recovered,
        "found": _plain(proof.found),
        "false": _plain(proof.false),
        "warnings": list(proof.warnings),
    }


def _plain(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _share(value: float) -> str:
    return percent(value) if math.isfinite(value) else "none"


def _title(name: str) -> str:
    return {"curv_1": "Change of curvature", "strain_u": "Strain"}.get(name, TITLES[name][0])


def _table(rows: Sequence[tuple[str, str, str, str]]) -> list[str]:
    """Align what has numbers; a reason runs over the columns."""
    numbers = [row for row in rows if row[2]]
    lines = dict(zip((row[0] for row in numbers), aligned(numbers), strict=True))
    width = max(len(row[0]) for row in rows)
    return [lines.get(row[0]) or f"  {row[0].ljust(width)}  {row[1]}" for row in rows]


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, subsequent_indent="  ")
