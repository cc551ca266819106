# SPDX-License-Identifier: MIT
"""The colour bar of a map: colours, numbers with their unit, and the band that cannot be told from noise."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np

from scanstrain.outputs.colour import Scale
from scanstrain.outputs.figures.page import MapPage
from scanstrain.outputs.figures.sentences import MINUS
from scanstrain.outputs.figures.style import INK, WIDTH
from scanstrain.outputs.words import amount, number

THICK = 0.15
"""Height of the bar [inch]."""
LOG_TICKS = (1e-6, 1e-5, 1e-4, 1e-3, 0.01, 0.05, 0.2, 1.0)
LETTERS_PER_INCH = 14.0
LETTER = 0.072
"""Mean width of a letter [inch]."""
SHORT = 2.6
"""A shorter bar [inch] carries only three numbers."""
FEW = 1e4
"""From here on numbers are so long that only three fit."""


def draw_colour_bar(page: MapPage, scale: Scale, *, limit: float | None = None, beyond: tuple[bool, bool]) -> None:
    """Draw the bar of a scale that is not one of steps into the row of the key.

    Parameters
    ----------
    page : MapPage
    scale : Scale
    limit : float, optional
        Detection limit in stored units, marked by dashed lines.
    beyond : (bool, bool)
        Whether values lie below and above the ends.
    """
    from matplotlib.colors import ListedColormap

    factor = scale.attribute.factor
    low, high, log = scale.low * factor, scale.high * factor, scale.form == "log"
    left, top, length = page.key
    # a long unit makes the bar shorter, so that it stays on the page
    length = min(length, WIDTH - left - 0.12 - LETTER * len(scale.attribute.person))
    axes = page.figure.add_axes(page.share(left, top - THICK, length, THICK))
    edges = np.geomspace(low, high, 257) if log else np.linspace(low, high, 257)
    middle = np.sqrt(edges[1:] * edges[:-1]) if log else (edges[1:] + edges[:-1]) / 2
    axes.pcolormesh(edges, [0, 1], scale.rows(middle / factor)[None], cmap=ListedColormap(scale.table / 255.0),
                    vmin=-0.5, vmax=len(scale.table) - 0.5, rasterized=True)  # fmt: skip
    axes.set_xscale("log" if log else "linear")
    axes.set_xlim(low, high)
    axes.set_yticks([])
    ticks, labels = _ticks(scale, low, high, beyond, length)
    axes.set_xticks(ticks, labels)
    axes.minorticks_off()
    axes.tick_params(length=3, pad=2, color=INK)
    page.write(left + length + 0.08, top - THICK / 2, scale.attribute.person)
    _mark(page, axes, scale, limit, high)


def _mark(page: MapPage, axes: Any, scale: Scale, limit: float | None, high: float) -> None:
    if limit is None or not scale.masked:
        return
    place = limit * scale.attribute.factor
    if not 0 < place < high:
        return
    for at in (-place, place) if scale.attribute.kind == "signed" else (place,):
        axes.axvline(at, color=INK, linewidth=0.9, linestyle=(0, (2, 1.5)))
    left, top, length = page.key
    said = f"dashed: 95 % detection limit of a gauge, {amount(limit, scale.attribute)} (median)"
    for row, line in enumerate(textwrap.wrap(said, int(length * LETTERS_PER_INCH) + 8)):
        page.write(left, top - 0.47 - 0.15 * row, line)


def _ticks(
    scale: Scale, low: float, high: float, beyond: tuple[bool, bool], length: float
) -> tuple[list[float], list[str]]:
    if scale.form == "log":
        ticks = [tick for tick in LOG_TICKS if low <= tick <= high][:: 2 if length < SHORT else 1]
        labels = [np.format_float_positional(tick, trim="-") for tick in ticks]
    else:
        signed = scale.attribute.kind == "signed"
        many = 3 if max(abs(low), abs(high)) >= FEW or length < SHORT else 5 if signed else 6
        ticks = [float(tick) for tick in np.linspace(low, high, many)]
        decimals = next((d for d in range(5) if all(abs(round(t, d) - t) <= 1e-6 * high for t in ticks)), 4)
        labels = [number(tick, decimals if tick else 0, sign=signed).replace("-", MINUS) for tick in ticks]
    if not labels:
        return [], []
    labels[0] = f"≤ {labels[0]}" if beyond[0] else labels[0]
    labels[-1] = f"≥ {labels[-1]}" if beyond[1] else labels[-1]
    return ticks, labels
