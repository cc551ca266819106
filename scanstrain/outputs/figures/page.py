# SPDX-License-Identifier: MIT
"""The page of a map: heading, one or more panels to scale, a row for the key, and the lines at the foot."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from scanstrain.outputs.colour import RGB8
from scanstrain.outputs.figures.cells import IntArray, nearest_gauges
from scanstrain.outputs.figures.layout import BoolArray, Layout
from scanstrain.outputs.figures.sheet import blank, footing, heading, swatch, wrapped
from scanstrain.outputs.figures.style import FAINT, INK, LINE, SMALL, SMALL_LETTERS, WIDTH

LEFT, RIGHT = 0.62, 0.62
"""Margins of a map [inch]: numbers of the axis, and the hours of a lining."""
ROOM = WIDTH - LEFT - RIGHT
TALLEST = 5.4
"""Tallest single panel [inch]."""
THINNEST = 1.0
"""A longer map is cut into strips until they are at least this high [inch] ..."""
ALL_STRIPS = 7.4
"""... or fill this height of the page [inch]."""
BETWEEN = 0.34
UNDER = 0.48
"""Room for the numbers and the name of the horizontal axis [inch]."""
KEY = 0.62
"""Height of the row of the key [inch]."""
NARROW = 3.9
"""A map narrower than this [inch] has its key beside it."""
PIXELS = 150
"""Pixels of the cells per inch."""
MOST_STRIPS = 40
MARGIN = 1.05
"""Room around the outermost gauges, in gauge spacings: a little more than the reach of a cell."""


Place = tuple[float, float, float]


@dataclass(frozen=True, slots=True)
class Panel:
    """One stretch of a map: its axes, its edges (left, right, bottom, top) [m] and the gauge of every pixel."""

    axes: Any
    box: tuple[float, float, float, float]
    cells: IntArray


@dataclass(frozen=True, slots=True)
class MapPage:
    """A page with empty panels to draw on.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
    panels : tuple of Panel
        Consecutive stretches, all to one scale.
    inch : float
        Metres on the object per inch on the page.
    key, legend : (left, top, length)
        Where the colour bar or key arrow and the samples stand, from the lower left corner of the page [inch].
    """

    figure: Any
    panels: tuple[Panel, ...]
    inch: float
    key: Place
    legend: Place

    def paint(self, image_of: Any) -> None:
        """Fill every panel with the pixels that `image_of(cells)` gives."""
        for panel in self.panels:
            panel.axes.imshow(image_of(panel.cells), extent=panel.box, interpolation="nearest", zorder=1, aspect="auto")

    def outline(self, changed: BoolArray) -> bool:
        """Draw a line around the cells of the gauges that changed; says whether there are any."""
        found = False
        for panel in self.panels:
            mask = np.append(changed, False)[panel.cells]
            if not mask.any():
                continue
            found = True
            left, right, bottom, top = panel.box
            rows, columns = mask.shape
            # a frame of nothing, so that the line closes at the edge of the panel
            framed = np.pad(mask, 1).astype(float)
            x = left + (np.arange(columns + 2) - 0.5) * (right - left) / columns
            y = top - (np.arange(rows + 2) - 0.5) * (top - bottom) / rows
            panel.axes.contour(x, y, framed, levels=[0.5], colors=[INK], linewidths=0.8, zorder=3)
            panel.axes.set_xlim(left, right)
            panel.axes.set_ylim(bottom, top)
        return found

    def swatches(self, rows: Sequence[tuple[RGB8 | None, str]]) -> None:
        """Draw small colour samples with their meaning, one below the other; None is an outline."""
        left, top, _ = self.legend
        for number, (pixels, meaning) in enumerate(rows):
            swatch(self.figure, left, top - 0.1 - number * 0.19, pixels, meaning)

    def write(self, left: float, middle: float, text: str) -> None:
        """Write small text at a place on the page [inch]."""
        x, y, _, _ = self.share(left, middle, 0.0, 0.0)
        self.figure.text(x, y, text, size=SMALL, va="center")

    def share(self, left: float, bottom: float, width: float, height: float) -> tuple[float, float, float, float]:
        """Turn inches into shares of the page."""
        tall = float(self.figure.get_figheight())
        return left / WIDTH, bottom / tall, width / WIDTH, height / tall


def map_page(
    layout: Layout, spacing: float, *, title: str, said: Sequence[str], foot: Sequence[str], unit: str = ""
) -> MapPage:
    """Lay out the page of a map.

    Parameters
    ----------
    layout : Layout
    spacing : float
        Gauge spacing [m].
    title : str
        Heading.
    said : sequence of str
        Sentences under the heading.
    foot : sequence of str
        Facts at the foot, each of which begins a line.
    unit : str
        Stands behind the heading in lighter type.

    Returns
    -------
    MapPage
    """
    head, tail = wrapped(said), wrapped(foot, SMALL_LETTERS)
    stretches, size = _stretches(layout, spacing)
    across = stretches[0][3] - stretches[0][2]
    tall = across * size
    top = 0.42 + LINE * len(head) + 0.12
    bottom = LINE * len(tail) + 0.12
    wide = (stretches[0][1] - stretches[0][0]) * size
    beside = wide < NARROW
    height = top + len(stretches) * tall + (len(stretches) - 1) * BETWEEN + UNDER + (0.0 if beside else KEY) + bottom
    figure = blank(height)
    heading(figure, title, head, unit=unit)
    footing(figure, tail)
    panels = []
    for number, box in enumerate(stretches):
        lower = height - top - (number + 1) * tall - number * BETWEEN
        axes = figure.add_axes((LEFT / WIDTH, lower / height, wide / WIDTH, tall / height))
        cells = nearest_gauges(layout, box, 1.0 / (size * PIXELS), spacing)
        panels.append(Panel(axes, box, cells))
        _dress(axes, box, layout, last=number == len(stretches) - 1)
    key, legend = _places(beside, wide, bottom + KEY, height - top)
    return MapPage(figure, tuple(panels), 1.0 / size, key, legend)


def _places(beside: bool, wide: float, under: float, top: float) -> tuple[Place, Place]:
    """Where the key stands: in a row under the map, or beside a narrow map."""
    if not beside:
        return (LEFT, under - 0.05, 3.9), (5.0, under, 2.1)
    left = LEFT + wide + 0.75
    return (left, top - 0.1, WIDTH - left - 0.62), (left, top - 0.95, WIDTH - left)


def edges_of(layout: Layout, spacing: float) -> tuple[float, float, float, float]:
    """Edges (left, right, bottom, top) of a map with room for the rim of its outermost gauges [m]."""
    edge = MARGIN * spacing
    if not layout.shown.any():
        return -edge, edge, -edge, edge
    x, y = layout.along[layout.shown], layout.across[layout.shown]
    return float(x.min()) - edge, float(x.max()) + edge, float(y.min()) - edge, float(y.max()) + edge


def _stretches(layout: Layout, spacing: float) -> tuple[list[tuple[float, float, float, float]], float]:
    """Cut the map into strips that fit the page; gives their edges [m] and inches per metre."""
    left, right, bottom, top = edges_of(layout, spacing)
    length, tall = right - left, top - bottom
    count = next(_counts(length, tall))
    size = min(ROOM * count / length, TALLEST / tall)
    edges = left + length * np.arange(count + 1) / count
    return [(float(a), float(b), bottom, top) for a, b in itertools.pairwise(edges)], size


def _counts(length: float, tall: float) -> Iterator[int]:
    """The smallest number of strips that are high enough, or else the largest that fits the page."""
    fits = 1
    for count in range(1, MOST_STRIPS + 1):
        strip = min(ROOM * count / length * tall, TALLEST)
        if count * (strip + BETWEEN) > ALL_STRIPS and count > 1:
            break
        fits = count
        if strip >= THINNEST:
            break
    yield fits


def _dress(axes: Any, box: tuple[float, float, float, float], layout: Layout, *, last: bool) -> None:
    """Edges, ticks and names of the axes of a panel."""
    from matplotlib.ticker import MaxNLocator

    left, right, bottom, top = box
    axes.set_xlim(left, right)
    axes.set_ylim(bottom, top)
    inches = axes.get_position().height * axes.figure.get_figheight()
    axes.xaxis.set_major_locator(MaxNLocator(9, steps=[1, 2, 5, 10]))
    axes.yaxis.set_major_locator(MaxNLocator(max(2, min(8, round(inches / 0.4))), steps=[1, 2, 5, 10]))
    axes.tick_params(length=3, pad=2)
    axes.spines[["top", "right"]].set_visible(False)
    axes.set_ylabel(
        layout.vertical if inches > 1.7 else layout.vertical.split(" from ")[0].replace(" [m]", "") + " [m]"
    )
    if last:
        axes.set_xlabel(layout.horizontal)
    if layout.radius is not None:
        _hours(axes, layout.radius, bottom, top)


def _hours(axes: Any, radius: float, bottom: float, top: float) -> None:
    """Name the places of the clock face on the right-hand side of a lining."""
    places = {-np.pi / 2: "9 h", 0.0: "crown", np.pi / 2: "3 h", -np.pi: "6 h", np.pi: "6 h"}
    for angle, word in places.items():
        if bottom < angle * radius < top:
            axes.axhline(angle * radius, color=FAINT, linewidth=0.4, linestyle=(0, (1, 3)), zorder=2)
            axes.annotate(word, (1, angle * radius), (4, 0), xycoords=("axes fraction", "data"),
                          textcoords="offset points", va="center", size=SMALL, color=FAINT)  # fmt: skip
