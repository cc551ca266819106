# SPDX-License-Identifier: MIT
"""What could pass for an even strain, beside the change of area that was measured, in numbers and sentences."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from scanstrain.attributes import BY_NAME
from scanstrain.budget import BudgetLine, point_factor, projection_line, scale_line, temperature_line
from scanstrain.outputs.words import interval
from scanstrain.result import WHOLE, Result
from scanstrain.strain.zone_values import ZoneValue


def budget_data(result: Result, values: Mapping[str, Mapping[str, ZoneValue]]) -> dict[str, Any]:
    """Put the mean change of area beside what scale, temperature and map projection can make of it.

    Parameters
    ----------
    result : Result
    values : mapping
        From `outputs.zone_table.values_of_parts`.

    Returns
    -------
    dict
        `dilation`, the mean relative change of area of the whole object with its interval, or None; and `lines`.
    """
    mean = values[WHOLE].get("dilation")
    measured = None
    if mean is not None and mean.observable:
        measured = {"mean": mean.mean, "sd": mean.mean_sd, "low": mean.mean_low, "high": mean.mean_high}
    lines = [
        {"name": line.name, "strain": line.value, "strain_sd": line.sd, "dilation": line.dilation,
         "dilation_sd": line.dilation_sd, "note": line.note}
        for line in _lines(result)
    ]  # fmt: skip
    return {"dilation": measured, "lines": lines}


def budget_sentences(budget: Mapping[str, Any]) -> Iterator[str]:
    """Say the same in lines for a person, from `summary["budget"]`."""
    attribute, measured = BY_NAME["dilation"], budget["dilation"]
    said = "not observable" if measured is None else interval(measured["mean"], measured["sd"], attribute)
    yield f"Mean change of area, measured: {said}. What could make one without any strain of the structure:"
    for line in budget["lines"]:
        known = line["dilation"] is not None and line["dilation_sd"] is not None
        amount = interval(line["dilation"], line["dilation_sd"], attribute) if known else "not known"
        yield f"{line['name']}: {amount}. {line['note']}"


def _lines(result: Result) -> Iterator[BudgetLine]:
    registration = result.registration
    yield scale_line(registration.scale_ppm, registration.scale_ppm_sd)
    given = result.config.budget.temperature if hasattr(result.config, "budget") else None
    if given is not None:
        yield temperature_line(*given)
    first, second = result.reference.provenance.crs, result.current.provenance.crs
    if first is None or second is None:
        return
    x, y = (result.reference.points.mean(axis=0) + result.reference.origin)[:2]
    factors = [_factor(crs, float(x), float(y)) for crs in (first, second)]
    if np.isfinite(factors).all():
        yield projection_line(*factors, same_system=first == second)


def _factor(crs: str, x: float, y: float) -> float:
    """Scale of the map; NaN where the text names no coordinate system that is known here."""
    from pyproj.exceptions import CRSError

    try:
        return point_factor(crs, x, y)
    except CRSError:
        return math.nan
