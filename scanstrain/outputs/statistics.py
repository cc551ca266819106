# SPDX-License-Identifier: MIT
"""What the values of a result amount to: ranges, detection limits, shares.

Statistics are taken over gauges. Those lie evenly on the surface, while points crowd near the scanner, and a gauge is
an estimate with a standard error, while a point is a blend of several. The range over points stands beside them.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import ATTRIBUTES, Attribute
from scanstrain.outputs.words import STANDARD_ERROR, limit_key
from scanstrain.result import Result

Numbers = NDArray[np.float64]
STATISTICS = {"minimum": 0.0, "p05": 0.05, "median": 0.5, "p95": 0.95, "maximum": 1.0}
_CODES = ("status", "observed", "discovery", "stable")


def attribute_statistics(result: Result) -> dict[str, dict[str, Any]]:
    """Describe every attribute; a statistic without any value is None."""
    return {
        attribute.name: _code(result, attribute) if attribute.name in _CODES else _number(result, attribute)
        for attribute in ATTRIBUTES
    }


def quantiles(values: NDArray[np.generic]) -> dict[str, float | None]:
    """Minimum, 5 %, median, 95 % and maximum of the finite values."""
    numbers = _finite(values)
    if not len(numbers):
        return dict.fromkeys(STATISTICS)
    found = np.quantile(numbers, list(STATISTICS.values()))
    return {name: short(value) for name, value in zip(STATISTICS, found, strict=True)}


def short(value: float) -> float:
    """Round to nine figures: more than a float32 holds, and no noise of binary fractions."""
    return float(f"{value:.9g}")


def _number(result: Result, attribute: Attribute) -> dict[str, Any]:
    values = np.asarray(result.strain.values[attribute.name], dtype=np.float64)
    observable = np.isfinite(values)
    changed = np.asarray(result.strain.values["discovery"]) == 1
    return {
        "unit": attribute.unit,
        "over": "gauges",
        **quantiles(values),
        "detection_limit": _median_limit(attribute.name, result.strain.detection_limit),
        "detectable_80": _median_limit(attribute.name, result.strain.detectable_80),
        "gauge_bias": _bias(attribute.name, result.strain.bias),
        "noise_bias": _median_bias(result, attribute.name),
        "share_observable": _share(observable),
        "share_discovered": _share(changed[observable]),
        "largest_change": _largest_change(result, attribute, changed),
        "points": _range(result.points[attribute.name]),
    }


def _range(values: NDArray[np.generic]) -> dict[str, float | None]:
    """Ends and share of the values; quantiles of millions of points would cost seconds over all attributes."""
    share = _share(np.isfinite(values))
    ends = (np.fmin.reduce(values), np.fmax.reduce(values)) if share else (None, None)
    minimum, maximum = (None if end is None else short(float(end)) for end in ends)
    return {"minimum": minimum, "maximum": maximum, "share_observable": share}


def _code(result: Result, attribute: Attribute) -> dict[str, Any]:
    return {
        "unit": attribute.unit,
        "over": "gauges",
        "counts": _counts(result.strain.values[attribute.name]),
        "points": {"counts": _counts(result.points[attribute.name])},
    }


def _counts(codes: NDArray[np.generic]) -> dict[str, int]:
    found, counts = np.unique(codes, return_counts=True)
    return {str(int(code)): int(count) for code, count in zip(found, counts, strict=True)}


def _bias(name: str, sizes: Mapping[str, Numbers]) -> dict[str, float | None] | None:
    """How far the blur of a gauge puts the quantity off: median, 95 % and largest; None where none is stated."""
    key = limit_key(name, sizes)
    if key is None:
        return None
    found = quantiles(sizes[key])
    return {which: found[which] for which in ("median", "p95", "maximum")}


def _median_limit(name: str, sizes: Mapping[str, Numbers]) -> float | None:
    key = limit_key(name, sizes)
    limits = _finite(sizes[key]) if key else np.empty(0)
    return short(float(np.median(limits))) if len(limits) else None


def _median_bias(result: Result, name: str) -> float | None:
    """What noise adds at most on average, where it drives a quantity to one side; None where it does not."""
    certainty = result.strain.certainty.get(name)
    bias = np.empty(0) if certainty is None else _finite(certainty.noise_bias)
    return short(float(np.median(bias))) if bias.any() else None


def _largest_change(result: Result, attribute: Attribute, changed: NDArray[np.bool_]) -> dict[str, Any] | None:
    """Find the largest value among the gauges that changed, with its standard error and place."""
    if attribute.name not in STANDARD_ERROR:
        return None
    values = np.asarray(result.strain.values[attribute.name], dtype=np.float64)
    sizes = np.where(changed & np.isfinite(values), np.abs(values), -1.0)
    if not len(sizes) or sizes.max() < 0:
        return None
    gauge = int(np.argmax(sizes))
    sd = float(result.strain.values[STANDARD_ERROR[attribute.name]][gauge])
    place = [round(float(part), 4) for part in result.gauge_positions[gauge]]
    return {"value": short(float(values[gauge])), "sd": short(sd), "gauge": gauge, "at": place}


def _finite(values: NDArray[np.generic]) -> Numbers:
    numbers = np.asarray(values, dtype=np.float64)
    return numbers[np.isfinite(numbers)]


def _share(where: NDArray[np.bool_]) -> float | None:
    return short(float(where.mean())) if len(where) else None
