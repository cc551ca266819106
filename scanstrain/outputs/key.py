# SPDX-License-Identifier: MIT
"""The colour key: one picture that says what the colours of a cloud mean, and what they do not say."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT, Scale, choose_scale
from scanstrain.outputs.notes import KeyNotes, significant_or_all
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.words import TITLES, amount, attribute_of, number, percent
from scanstrain.result import Result

INK, FAINT, PAPER = "#1c2733", "#66727f", "#ffffff"
DPI = 150
WIDTH = 9.0
LEFT, RIGHT = 0.05, 0.945
ROW = 0.27
"""Height of a line [inch]."""
BINS = 96
LONG_LABEL = 1e4
"""From here on labels are so long that few ticks fit."""
LOG_TICKS = (1e-6, 1e-5, 1e-4, 1e-3, 0.01, 0.05, 0.1, 0.2, 0.5, 1.0)


def write_colour_key(result: Result, folder: Path, options: OutputOptions) -> Path:
    """Write `strain_<attribute>.png`, the key to the colours of the cloud of that name."""
    name = options.colour_by
    values = result.points[name]
    scale = choose_scale(attribute_of(name), values, limits=options.colour_limits, colour_map=options.colour_map)
    notes = KeyNotes.of(result, name)
    significant = significant_or_all(result.points, options.only_significant)
    return write_key(scale, values, folder / f"strain_{name}.png", notes=notes, significant=significant)


def write_key(
    scale: Scale,
    values: NDArray[np.generic],
    target: Path,
    *,
    notes: KeyNotes,
    significant: NDArray[np.bool_] | None = None,
) -> Path:
    """Draw the key of a scale.

    Parameters
    ----------
    scale : Scale
        The scale that the cloud was coloured with.
    values : ndarray of shape (n,)
        The coloured values in stored units; their distribution is drawn over the scale.
    target : Path
        PNG file.
    notes : KeyNotes
        Gauge length, detection limit and epochs.
    significant : ndarray of shape (n,), bool, optional
        What the cloud was greyed by, if it was.

    Returns
    -------
    Path
        `target`.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    steps = scale.form == "steps"
    greys = [] if steps else _greys(scale, values, significant)
    height = (1.55 + ROW * len(scale.labels)) if steps else (3.2 + ROW * len(greys))
    figure = Figure(figsize=(WIDTH, height), dpi=DPI, facecolor=PAPER)
    FigureCanvasAgg(figure)
    _heading(figure, scale, height)
    if steps:
        _draw_steps(figure, scale, values, height)
    else:
        _draw_ramp(figure, scale, values, notes, height)
        _draw_greys(figure, greys, height)
    _facts(figure, notes, scale, height)
    # no software stamp: the same values give the same bytes
    figure.savefig(target, format="png", metadata={"Software": None})
    return target


def _heading(figure: Any, scale: Scale, height: float) -> None:
    title, meaning = TITLES[scale.attribute.name]
    head = figure.text(LEFT, 1 - 0.36 / height, title, size=17, weight="bold", color=INK, va="center")
    if scale.attribute.person:
        end = head.get_window_extent().x1 / (WIDTH * DPI)
        unit = f"in {scale.attribute.person}"
        figure.text(end + 0.012, 1 - 0.36 / height, unit, size=17, color=INK, va="center")
    figure.text(LEFT, 1 - 0.66 / height, meaning, size=10, color=FAINT, va="center")
    figure.text(RIGHT, 1 - 0.66 / height, scale.attribute.name, size=10, color=FAINT, va="center", ha="right",
                family="monospace")  # fmt: skip


