# SPDX-License-Identifier: MIT
"""How a result stands to the user's own limits, as rows for `summary.json` and as sentences."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME, JUDGED, OF_BODIES, Attribute
from scanstrain.damage import CAUTIONS
from scanstrain.limits import BELOW, EXCEEDED, NORMAL_95, POSSIBLE, UNSEEN, grade_zone, worst_level
from scanstrain.outputs.statistics import short
from scanstrain.outputs.words import interval
from scanstrain.outputs.zone_table import parts_of
from scanstrain.result import WHOLE, Result
from scanstrain.strain.zone_values import ZoneValue
from scanstrain.structures import section_units

FloatArray = NDArray[np.float64]
Values = Mapping[str, Mapping[str, ZoneValue]]

_FOR_A_PERSON = {
    "m": BY_NAME["disp_n"],
    "rad": BY_NAME["spin"],
    "1/m": BY_NAME["curv_1"],
    "1": Attribute("share", "1", "signed", "1 share of a length", person="%", factor=100.0),
}
"""How quantities that are no attributes are written, by their unit."""


@dataclass(frozen=True, slots=True)
class _Judged:
    """The values that a trigger is held against: those of gauges, of sections, or one of a body."""

    of: str
    unit: str
    values: FloatArray
    sd: FloatArray
    weight: float
    places: Sequence[Mapping[str, Any]]
    bias: FloatArray | None = None


def trigger_data(result: Result, values: Values) -> list[dict[str, Any]]:
    """Hold a result against every trigger of its configuration.

    Parameters
    ----------
    result : Result
    values : mapping
        From `outputs.zone_table.values_of_parts`.

    Returns
    -------
    list of dict
        One row a trigger, in the order of the configuration; SI units.
    """
    return [_row(trigger, _judged(trigger, result, values)) for trigger in _triggers(result)]


def trigger_cautions(result: Result) -> list[str]:
    """Return the sentences that belong to the published classes that were asked for, each once."""
    named = (trigger.classes for trigger in _triggers(result) if trigger.classes is not None)
    return [sentence for classes in dict.fromkeys(named) for sentence in CAUTIONS[classes]]


def trigger_warnings(rows: Sequence[Mapping[str, Any]]) -> Iterator[str]:
    """Name the triggers that could not be judged at all."""
    for row in rows:
        if row["grade"] == UNSEEN:
            yield (
                f"Trigger {row['name']!r} could not be judged: {row['quantity']} is nowhere observable in "
                f"{_where(row)}. That is no word on whether a limit was passed."
            )


def trigger_sentence(row: Mapping[str, Any]) -> str:
    """Say in one line how a result stands to a trigger.

    Parameters
    ----------
    row : mapping
        One of `summary["triggers"]`.

    Returns
    -------
    str
    """
    start = f"{row['name']} ({row['quantity']}, {_where(row)})"
    found = [f"{row[word]!r} {word}" for word in (EXCEEDED, POSSIBLE) if row[word] is not None]
    said = ", ".join(found) if found else row["grade"]
    furthest = row["furthest"]
    if furthest is None:
        return f"{start}: {said}."
    value = interval(furthest["value"], furthest["sd"], BY_NAME.get(row["quantity"], _FOR_A_PERSON[row["unit"]]))
    return f"{start}: {said}; furthest {value} (95 %){_at(furthest)}."


def _triggers(result: Result) -> Sequence[Any]:
    return getattr(result.config, "trigger", ())


def _where(row: Mapping[str, Any]) -> str:
    return WHOLE if row["zone"] is None else f"zone {row['zone']!r}"


def _at(furthest: Mapping[str, Any]) -> str:
    if furthest.get("at") is not None:
        return " at x {:.2f}, y {:.2f}, z {:.2f}".format(*furthest["at"])
    return f" at chainage {furthest['chainage']:.2f} m" if furthest.get("chainage") is not None else ""


def _judged(trigger: Any, result: Result, values: Values) -> _Judged:
    name, part = trigger.quantity, trigger.zone or WHOLE
    if name in JUDGED:
        return _on_gauges(name, result, parts_of(result)[part])
    if name in OF_BODIES:
        return _on_a_body(name, part, result, values)
    chainage = next((zone.chainage for zone in result.config.zone if zone.name == trigger.zone), None)
    return _on_sections(name, result, chainage)


def _on_gauges(name: str, result: Result, gauges: NDArray[np.bool_]) -> _Judged:
    here = np.flatnonzero(gauges)
    certain = result.strain.certainty[name]
    places = [
        {"gauge": int(gauge), "at": place} for gauge, place in zip(here, result.gauge_positions[here], strict=True)
    ]
    values = np.asarray(result.strain.values[name], dtype=np.float64)[here]
    bias = certain.noise_bias[here]
    area = result.strain.gauge_spacing**2
    return _Judged("gauges", BY_NAME[name].unit, values, certain.sd[here], area, places, bias)


def _on_a_body(name: str, part: str, result: Result, values: Values) -> _Judged:
    if name == "mean_disp_n":
        mean = values[part].get("disp_n")
        value, sd = (np.nan, np.nan) if mean is None else (mean.mean, mean.mean_sd)
    else:
        body = next(body for body in result.bodies if body.name == part)
        value, sd = getattr(body, name), getattr(body, f"{name}_sd")
    return _Judged("body", OF_BODIES[name][0], np.array([value]), np.array([sd]), 1.0, [{}])


def _on_sections(name: str, result: Result, chainage: tuple[float, float] | None) -> _Judged:
    sections = [
        section
        for section in result.sections
        if chainage is None or chainage[0] <= section.chainage <= chainage[1]
    ]  # fmt: skip
    unit = section_units(result.config.tunnel.chords)[name][0]
    values = np.array([section.values[name] for section in sections], float)
    errors = np.array([section.errors[name] for section in sections], float)
    return _Judged("sections", unit, values, errors, 1.0, [{"chainage": section.chainage} for section in sections])


def _row(trigger: Any, judged: _Judged) -> dict[str, Any]:
    limits, side = trigger.limits(), trigger.side
    weights = np.full(len(judged.values), judged.weight)
    found = {
        level: grade_zone(judged.values, judged.sd, weights, limit, direction=side) for level, limit in limits.items()
    }
    grades = {level: each.grade for level, each in found.items()}
    worst = worst_level(grades)
    sums = {"gauges": "areas", "sections": "sections", "body": ""}[judged.of]
    furthest = next((each.furthest for each in found.values()), None)
    return {
        "name": trigger.name,
        "quantity": trigger.quantity,
        "zone": trigger.zone,
        "of": judged.of,
        "unit": judged.unit,
        "direction": side,
        "classes": trigger.classes,
        "grade": next((word for word in (EXCEEDED, POSSIBLE, BELOW) if word in grades.values()), UNSEEN),
        "exceeded": worst.exceeded,
        "possible": worst.possible,
        "levels": {
            level: {"limit": short(limits[level]), "grade": each.grade} | ({sums: each.areas} if sums else {})
            for level, each in found.items()
        },
        "furthest": None if furthest is None else _furthest(judged, furthest),
        "note": _note(judged),
    }


def _furthest(judged: _Judged, row: int) -> dict[str, Any]:
    value, sd = float(judged.values[row]), float(judged.sd[row])
    return {
        "value": value,
        "sd": sd,
        "low": value - NORMAL_95 * sd,
        "high": value + NORMAL_95 * sd,
        **judged.places[row],
        **({} if judged.bias is None else {"noise_bias": float(judged.bias[row])}),
    }


def _note(judged: _Judged) -> str | None:
    """Say what noise does to lengths and principal values; their errors count it in."""
    if judged.bias is None or not (np.abs(judged.bias) > 0).any():
        return None
    way = "up" if np.nansum(judged.bias) > 0 else "down"
    return (
        f"Noise drives this quantity {way}, by as much as noise_bias where the true value is zero. Values are held "
        "against limits as they stand, with standard errors that count it in."
    )
