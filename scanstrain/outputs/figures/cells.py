# SPDX-License-Identifier: MIT
"""Gauges as cells of a picture: every pixel belongs to the nearest gauge, and to none beyond the measured surface."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT, RGB8, TO_16_BIT, Scale, colours
from scanstrain.outputs.figures.layout import BoolArray, Layout

IntArray = NDArray[np.intp]

REACH = 1.0
"""Gaps narrower than twice this many gauge spacings are closed: gauges do not stand on a strict grid."""
RIM = 0.5
"""The measured surface ends this many gauge spacings beyond its outermost gauges: half a cell."""
HATCH, STROKE = 7, 1
"""Distance and width of the hatching of "not observable" [pixel]."""
HATCHED_PAPER = (246, 246, 246)
SWATCH = (14, 26)
"""Pixels of a colour sample: rows, columns."""


def nearest_gauges(layout: Layout, box: tuple[float, float, float, float], pixel: float, spacing: float) -> IntArray:
    """Say which gauge every pixel of a map belongs to.

    Parameters
    ----------
    layout : Layout
    box : (left, right, bottom, top)
        Edges of the map [m].
    pixel : float
        Side of a pixel [m].
    spacing : float
        Gauge spacing [m].

    Returns
    -------
    ndarray of shape (rows, columns), intp
        Top row first; -1 where no gauge is in reach.
    """
    known = layout.pixels.get((*box, pixel, spacing))
    if known is not None:
        return known
    layout.pixels[(*box, pixel, spacing)] = cells = _nearest(layout, box, pixel, spacing)
    return cells


def _nearest(layout: Layout, box: tuple[float, float, float, float], pixel: float, spacing: float) -> IntArray:
    from scipy.ndimage import distance_transform_edt
    from scipy.spatial import cKDTree

    left, right, bottom, top = box
    columns = max(1, round((right - left) / pixel))
    lines = max(1, round((top - bottom) / pixel))
    x = left + (np.arange(columns) + 0.5) * (right - left) / columns
    y = top - (np.arange(lines) + 0.5) * (top - bottom) / lines
    rows = np.flatnonzero(layout.shown)
    if not len(rows):
        return np.full((lines, columns), -1, np.intp)
    tree = cKDTree(np.stack([layout.along, layout.across], axis=1)[rows])
    places = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    _, found = tree.query(places, distance_upper_bound=REACH * spacing)
    cells = np.append(rows, -1)[found].reshape(lines, columns)
    # widened by the reach and narrowed again: an even rim instead of a row of circles
    inside = distance_transform_edt(cells >= 0) >= (REACH - RIM) * spacing / pixel
    return np.asarray(np.where(inside, cells, -1))


def gauge_colours(
    values: NDArray[np.generic], scale: Scale, *, significant: BoolArray | None = None
) -> tuple[RGB8, BoolArray]:
    """Give every gauge the colour that the clouds give it.

    Returns
    -------
    rgb : ndarray of shape (g, 3), uint8
    hatched : ndarray of shape (g,), bool
        Which ones are not observable and get the hatching instead.
    """
    rgb = (colours(values, scale, significant=significant) // TO_16_BIT).astype(np.uint8)
    missing = ~np.isfinite(np.asarray(values, dtype=np.float64))
    return rgb, missing


def paint(cells: IntArray, rgb: RGB8, hatched: BoolArray) -> RGB8:
    """Turn cells into pixels: paper where there is no gauge, hatching where there is nothing to show.

    Returns
    -------
    ndarray of shape (rows, columns, 3), uint8
    """
    image = np.vstack([rgb, np.full((1, 3), 255, np.uint8)])[cells]
    without = np.append(hatched, False)[cells]
    image[without] = HATCHED_PAPER
    image[without & stripes(cells.shape)] = NOT_OBSERVABLE
    return np.asarray(image)


def stripes(shape: tuple[int, ...]) -> BoolArray:
    """Diagonal stripes over a picture of (rows, columns)."""
    row, column = np.indices(shape)
    return np.asarray((row + column) % HATCH < STROKE)


def grey_rows(scale: Scale, greyed: bool) -> list[tuple[RGB8, str]]:
    """Swatches (pixels, meaning) for the greys that a map of a scale can show."""
    rows = []
    if greyed and scale.masked:
        rows.append((flat_swatch(NOT_SIGNIFICANT), "not significant"))
    return [*rows, (hatched_swatch(), "not observable")]


def flat_swatch(colour: Sequence[int] | NDArray[np.uint8]) -> RGB8:
    """Pixels of the swatch for one colour."""
    return np.tile(np.array(colour, np.uint8), (*SWATCH, 1))


def hatched_swatch() -> RGB8:
    """Pixels of the swatch for "not observable"."""
    return paint(np.zeros(SWATCH, np.intp), np.zeros((1, 3), np.uint8), np.ones(1, bool))