def _draw_ramp(figure: Any, scale: Scale, values: NDArray[np.generic], notes: KeyNotes, height: float) -> None:
    """Distribution above, colours below, on one axis in the unit for a person."""
    from matplotlib.colors import ListedColormap

    factor = scale.attribute.factor
    low, high = scale.low * factor, scale.high * factor
    log = scale.form == "log"
    edges = np.geomspace(low, high, BINS + 1) if log else np.linspace(low, high, BINS + 1)
    shown = np.asarray(values, dtype=np.float64)
    shown = shown[np.isfinite(shown)] * factor
    counts, _ = np.histogram(np.clip(shown, low, high), bins=edges)
    beyond = (bool((shown < low).any()), bool((shown > high).any()))
    centre = np.sqrt(edges[1:] * edges[:-1]) if log else (edges[1:] + edges[:-1]) / 2
    palette = scale.table[scale.rows(centre / factor)] / 255.0

    above = figure.add_axes((LEFT, 1 - 1.78 / height, RIGHT - LEFT, 0.85 / height))
    tops = np.sqrt(counts) if len(shown) else np.full(BINS, np.nan)
    above.bar(edges[:-1], tops, np.diff(edges), align="edge", color=palette, edgecolor=INK, linewidth=0.25)
    above.set_axis_off()
    above.set_ylim(bottom=0)
    if not len(shown):
        figure.text(0.5, 1 - 1.4 / height, "no values", size=10, color=FAINT, va="center", ha="center")
    bar = figure.add_axes((LEFT, 1 - 2.08 / height, RIGHT - LEFT, 0.3 / height))
    fine = np.geomspace(low, high, 513) if log else np.linspace(low, high, 513)
    middle = np.sqrt(fine[1:] * fine[:-1]) if log else (fine[1:] + fine[:-1]) / 2
    bar.pcolormesh(fine, [0, 1], scale.rows(middle / factor)[None], cmap=ListedColormap(scale.table / 255.0),
                   vmin=-0.5, vmax=len(scale.table) - 0.5, rasterized=True)  # fmt: skip
    for axes in (above, bar):
        axes.set_xscale("log" if log else "linear")
        axes.set_xlim(low, high)
    bar.set_yticks([])
    _ticks(bar, scale, low, high, beyond)
    _mark_limit(above, bar, scale, notes, high)


def _ticks(bar: Any, scale: Scale, low: float, high: float, beyond: tuple[bool, bool]) -> None:
    """Label the axis; the end labels say whether there are values beyond them."""
    if scale.form == "log":
        ticks = [tick for tick in LOG_TICKS if low <= tick <= high]
        labels = [np.format_float_positional(tick, trim="-") for tick in ticks]
    else:
        signed = scale.attribute.kind == "signed"
        ticks = list(np.linspace(low, high, 11 if signed else 6))
        if max(abs(low), abs(high)) >= LONG_LABEL:
            ticks = [low, (low + high) / 2, high]
        decimals = max(_decimals(tick) for tick in ticks)
        labels = [number(tick, decimals if tick else 0, sign=signed).replace("-", "−") for tick in ticks]
    labels[0] = f"≤ {labels[0]}" if beyond[0] else labels[0]
    labels[-1] = f"≥ {labels[-1]}" if beyond[1] else labels[-1]
    bar.set_xticks(ticks, labels)
    bar.minorticks_off()
    bar.tick_params(length=4, color=INK, labelcolor=INK, labelsize=10)
    for spine in bar.spines.values():
        spine.set_color(INK)
        spine.set_linewidth(0.6)


def _decimals(tick: float) -> int:
    """Decimals that show a tick exactly, up to four."""
    return next((count for count in range(4) if abs(round(tick, count) - tick) <= 1e-6 * max(abs(tick), 1e-9)), 4)


def _mark_limit(above: Any, bar: Any, scale: Scale, notes: KeyNotes, high: float) -> None:
    """Mark the band in which a single gauge cannot tell a change from noise."""
    if notes.detection_limit is None or not scale.masked:
        return
    limit = notes.detection_limit * scale.attribute.factor
    if not 0 < limit < high:
        return
    for place in (-limit, limit) if scale.attribute.kind == "signed" else (limit,):
        for axes in (above, bar):
            axes.axvline(place, color=INK, linewidth=1.1, linestyle=(0, (3, 2)))


Grey = tuple[tuple[int, int, int], str, str]


def _greys(scale: Scale, values: NDArray[np.generic], significant: NDArray[np.bool_] | None) -> list[Grey]:
    """The greys that the cloud can show: colour, name, meaning."""
    missing = ~np.isfinite(np.asarray(values, dtype=np.float64))
    greys: list[Grey] = []
    if significant is not None and scale.masked:
        share = _share(~missing & ~significant)
        greys.append((NOT_SIGNIFICANT, "not significant", f"no change beyond the false-discovery control ({share})"))
    if values.dtype.kind == "f":
        share = _share(missing)
        greys.append((NOT_OBSERVABLE, "not observable", f"the data do not support a number here ({share})"))
    return greys


