# SPDX-License-Identifier: MIT
"""Places that changed: regions of gauges with where, how large and how much."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME
from scanstrain.outputs.figures import Layout
from scanstrain.outputs.regions import MAIN, SOUGHT, changed_of
from scanstrain.outputs.report.tables import MISSING, Cell, Row, Table, measured, neat, plain_number, table
from scanstrain.outputs.words import TITLES, interval, number
from scanstrain.result import Result
from scanstrain.strain.regions import NONE, Region

LISTED = ("tilt", "strain_1", "strain_2")
"""Quantities in the full table besides the main one."""
FIRST = 5
"""Regions on the first screen."""


@dataclass(frozen=True, slots=True)
class Places:
    """What changed where.

    Parameters
    ----------
    regions : tuple of Region
        The strongest first.
    isolated : int
        Gauges that changed and stand alone or in pairs.
    area : float
        Surface of the regions [m^2].
    largest : str
        Value of the strongest region and where it is, in words; empty where there is none.
    short, full : Table or None
        The first regions in brief, and all of them with what each quantity reaches; None where there is none.
    """

    regions: tuple[Region, ...]
    isolated: int
    area: float
    largest: str
    short: Table | None
    full: Table | None


def places_of(result: Result, layout: Layout) -> Places:
    """Group what changed and put it into words."""
    changed = changed_of(result)
    regions, values, errors = changed.regions, changed.values, changed.errors
    isolated, area = len(changed.isolated), sum(region.area for region in regions)
    if not regions:
        return Places(regions, isolated, area, "", None, None)
    column, row = _leading(regions[0], values, errors)
    name = TITLES[SOUGHT[column]][0].lower()
    value = neat(interval(values[row, column], errors[row, column], BY_NAME[SOUGHT[column]]))
    largest = f"{name} reaches {value} at {where(result, layout, row)}"
    short = _short(result, layout, regions, values, errors)
    return Places(regions, isolated, area, largest, short, _full(result, layout, regions, values, errors))


def where(result: Result, layout: Layout, gauge: int) -> str:
    """Say where a gauge is: chainage and clock in a tunnel, along and up a wall, or coordinates of the file."""
    values = result.strain.values
    chainage, clock = (float(values[name][gauge]) if name in values else math.nan for name in ("chainage", "clock"))
    if math.isfinite(chainage) and math.isfinite(clock):
        return neat(f"chainage {chainage:.2f} m, {hour(clock)} h")
    shown = bool(layout.shown[gauge])
    if layout.vertical == "height [m]" and shown:
        return neat(f"{layout.along[gauge]:.2f} m along the wall, height {layout.across[gauge]:.2f} m")
    place = neat("x {:.2f}, y {:.2f}, z {:.2f}".format(*result.gauge_positions[gauge]))
    return place if shown else f"{place}, not on the map"


def hour(clock: float) -> str:
    """Write an angle from the crown [rad] as hours of a clock face.

    >>> hour(0.0), hour(math.pi / 2), hour(-math.pi / 4)
    ('12.0', '3.0', '10.5')
    """
    hours = round(clock * 6 / math.pi % 12, 1) % 12
    return f"{hours or 12.0:.1f}"


def _leading(region: Region, values: NDArray[np.float64], errors: NDArray[np.float64]) -> tuple[int, int]:
    """Column and gauge by which a region is named: the main quantity, or else the one that stands out most."""
    ends = [
        (column, int(row))
        for column in range(len(SOUGHT))
        for row in (region.highest[column], region.lowest[column])
        if row != NONE
    ]
    if not ends:
        return 0, int(region.gauges[0])
    main = [end for end in ends if end[0] == 0]
    if main:
        return max(main, key=lambda end: abs(values[end[1], 0]))
    return max(ends, key=lambda end: abs(values[end[1], end[0]]) / errors[end[1], end[0]])


def _short(
    result: Result, layout: Layout, regions: tuple[Region, ...], values: NDArray[np.float64],
    errors: NDArray[np.float64],
) -> Table:  # fmt: skip
    rows: list[Row] = []
    for rank, region in enumerate(regions[:FIRST], 1):
        column, row = _leading(region, values, errors)
        name = SOUGHT[column]
        said = _cell(values, errors, column, row)
        other = region.lowest[0] if values[row, 0] > 0 else region.highest[0]
        # the quantity is named only where it is not the one that the column is about
        text = said.text if name == MAIN else f"{said.text} {TITLES[name][0].lower()}"
        if name == MAIN and other != NONE:
            text = f"{text}\n{_cell(values, errors, 0, int(other)).text}"
        rows.append([Cell(str(rank), rank), where(result, layout, row), _area(region.area), Cell(text, said.sort)])
    more = len(regions) - len(rows)
    note = f"{number(more, 0)} more below." if more else ""
    heads = ("No.", "Place of the largest change", "Size", "Normal displacement, 95 %")
    return table("Regions that changed, the clearest first", heads, rows, note=note, kind="brief")


def _full(
    result: Result, layout: Layout, regions: tuple[Region, ...], values: NDArray[np.float64],
    errors: NDArray[np.float64],
) -> Table:  # fmt: skip
    rows: list[Row] = []
    for rank, region in enumerate(regions, 1):
        _, row = _leading(region, values, errors)
        place = where(result, layout, row)
        in_file = neat("x {:.2f}, y {:.2f}, z {:.2f}".format(*result.gauge_positions[row]))
        extent = float(np.ptp(result.strain.position[region.gauges], axis=0).max()) + result.strain.gauge_spacing
        rows.append([
            Cell(str(rank), rank), place if place.startswith(in_file) else f"{place}\n{in_file}", _area(region.area),
            plain_number(extent, 1, "m"),
            *_reached(region, values, errors),
        ])  # fmt: skip
    names = [TITLES[name][0] for name in LISTED]
    heads = ("No.", "Place of the largest change", "Size", "Longest side", "Highest normal displacement",
             "Lowest normal displacement", *names)  # fmt: skip
    note = (
        "A region is three or more gauges side by side that changed beyond the false-discovery control, in any "
        f"component. {MISSING}: within the 95 % interval of that quantity, or not observable. The largest of many "
        "values is on average somewhat too large."
    )
    return table("All regions that changed: what each quantity reaches there, with 95 % intervals", heads, rows,
                 note=note, kind="places")  # fmt: skip


def _reached(region: Region, values: NDArray[np.float64], errors: NDArray[np.float64]) -> Iterator[Cell]:
    for row in (region.highest[0], region.lowest[0]):
        yield _cell(values, errors, 0, int(row))
    for name in LISTED:
        column = SOUGHT.index(name)
        ends = [int(row) for row in (region.highest[column], region.lowest[column]) if row != NONE]
        sizes = [abs(float(values[row, column])) for row in ends]
        yield _cell(values, errors, column, ends[int(np.argmax(sizes))] if ends else NONE)


def _cell(values: NDArray[np.float64], errors: NDArray[np.float64], column: int, row: int) -> Cell:
    if row == NONE:
        return Cell(MISSING)
    return measured(float(values[row, column]), float(errors[row, column]), SOUGHT[column])


def _area(area: float) -> Cell:
    return plain_number(area, 2 if area < 10 else 1, "m²")
