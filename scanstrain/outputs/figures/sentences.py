# SPDX-License-Identifier: MIT
"""What a figure says in words: the finding, the facts at its foot, and the alternative text."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.figures.layout import BoolArray, Layout
from scanstrain.outputs.figures.style import SMALL_LETTERS, plain
from scanstrain.outputs.words import (
    NORMAL_95,
    STANDARD_ERROR,
    TITLES,
    amount,
    attribute_of,
    interval,
    limit_key,
    number,
    percent,
)
from scanstrain.result import Result

MINUS = "−"
FEWEST = 3
"""Gauges side by side that make a region."""
JUDGED_BY = {"bend_1": "curv_1", "bend_2": "curv_2"}
"""Attributes that are multiples of another one, which has a detection limit."""
CHANCE = 0.05
"""Share of values without a change that exceed a 95 % limit."""
BESIDE = 1.6
"""Gauges nearer than this many spacings are neighbours."""


def discovered(result: Result) -> BoolArray:
    """Which gauges changed beyond the false-discovery control."""
    return np.asarray(np.asarray(result.strain.values["discovery"]) == 1)


def grouped(result: Result) -> BoolArray:
    """Which gauges changed and stand in a group of at least three such neighbours; single ones are often false."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components
    from scipy.spatial import cKDTree

    changed = discovered(result)
    rows = np.flatnonzero(changed)
    if len(rows) < FEWEST:
        return np.zeros(len(changed), bool)
    tree = cKDTree(result.strain.position[rows])
    first, second = tree.query_pairs(BESIDE * result.strain.gauge_spacing, output_type="ndarray").T
    links = coo_array((np.ones(len(first)), (first, second)), shape=(len(rows), len(rows)))
    _, group = connected_components(links, directed=False)
    changed[rows] = np.bincount(group)[group] >= FEWEST
    return changed


def numbers_of(result: Result, name: str) -> NDArray[np.float64]:
    """Values of an attribute at the gauges; codes become NaN where the gauge has no fit."""
    values = np.asarray(result.strain.values[name], dtype=np.float64)
    if name in ("gauge_points", "observed"):
        return np.where(result.strain.status == Status.FINE, values, np.nan)
    return values


def median_limit(result: Result, name: str) -> float | None:
    """Median detection limit of an attribute in stored units, or None where none is stated."""
    key = limit_key(name, result.strain.detection_limit)
    limits = result.strain.detection_limit[key] if key else np.empty(0)
    limits = limits[np.isfinite(limits)]
    return float(np.median(limits)) if len(limits) else None


def largest(result: Result, name: str, layout: Layout) -> tuple[int, str] | None:
    """Find the gauge with the largest value in the regions that changed and are shown, and its value ± interval."""
    if name not in STANDARD_ERROR:
        return None
    values = np.asarray(result.strain.values[name], dtype=np.float64)
    sd = np.asarray(result.strain.values[STANDARD_ERROR[name]], dtype=np.float64)
    # a gauge can have changed in another component: this one must stand out by itself
    clear = grouped(result) & layout.shown & (np.abs(values) > NORMAL_95 * sd)
    if not clear.any():
        return None
    gauge = int(np.argmax(np.where(clear, np.abs(values), -1.0)))
    return gauge, interval(float(values[gauge]), float(sd[gauge]), attribute_of(name)).replace("-", MINUS)


