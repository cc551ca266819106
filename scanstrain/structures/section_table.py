# SPDX-License-Identifier: MIT
"""Sections as the rows of a table."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np

from scanstrain.structures.measurements import QUANTITIES, Pair, chord_units
from scanstrain.structures.sections import Section

COLUMNS: Mapping[str, tuple[str, str]] = {
    "chainage": ("m", "along the axis"),
    "axis_x": ("m", "place of the axis, local coordinates"),
    "axis_y": ("m", "place of the axis, local coordinates"),
    "axis_z": ("m", "place of the axis, local coordinates"),
    "points_ref": ("1", "points of the reference epoch that the outline rests on"),
    "points_cur": ("1", "points of the current epoch"),
    "coverage": ("1", "share of the ring that both epochs show"),
    "longest_gap": ("rad", "longest arc that they do not both show"),
    "fourier_order": ("1", "highest order of the Fourier series that the visible arcs support"),
    "fourier_leverage": ("1", "largest share that one piece of arc has in its own fitted value"),
    "ellipse_leverage": ("1", "the same for the ellipse of the reference epoch"),
}
"""Unit and meaning of the columns before the quantities."""


def section_rows(sections: Sequence[Section]) -> list[dict[str, float]]:
    """Return one row for each section: where it is, what it rests on, and every quantity with its standard error.

    Parameters
    ----------
    sections : sequence of Section

    Returns
    -------
    list of dict
        Keys as in `section_units`, in that order; metres, radians and plain numbers, NaN for what is not supported.
    """
    rows = []
    for section in sections:
        x, y, z = section.place
        head = (
            section.chainage,
            x,
            y,
            z,
            section.points_ref,
            section.points_cur,
            section.coverage,
            section.gap,
            section.waves.order if section.waves else 0,
            section.waves.leverage if section.waves else np.nan,
            section.ellipse_ref.leverage if section.ellipse_ref else np.nan,
        )
        row = dict(zip(COLUMNS, map(float, head), strict=True))
        for name, value in section.values.items():
            row[name], row[f"{name}_sd"] = value, section.errors[name]
        rows.append(row)
    return rows


def section_units(chords: Sequence[Pair] = ()) -> dict[str, tuple[str, str]]:
    """Return unit and meaning of every column of `section_rows`.

    Parameters
    ----------
    chords : sequence of (hour, hour)
        The chords that the sections were cut with.

    Returns
    -------
    dict of str to (str, str)
    """
    measured = dict(QUANTITIES)
    for pair in chords:
        measured |= chord_units(pair)
    units = dict(COLUMNS)
    for name, (unit, meaning) in measured.items():
        units[name] = unit, meaning
        units[f"{name}_sd"] = unit, "its standard error"
    return units
