# SPDX-License-Identifier: MIT
"""A map of the rate at which each gauge moves, out of the gauge tables of the comparisons with one first epoch."""

from __future__ import annotations

import csv
import datetime as dt
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.figures import Layout, Picture, draw_rates, lay_flat
from scanstrain.outputs.words import NORMAL_95
from scanstrain.series import Track, follow
from scanstrain.zones import Unrolled

FloatArray = NDArray[np.float64]

QUANTITY = "disp_n"
SAME = 1e-3
"""Gauges of two comparisons stand in one place if they are no farther apart than this [m]."""
MOST = 20_000
"""Gauges; more would take minutes, and a map cannot show them."""
NEAR = 9
"""Neighbours from which the radius of a lining is taken."""
_COLUMNS = ("x", "y", "z", "normal_x", "normal_y", "normal_z", "status", QUANTITY, f"{QUANTITY}_sd")


@dataclass(frozen=True, slots=True)
class Compared:
    """A comparison with the first epoch: the later date, where its result is, and its summary."""

    label: str
    date: dt.date
    folder: Path
    summary: Mapping[str, object]


def rate_map(first: tuple[str, dt.date], later: Sequence[Compared], *, structure: str) -> Picture | None:
    """Draw the rate of normal displacement at every gauge.

    Parameters
    ----------
    first : (str, date)
        Label and date of the epoch that all comparisons share.
    later : sequence of Compared
        In order of date.
    structure : {"tunnel", "wall", "free"}

    Returns
    -------
    Picture or None
        None where the tables are not there, or their gauges are not the same, or too many.
    """
    tables = [_read(each.folder / "gauges.csv") for each in later]
    found = [table for table in tables if table is not None]
    if len(found) < len(later) or not _same_gauges(found) or len(found[0]["x"]) > MOST:
        return None
    rate, sd = _rates(first, later, found)
    spacing = _spacing(later[0].summary)
    layout = _layout(found[0], structure, spacing)
    facts = (f"From {len(later) + 1} epochs, {first[1].isoformat()} to {later[-1].date.isoformat()}.",)
    return draw_rates(
        layout, rate, sd, name=QUANTITY, title="Rate of normal displacement", spacing=spacing, facts=facts
    )


def _rates(
    first: tuple[str, dt.date], later: Sequence[Compared], tables: Sequence[Mapping[str, FloatArray]]
) -> tuple[FloatArray, FloatArray]:
    """Rate at each gauge, and the standard error that a normal curve needs for the interval of the fit [m per year]."""
    values = np.stack([table[QUANTITY] for table in tables], axis=1)
    errors = np.stack([table[f"{QUANTITY}_sd"] for table in tables], axis=1)
    known = (np.isfinite(values) & (errors > 0)).all(axis=1)
    rate, sd = np.full(len(values), np.nan), np.full(len(values), np.nan)
    labels, dates = (first[0], *(each.label for each in later)), (first[1], *(each.date for each in later))
    for gauge in np.flatnonzero(known):
        fit = follow(Track("gauge", QUANTITY, "m", labels, dates, values[gauge], errors[gauge])).fit
        rate[gauge], sd[gauge] = fit.rate, (fit.rate_high - fit.rate_low) / 2 / NORMAL_95
    return rate, sd


def _read(path: Path) -> dict[str, FloatArray] | None:
    """Read what the map needs of a gauge table; None where it cannot be read."""
    try:
        with path.open(encoding="utf-8", newline="") as stream:
            rows = csv.reader(stream)
            names = next(rows)
            next(rows)  # units
            wanted = [name for name in (*_COLUMNS, "chainage", "clock") if name in names]
            at = [names.index(name) for name in wanted]
            cells = [[row[k] for k in at] for row in rows]
        numbers = np.array([[float(cell) if cell else np.nan for cell in row] for row in cells], float)
    except (OSError, ValueError, IndexError, StopIteration):
        return None
    if not set(_COLUMNS) <= set(wanted) or not len(numbers):
        return None
    return dict(zip(wanted, numbers.T, strict=True))


def _same_gauges(tables: Sequence[Mapping[str, FloatArray]]) -> bool:
    first = np.stack([tables[0][axis] for axis in "xyz"])
    others = (np.stack([table[axis] for axis in "xyz"]) for table in tables[1:])
    return all(other.shape == first.shape and bool((np.abs(other - first) < SAME).all()) for other in others)


def _spacing(summary: Mapping[str, object]) -> float:
    gauges = summary["gauges"]
    return float(gauges["gauge_spacing"]) if isinstance(gauges, Mapping) else np.nan


def _layout(table: Mapping[str, FloatArray], structure: str, spacing: float) -> Layout:
    position = np.stack([table[axis] for axis in "xyz"], axis=1)
    normal = np.stack([table[f"normal_{axis}"] for axis in "xyz"], axis=1)
    origin = np.round(position.mean(axis=0))
    return lay_flat(
        position - origin, normal, fine=table["status"] == 0, spacing=spacing, structure=structure,
        base=float(origin[2]), unrolled=_unrolled(table, position),
    )  # fmt: skip


def _unrolled(table: Mapping[str, FloatArray], position: FloatArray) -> Unrolled | None:
    """Chainage and arc length as the table states them, with the radius that neighbouring gauges show."""
    if "clock" not in table or not np.isfinite(table["clock"]).sum() > NEAR:
        return None
    from scipy.spatial import cKDTree

    chainage, clock = table["chainage"], table["clock"]
    known = np.flatnonzero(np.isfinite(clock) & np.isfinite(chainage))
    _, near = cKDTree(position[known]).query(position[known], NEAR)
    turn = np.angle(np.exp(1j * (clock[known][near] - clock[known][:, None])))
    ahead = chainage[known][near] - chainage[known][:, None]
    around = np.linalg.norm(position[known][near] - position[known][:, None], axis=2)
    beside = np.abs(ahead) < 0.2 * around
    if not beside.any():
        return None
    radius = float(np.median(around[beside] / np.maximum(np.abs(turn[beside]), 1e-9)))
    return Unrolled(chainage, clock * radius, clock)
