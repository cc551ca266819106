# SPDX-License-Identifier: MIT
"""Values over the dates of several epochs, with 95 % bars: convergence, chords, named places."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import date
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import Attribute
from scanstrain.errors import OptionError, explain
from scanstrain.outputs.colour import RGB8, colour_table
from scanstrain.outputs.figures.page import LEFT
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import MINUS
from scanstrain.outputs.figures.sheet import blank, footing, heading, wrapped
from scanstrain.outputs.figures.style import FAINT, LINE, RULE, SMALL, SMALL_LETTERS, WIDTH, plain, styled
from scanstrain.outputs.words import NORMAL_95, interval

FloatArray = NDArray[np.float64]

TALL = 2.9
"""Height of the axes [inch]."""
NAMES = 1.75
"""Room for the names at the ends of the lines [inch]."""
APART = 0.16
"""Least distance between two names [inch]."""
DARK = 150
"""Last row of the table that stands out from white paper as a letter."""
MOST = 10
"""More lines than this cannot be told apart."""


@styled
def draw_series(
    dates: Sequence[date | str],
    values: FloatArray,
    sd: FloatArray,
    labels: Sequence[str],
    *,
    attribute: Attribute,
    title: str,
    facts: Sequence[str] = (),
) -> Picture:
    """Draw values over time with 95 % bars.

    Parameters
    ----------
    dates : sequence of date or ISO 8601 str, length t
    values, sd : array_like of shape (k, t)
        Values and standard errors of k series in stored units; NaN where not known. The first date is usually the
        reference, with zeros.
    labels : sequence of str, length k
        Names of the series, written at the ends of the lines.
    attribute : Attribute
        Unit for a person and its factor.
    title : str
        Heading.
    facts : sequence of str
        Further lines for the foot.

    Returns
    -------
    Picture

    Raises
    ------
    OptionError
        Shapes that do not fit, more than ten series, or a date that cannot be read.
    """
    days, numbers, errors = _checked(dates, values, sd, labels)
    names, head = [plain(label, 26) for label in labels], plain(title, 60)
    found = [_last(name, days, row, error, attribute) for name, row, error in zip(names, numbers, errors, strict=True)]
    said = ["Latest values (95 %): " + "; ".join(part for part in found if part) + "."]
    said = said if any(found) else ["No value with an error is known at any date."]
    meaning = "Bars: 95 % interval. Open circles: the interval contains zero."
    figure, axes = _axes(head, said[:1], [meaning, *(plain(fact, SMALL_LETTERS) for fact in facts)], attribute)
    inks = [tuple(float(part) / 255 for part in row) for row in _inks(len(names))]
    for row, error, ink in zip(numbers, errors, inks, strict=True):
        _draw(axes, days, row * attribute.factor, NORMAL_95 * error * attribute.factor, ink)
    _date_axis(axes, days)
    _names(axes, numbers * attribute.factor, names, inks)
    return Picture(figure, head, f"Time series “{head}” over {len(days)} dates. {said[0]}", meaning)


def _checked(
    dates: Sequence[date | str], values: FloatArray, sd: FloatArray, labels: Sequence[str]
) -> tuple[list[date], FloatArray, FloatArray]:
    numbers, errors = np.atleast_2d(np.asarray(values, float)), np.atleast_2d(np.asarray(sd, float))
    wanted = (len(labels), len(dates))
    if numbers.shape != wanted or errors.shape != wanted or not 1 <= len(labels) <= MOST or not dates:
        raise OptionError(
            explain(
                "series", f"one to {MOST} labels, and values and errors of shape (labels, dates)",
                f"{wanted[0]} labels, {wanted[1]} dates, shapes {numbers.shape} and {errors.shape}",
                "give one row a label",
            )
        )  # fmt: skip
    try:
        days = [date.fromisoformat(day[:10]) if isinstance(day, str) else day for day in dates]
    except ValueError as error:
        raise OptionError(explain("dates", "dates as 2031-03-05", f"{list(dates)}", "write year-month-day")) from error
    order = np.argsort([day.toordinal() for day in days], kind="stable")
    return [days[k] for k in order], numbers[:, order], errors[:, order]


def _inks(count: int) -> RGB8:
    """Colours dark enough to be read as letters: the first part of the table of codes."""
    return colour_table("batlow")[np.linspace(0, DARK, count).astype(int)]


def _last(name: str, days: list[date], row: FloatArray, error: FloatArray, attribute: Attribute) -> str:
    """The latest value of a series in words."""
    known = np.flatnonzero(np.isfinite(row) & (error > 0))
    if not len(known):
        return ""
    k = known[-1]
    when = "" if k == len(days) - 1 else f" ({days[k].isoformat()})"
    return f"{name} {interval(float(row[k]), float(error[k]), attribute).replace('-', MINUS)}{when}"


def _axes(title: str, said: Sequence[str], foot: Sequence[str], attribute: Attribute) -> tuple[Any, Any]:
    head, tail = wrapped(said), wrapped(foot, SMALL_LETTERS)
    under = LINE * len(tail) + 0.15 + 0.3
    height = 0.55 + LINE * len(head) + TALL + under
    figure = blank(height)
    heading(figure, title, head, unit=f"in {attribute.person}" if attribute.person else "")
    footing(figure, tail)
    axes = figure.add_axes((LEFT / WIDTH, under / height, (WIDTH - LEFT - NAMES) / WIDTH, TALL / height))
    axes.axhline(0, color=FAINT, linewidth=0.6, zorder=1)
    axes.yaxis.grid(True, color=RULE, linewidth=0.4)
    axes.set_axisbelow(True)
    axes.spines[["top", "right"]].set_visible(False)
    axes.set_ylabel(attribute.person)
    return figure, axes


def _draw(axes: Any, days: list[date], row: FloatArray, half: FloatArray, ink: tuple[float, ...]) -> None:
    x, seen = np.array([day.toordinal() for day in days], float), np.isfinite(row)
    axes.plot(x[seen], row[seen], color=ink, linewidth=1.3, zorder=3)
    bars = seen & np.isfinite(half)
    axes.errorbar(x[bars], row[bars], half[bars], fmt="none", ecolor=ink, elinewidth=0.9, capsize=2.5, zorder=3)
    clear = np.abs(row) > np.where(np.isfinite(half), half, np.inf)
    for dots, face in ((seen & clear, ink), (seen & ~clear, "white")):
        axes.plot(x[dots], row[dots], "o", markersize=4.2, markerfacecolor=face, markeredgecolor=ink, zorder=4)


def _date_axis(axes: Any, days: list[date]) -> None:
    """Ticks at the dates of the epochs, as many as fit."""
    first, last = days[0].toordinal(), days[-1].toordinal()
    edge = 0.04 * max(last - first, 1)
    axes.set_xlim(first - edge, last + edge)
    ticks: list[date] = []
    for day in days:
        if not ticks or (day.toordinal() - ticks[-1].toordinal()) / (last - first + 2 * edge) > 0.16:
            ticks.append(day)
    axes.set_xticks([day.toordinal() for day in ticks], [day.isoformat() for day in ticks])


def _names(axes: Any, numbers: FloatArray, names: list[str], inks: list[tuple[float, ...]]) -> None:
    """Write each name at the height of its last value, moved apart where they would touch."""
    low, high = axes.get_ylim()
    step = APART / TALL * (high - low)
    ends = np.array([row[np.isfinite(row)][-1] if np.isfinite(row).any() else 0.0 for row in numbers])
    order = np.argsort(ends, kind="stable")
    places = ends[order].copy()
    for k in range(1, len(places)):
        places[k] = max(places[k], places[k - 1] + step)
    places -= max(0.0, places[-1] - high)
    for k in range(len(places) - 1, 0, -1):
        places[k - 1] = min(places[k - 1], places[k] - step)
    for k, y in zip(order, places, strict=True):
        axes.annotate(names[k], (1.01, y), xycoords=("axes fraction", "data"), size=SMALL, va="center", color=inks[k])
