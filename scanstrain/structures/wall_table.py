# SPDX-License-Identifier: MIT
"""The movement of a wall as the rows of tables."""

from __future__ import annotations

from collections.abc import Mapping

from scanstrain.structures.bulge import Bulge
from scanstrain.structures.wall_movement import WallResult
from scanstrain.structures.wall_parts import QUANTITIES

COLUMNS: Mapping[str, tuple[str, str]] = {
    "kind": ("", "wall, band of height or panel"),
    "column": ("1", "from the left for somebody who faces the wall, counted from 0; -1 over the full width"),
    "row": ("1", "from the foot, counted from 0; -1 over the full height"),
    "left": ("m", "edge along the wall, from its left end"),
    "right": ("m", "edge along the wall"),
    "bottom": ("m", "edge up the wall, from its foot"),
    "top": ("m", "edge up the wall"),
    "gauges": ("1", "gauges in it"),
    "effective": ("1", "gauges without overlap that would give the mean the same standard error, registration aside"),
    "area": ("m^2", "area that these gauges stand for"),
}
"""Unit and meaning of the columns before the quantities."""

BULGE_COLUMNS: Mapping[str, tuple[str, str]] = {
    "height": ("m", "displacement that remains at its top without the best plane, positive to the free side"),
    "height_sd": ("m", "its standard error"),
    "largest": ("m", "largest remaining displacement of a single gauge"),
    "chance": ("1", "probability of such a height somewhere on a wall that moved as a plane"),
    "along": ("m", "place of its top along the wall, from its left end"),
    "up": ("m", "place of its top up the wall, from its foot"),
    "along_sd": ("m", "standard error of its place"),
    "up_sd": ("m", "standard error of its place"),
    "area": ("m^2", "connected area beyond its 95 % limit"),
    "width": ("m", "extent along the wall at half height"),
    "width_sd": ("m", "its standard error"),
    "tall": ("m", "extent up the wall at half height"),
    "tall_sd": ("m", "its standard error"),
    "closed": ("1", "1 where it ends inside the seen face, 0 where it may be larger than it seems"),
}
"""Unit and meaning of what is said of a bulge."""


def wall_rows(result: WallResult) -> list[dict[str, float | str]]:
    """Return one row for each part: where it is, what it rests on, and every quantity with its standard error.

    Parameters
    ----------
    result : WallResult

    Returns
    -------
    list of dict
        Keys as in `wall_units`, in that order; metres, radians and plain numbers, NaN for what is not supported.
    """
    rows = []
    for part in result.parts:
        row: dict[str, float | str] = {"kind": part.kind}
        row |= {name: float(getattr(part, name)) for name in COLUMNS if name != "kind"}
        for name, value in part.values.items():
            row[name], row[f"{name}_sd"] = value, part.errors[name]
        rows.append(row)
    return rows


def wall_units() -> dict[str, tuple[str, str]]:
    """Return unit and meaning of every column of `wall_rows`."""
    units = dict(COLUMNS)
    for name, (unit, meaning) in QUANTITIES.items():
        units[name] = unit, meaning
        units[f"{name}_sd"] = unit, "its standard error"
    return units


def bulge_rows(result: WallResult) -> list[dict[str, float | str]]:
    """Return one row for the bulge and one for the hollow, where there are any; keys as in `bulge_units`."""
    found: dict[str, Bulge | None] = {"bulge": result.bulge, "hollow": result.hollow}
    return [
        {"kind": kind, **{name: float(getattr(bulge, name)) for name in BULGE_COLUMNS}}
        for kind, bulge in found.items()
        if bulge is not None
    ]


def bulge_units() -> dict[str, tuple[str, str]]:
    """Return unit and meaning of every column of `bulge_rows`."""
    return {"kind": ("", "bulge to the free side or hollow away from it"), **BULGE_COLUMNS}