def _draw_greys(figure: Any, greys: list[Grey], height: float) -> None:
    for row, (grey, name, meaning) in enumerate(greys):
        middle = height - 2.58 - ROW * row
        _swatch(figure, grey, middle, height)
        figure.text(LEFT + 0.042, middle / height, name, size=10, color=INK, va="center", weight="bold")
        figure.text(LEFT + 0.185, middle / height, meaning, size=10, color=INK, va="center")


def _draw_steps(figure: Any, scale: Scale, values: NDArray[np.generic], height: float) -> None:
    """One line a code: colour, meaning, share, and a bar for the share."""
    shares = np.bincount(scale.rows(np.asarray(values)), minlength=len(scale.table)) / max(len(values), 1)
    for row, (label, colour, share) in enumerate(zip(scale.labels, scale.table, shares, strict=True)):
        middle = height - 0.98 - ROW * row
        _swatch(figure, colour, middle, height)
        ink = INK if share > 0 else FAINT
        figure.text(LEFT + 0.042, middle / height, label, size=10, color=ink, va="center")
        figure.text(0.70, middle / height, percent(share), size=10, color=ink, va="center", ha="right")
        _box(figure, 0.72, middle - 0.06, (RIGHT - 0.72) * share * WIDTH, 0.12, height, FAINT)


def _facts(figure: Any, notes: KeyNotes, scale: Scale, height: float) -> None:
    """The lines at the foot: without them a map of strain cannot be read."""
    first, second = [], []
    if notes.gauge_length is not None:
        first.append(f"gauge length {number(notes.gauge_length, 2)} m")
    if notes.detection_limit is not None:
        dashed = ", dashed" if scale.masked and notes.detection_limit < scale.high else ""
        first.append(f"detection limit {amount(notes.detection_limit, scale.attribute)} (median{dashed})")
    if scale.form != "steps":
        error = scale.attribute.kind == "error"
        first.append("a 95 % interval is ± 1.96 of these" if error else "confidence level 95 %")
        second.append("columns: how many points hold a value, as square root")
    if scale.form == "linear":
        second.append(_rule(scale))
    lines = [line for line in (second, first, [shortened(notes.epochs)]) if any(line)]
    _box(figure, LEFT, 0.14 + 0.19 * len(lines), (RIGHT - LEFT) * WIDTH, 0.006, height, FAINT)
    for text, middle in zip(lines, (0.17, 0.36, 0.55), strict=False):
        figure.text(LEFT, middle / height, "   ·   ".join(text), size=9, color=FAINT, va="center")


def _rule(scale: Scale) -> str:
    """Say where the limits come from."""
    if scale.given:
        return "limits as given"
    whose = f"of all {scale.shared} comparisons" if scale.shared else "of the values"
    return f"limits: 99 % {whose}, rounded up"


def shortened(text: str, most: int = 100) -> str:
    """Cut the middle out of a text that would not fit on a line.

    >>> shortened("epoch 0 → epoch 1", 9)
    'epoc…ch 1'
    """
    half = (most - 1) // 2
    return text if len(text) <= most else f"{text[:half]}…{text[-half:]}"


def _share(where: NDArray[np.bool_]) -> str:
    return f"{percent(float(where.mean()) if len(where) else 0.0)} of the points"


def _swatch(figure: Any, colour: Sequence[int] | NDArray[np.uint8], middle: float, height: float) -> None:
    _box(figure, LEFT, middle - 0.085, 0.27, 0.17, height, tuple(int(part) / 255 for part in colour), edge=INK)


def _box(
    figure: Any, left: float, bottom: float, width: float, tall: float, height: float, colour: Any, edge: str = "none"
) -> None:
    """Fill a rectangle; `left` is a share of the width, the rest is in inches."""
    from matplotlib.patches import Rectangle

    corner, size = (left, bottom / height), (width / WIDTH, tall / height)
    figure.add_artist(
        Rectangle(corner, *size, transform=figure.transFigure, facecolor=colour, edgecolor=edge, linewidth=0.5)
    )
