# SPDX-License-Identifier: MIT
"""What every figure begins with: an empty sheet, its heading, its foot, and samples of colour."""

from __future__ import annotations

import re
import textwrap
from collections.abc import Sequence
from typing import Any

from scanstrain.outputs.colour import RGB8
from scanstrain.outputs.figures.style import DPI, FAINT, INK, LETTERS, LINE, PAPER, SMALL, TEXT, TITLE, WIDTH

EDGE = 0.06
"""Margin of text [inch]."""
NO_BREAK = "\u00a0"


def blank(height: float) -> Any:
    """Make an empty figure of our width and the given height [inch]."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(WIDTH, height), dpi=DPI, facecolor=PAPER)
    FigureCanvasAgg(figure)
    return figure


def heading(figure: Any, title: str, lines: Sequence[str], *, unit: str = "") -> None:
    """Write the title, its unit and the lines under it."""
    height = float(figure.get_figheight())
    head = figure.text(EDGE / WIDTH, 1 - 0.18 / height, title, size=TITLE, weight="bold", va="center")
    if unit:
        end = head.get_window_extent().x1 / (WIDTH * DPI)
        figure.text(end + 0.012, 1 - 0.18 / height, unit, size=TITLE, va="center", color=FAINT)
    for number, line in enumerate(lines):
        figure.text(EDGE / WIDTH, 1 - (0.43 + LINE * number) / height, line, size=TEXT, va="center")


def footing(figure: Any, lines: Sequence[str]) -> None:
    """Write the lines at the foot."""
    height = float(figure.get_figheight())
    for number, line in enumerate(reversed(lines)):
        y = (0.09 + LINE * number) / height
        figure.text(EDGE / WIDTH, y, line, size=SMALL, va="center", color=FAINT)


def swatch(figure: Any, left: float, middle: float, pixels: RGB8 | None, meaning: str) -> None:
    """Draw a colour sample and its meaning at a place on the page [inch]; None is an outline."""
    from matplotlib.image import BboxImage
    from matplotlib.patches import Rectangle
    from matplotlib.transforms import Bbox, TransformedBbox

    height = float(figure.get_figheight())
    corner, size = (left / WIDTH, (middle - 0.055) / height), (0.22 / WIDTH, 0.11 / height)
    # no axes of its own: they would take a hundred times as long as the sample
    if pixels is not None:
        box = TransformedBbox(Bbox.from_bounds(*corner, *size), figure.transFigure)
        image = BboxImage(box, interpolation="nearest", origin="upper")
        image.set_data(pixels)
        figure.add_artist(image)
    ink, wide = (INK, 0.9) if pixels is None else (FAINT, 0.4)
    frame = Rectangle(corner, *size, facecolor="none", edgecolor=ink, linewidth=wide, transform=figure.transFigure)
    figure.add_artist(frame)
    figure.text((left + 0.3) / WIDTH, middle / height, meaning, size=SMALL, va="center")


def wrapped(sentences: Sequence[str], most: int = LETTERS) -> list[str]:
    """Break sentences into lines that fit; every sentence begins a line, and no number parts from its unit."""
    kept = [re.sub(r"(?<=[\d±]) ", NO_BREAK, sentence) for sentence in sentences]
    return [line for sentence in kept for line in textwrap.wrap(sentence, most, break_on_hyphens=False)]
