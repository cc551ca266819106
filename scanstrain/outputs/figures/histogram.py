# SPDX-License-Identifier: MIT
"""Do the standard errors hold: standardised normal displacements against the normal curve."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.figures.ground import stable_gauges
from scanstrain.outputs.figures.layout import Layout
from scanstrain.outputs.figures.page import LEFT
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import MINUS, caption, facts
from scanstrain.outputs.figures.sheet import blank, footing, heading, wrapped
from scanstrain.outputs.figures.style import FAINT, INK, LINE, SMALL, SMALL_LETTERS, WIDTH, styled
from scanstrain.outputs.words import NORMAL_95, number, percent
from scanstrain.result import Result
from scanstrain.zones import Unrolled

END = 6.0
"""Values beyond this many standard errors stand in the outermost columns."""
BINS = 48
TALL = 2.5
"""Height of the axes [inch]."""
FILL = "#8fa3b5"
FEWEST = 20
"""Fewer gauges than this show no distribution."""


@styled
def draw_standardised(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw the normal displacement of every gauge divided by its own standard error, against the normal curve.

    The standard error includes the registration. The curve belongs to the gauges on stable ground; by default those
    are what should follow it. Neighbouring gauges share points, so their values are not independent.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        Not needed here; every figure takes it.

    Returns
    -------
    Picture or None
        None where fewer than twenty gauges have a normal displacement.
    """
    del unrolled
    values = np.asarray(result.strain.values["disp_n"], float)
    errors = np.asarray(result.strain.values["disp_n_sd"], float)
    usable = np.isfinite(values) & (errors > 0)
    if usable.sum() < FEWEST:
        return None
    score = np.divide(values, errors, out=np.full(len(values), np.nan), where=usable)
    still = stable_gauges(result) & usable
    judged = still if still.sum() >= FEWEST else usable
    ground = "on stable ground" if judged is still else "of the whole map"
    outside = float(np.mean(np.abs(score[judged]) > NORMAL_95))
    said = [
        f"{percent(outside)} of the {number(int(judged.sum()), 0)} gauges {ground} lie beyond ± 1.96 standard errors "
        "(5 % expected)."
    ]
    title = "Normal displacement over its standard error"
    meaning = (
        "The standard error includes the registration. Neighbouring gauges share points and are not independent. "
        "The outermost columns hold all values beyond."
    )
    foot = [meaning, *facts(result)]
    figure = _draw(title, said, foot, score[judged], score[usable], ground)
    alt = f"Histogram of standardised normal displacements against the normal curve. {said[0]}"
    return Picture(figure, title, alt, caption(meaning, result))


def _draw(
    title: str, said: list[str], foot: list[str], judged: NDArray[np.float64], every: NDArray[np.float64], ground: str
) -> Any:
    head, tail = wrapped(said), wrapped(foot, SMALL_LETTERS)
    under = LINE * len(tail) + 0.12 + 0.45
    height = 0.55 + LINE * len(head) + TALL + under
    figure = blank(height)
    heading(figure, title, head)
    footing(figure, tail)
    axes = figure.add_axes((LEFT / WIDTH, under / height, (WIDTH - LEFT - 0.35) / WIDTH, TALL / height))
    edges = np.linspace(-END, END, BINS + 1)
    counts = np.histogram(np.clip(judged, -END, END), edges)[0]
    axes.stairs(counts, edges, fill=True, color=FILL, zorder=1)
    x = np.linspace(-END, END, 481)
    curve = len(judged) * (edges[1] - edges[0]) * np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi)
    axes.plot(x, curve, color=INK, linewidth=1.3, zorder=3)
    handles = [f"gauges {ground}", "normal curve for as many"]
    if len(every) > len(judged):
        axes.stairs(np.histogram(np.clip(every, -END, END), edges)[0], edges, color=FAINT, linewidth=0.8, zorder=2)
        handles.append("all gauges")
    for limit in (-NORMAL_95, NORMAL_95):
        axes.axvline(limit, color=INK, linewidth=0.8, linestyle=(0, (2, 1.5)), zorder=2)
    top = 1.25 * max(float(counts.max()), float(curve.max()))
    axes.set_ylim(0, top)
    axes.set_xlim(-END, END)
    _legend(axes, handles)
    _cut_columns(axes, np.histogram(np.clip(every, -END, END), edges)[0], edges, top)
    ticks = np.arange(-END, END + 1, 2)
    labels = [f"{tick:+.0f}".replace("-", MINUS) if tick else "0" for tick in ticks]
    axes.set_xticks(ticks, [f"≤ {labels[0]}", *labels[1:-1], f"≥ {labels[-1]}"])
    axes.set_xlabel("normal displacement / standard error")
    axes.set_ylabel("gauges")
    axes.spines[["top", "right"]].set_visible(False)
    return figure


def _cut_columns(axes: Any, counts: NDArray[np.intp], edges: NDArray[np.float64], top: float) -> None:
    """Write the count beside an outermost column that does not fit."""
    for column, side in ((0, "left"), (-1, "right")):
        if counts[column] > top:
            x = edges[1] + 0.1 if column == 0 else edges[-2] - 0.1
            axes.text(x, 0.93 * top, f"{number(int(counts[column]), 0)} here", size=SMALL, ha=side, color=FAINT)


def _legend(axes: Any, words: list[str]) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    samples = [Patch(color=FILL), Line2D([], [], color=INK, linewidth=1.3), Line2D([], [], color=FAINT, linewidth=0.8)]
    axes.legend(samples[: len(words)], words, loc="upper left", frameon=False, fontsize=SMALL, borderaxespad=0.1)