def finding(result: Result, name: str, layout: Layout) -> str:
    """Say in a sentence what a map of an attribute shows."""
    values = numbers_of(result, name)
    seen = np.isfinite(values)
    title = TITLES[name][0]
    if not seen.any():
        return f"Not observable at any of the {number(len(values), 0)} gauges: the data do not support this quantity."
    attribute = attribute_of(name)
    count = number(int(seen.sum()), 0)
    if attribute.kind == "probability":
        share = percent(float(np.mean(values[seen] < 0.05)))
        return f"Below 0.05 at {share} of {count} gauges; 5 % are expected where nothing changed."
    if attribute.kind not in ("signed", "magnitude"):
        return f"{title}: median {amount(float(np.median(values[seen])), attribute)} over {count} gauges."
    found = int((discovered(result) & seen).sum())
    limit = median_limit(result, name)
    said = f"95 % detection limit {amount(limit, attribute)} (median)" if limit is not None else ""
    if not found:
        return f"Nothing above the noise at any of {count} gauges" + (f"; {said}." if said else ".")
    many = f"{number(found, 0)} of {count} gauges changed beyond the false-discovery control"
    if not grouped(result)[seen].any():
        return f"{many}, nowhere three side by side" + (f"; {said}." if said else ".")
    top = largest(result, name, layout)
    parts = [many, _beyond(result, name, found), f"largest {top[1]} (95 %)" if top else ""]
    return "; ".join(part for part in parts if part) + "."


def standing_out(result: Result, name: str) -> BoolArray:
    """Which gauges changed and show it in this attribute: it exceeds its own 95 % limit, where one is stated.

    A gauge counts as changed if any of its components did. Its other components may still be noise.
    """
    key = limit_key(JUDGED_BY.get(name, name), result.strain.detection_limit)
    if key is None:
        return discovered(result)
    values = np.abs(np.asarray(result.strain.values[JUDGED_BY.get(name, name)], dtype=np.float64))
    return np.asarray(discovered(result) & (values > result.strain.detection_limit[key]))


def _beyond(result: Result, name: str, found: int) -> str:
    """Say at how many of the changed gauges the attribute itself stands out, and how many would by chance."""
    if limit_key(JUDGED_BY.get(name, name), result.strain.detection_limit) is None:
        return ""
    clear, chance = int(standing_out(result, name).sum()), number(CHANCE * found, 0)
    return f"{number(clear, 0)} beyond the 95 % limit of this quantity ({chance} expected by chance)"


def gaps(values: NDArray[np.float64], layout: Layout) -> str:
    """Say how much of a map carries no number."""
    shown = layout.shown
    if not shown.any() or np.isfinite(values[shown]).all():
        return ""
    return f"Not observable at {percent(float(np.mean(~np.isfinite(values[shown]))))} of the map."


def facts(result: Result, layout: Layout | None = None) -> list[str]:
    """Collect the lines at the foot: gauge, confidence, how the surface is seen, and the epochs."""
    parts = [f"gauge length {number(result.strain.gauge_length, 2)} m", "confidence 95 %"]
    if layout is not None:
        parts.append(layout.view)
        hidden = int((~layout.shown).sum())
        if hidden:
            parts.append(f"edge-on or hidden gauges: {number(hidden, 0)}")
    lines = [parts[0]]
    for part in parts[1:]:
        together = f"{lines[-1]}  ·  {part}"
        lines = [*lines[:-1], together] if len(together) <= SMALL_LETTERS else [*lines, part]
    return [*lines, epochs(result)]


def caption(meaning: str, result: Result, layout: Layout | None = None) -> str:
    """Join how to read a figure and the facts at its foot to a caption."""
    return f"{meaning} Facts: {'; '.join(facts(result, layout))}."


def epochs(result: Result) -> str:
    """Name both epochs with their dates, fit to be drawn."""
    return f"{_epoch(result.reference)} → {_epoch(result.current)}"


def _epoch(epoch: Epoch) -> str:
    label, date = plain(epoch.label, 40), plain(epoch.provenance.date or "", 20)
    return f"{label} ({date})" if date and date not in label else label


def span(layout: Layout) -> str:
    """Say how large the mapped surface is."""
    if not layout.shown.any():
        return "no part of the surface"
    length, tall = np.ptp(layout.along[layout.shown]), np.ptp(layout.across[layout.shown])
    return f"{number(float(length), 1)} m by {number(float(tall), 1)} m"


def place(layout: Layout, gauge: int) -> str:
    """Say where on the map a gauge lies."""
    names = [axis.replace(" [m]", "") for axis in (layout.horizontal, layout.vertical)]
    return f"{names[0]} {layout.along[gauge]:.2f} m, {names[1]} {layout.across[gauge]:.2f} m".replace("-", MINUS)
