# SPDX-License-Identifier: MIT
"""A cross-section with its change drawn larger than it is, and the factor said."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.outputs.colour import round_up
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import MINUS
from scanstrain.outputs.figures.sheet import blank, footing, heading, wrapped
from scanstrain.outputs.figures.style import (
    FAINT,
    INK,
    LINE,
    RULE,
    SMALL,
    SMALL_LETTERS,
    WIDTH,
    plain,
    signed_inks,
    styled,
)
from scanstrain.outputs.words import NORMAL_95, amount, attribute_of, digits, interval, number

FloatArray = NDArray[np.float64]

SIDE = 4.6
"""Side of the square that holds the section [inch]."""
SHARE, QUIET = 0.22, 0.05
"""Size on the page, as a share of the radius, of the largest significant change, if nobody chose the exaggeration; and
of the 95 % interval where nothing is significant, so that noise does not look like movement."""
ROWS = 0.42
"""Room for the two bars of length under a section [inch]."""
SEAM = 4.0
"""A gap wider than this many median steps of the angle is not bridged by a line."""


@styled
def draw_section(
    theta: FloatArray,
    radius: FloatArray,
    change: FloatArray,
    change_sd: FloatArray,
    *,
    exaggeration: float | None = None,
    title: str = "Cross-section",
    epochs: str = "",
    facts: Sequence[str] = (),
) -> Picture:
    """Draw a section of a lining and how it changed.

    Parameters
    ----------
    theta : array_like of shape (n,)
        Angle from the crown, clockwise for somebody who looks along the axis [rad].
    radius : array_like of shape (n,)
        Distance of the reference surface from the axis [m].
    change, change_sd : array_like of shape (n,)
        Movement towards the free side, that is towards the axis, and its standard error [m]; NaN where not known.
    exaggeration : float, optional
        How many times larger than the section the change is drawn. By default a round number that makes the largest
        change about a fifth of the radius.
    title : str
        Heading, such as the chainage.
    epochs : str
        Which epochs are compared.
    facts : sequence of str
        Further lines for the foot, such as the gauge length.

    Returns
    -------
    Picture

    Raises
    ------
    OptionError
        Arrays of different length, or an exaggeration that is not above zero.
    """
    theta, radius, change, sd = _checked(theta, radius, change, change_sd)
    known = np.isfinite(change) & np.isfinite(sd)
    significant = known & (np.abs(change) > NORMAL_95 * sd)
    factor = _factor(radius, change[significant], sd[known], exaggeration)
    attribute, name = attribute_of("disp_n"), plain(title, 60)
    if significant.any():
        worst = int(np.argmax(np.where(significant, np.abs(change), -1.0)))
        found = f"Largest change {interval(change[worst], sd[worst], attribute).replace('-', MINUS)} (95 %)"
        found += f" at {_hour(theta[worst])} h; positive: towards the axis."
    elif known.any():
        limit = amount(NORMAL_95 * float(np.median(sd[known])), attribute)
        found = f"No change above {limit} (95 % detection limit of a place, median)."
    else:
        found = "No change is known on this section."
    meaning = (
        f"Change drawn {number(factor, 0 if factor >= 10 else 1)} times larger than the section. "
        "Band: 95 % interval. Seen in the direction of chainage."
    )
    foot = [meaning, *(plain(fact, SMALL_LETTERS) for fact in (*facts, epochs) if fact)]
    figure, axes = _axes(name, [found], foot, theta, radius)
    _draw(axes, theta, radius, change, sd, factor, significant)
    _size_of_change(axes, factor)
    return Picture(figure, name, f"Cross-section “{name}”. {found}", meaning)


def _checked(*arrays: FloatArray) -> list[FloatArray]:
    flat = [np.asarray(array, float).reshape(-1) for array in arrays]
    if len({len(array) for array in flat}) != 1 or not len(flat[0]):
        found = ", ".join(str(len(array)) for array in flat)
        raise OptionError(
            explain("section", "angle, radius, change and error of one length above 0", found, "give one value a place")
        )
    order = np.argsort(flat[0], kind="stable")
    return [array[order] for array in flat]


def _factor(radius: FloatArray, change: FloatArray, sd: FloatArray, given: float | None) -> float:
    if given is not None:
        if not (np.isfinite(given) and given > 0):
            raise OptionError(explain("exaggeration", "a number above 0", f"{given}", "give for example 100"))
        return float(given)
    size = float(np.nanmedian(radius))
    noise = NORMAL_95 * float(np.median(sd)) / (QUIET * size) if len(sd) else 0.0
    # the inverse is rounded up to 1, 2 or 5, so that the change stays inside the page
    inverse = max(float(np.abs(change).max()) / (SHARE * size) if len(change) else noise, 1e-9)
    return 1.0 / round_up(inverse)


def _axes(
    title: str, said: Sequence[str], foot: Sequence[str], theta: FloatArray, radius: FloatArray
) -> tuple[Any, Any]:
    head, tail = wrapped(said), wrapped(foot, SMALL_LETTERS)
    end = 1.32 * float(np.nanmax(radius))
    # an arch without its lower half needs no room for it
    low = max(-end, float(np.nanmin(radius * np.cos(theta))) - 0.32 * end)
    tall = SIDE * (end - low) / (2 * end)
    under = LINE * len(tail) + 0.15 + ROWS
    height = 0.5 + LINE * len(head) + tall + under
    figure = blank(height)
    heading(figure, title, head)
    footing(figure, tail)
    axes = figure.add_axes(((WIDTH - SIDE) / 2 / WIDTH, under / height, SIDE / WIDTH, tall / height))
    axes.set_xlim(-end, end)
    axes.set_ylim(low, end)
    axes.set_axis_off()
    axes.plot(0, 0, "+", markersize=7, color=FAINT, markeredgewidth=0.6)
    for x, y, word in ((0, 1, "crown"), (1, 0, "3 h"), (0, -1, "6 h"), (-1, 0, "9 h")):
        if y * 0.96 * end > low:
            axes.text(0.96 * end * x, 0.96 * end * y, word, size=SMALL, ha="center", va="center", color=FAINT)
    return figure, axes


def _draw(
    axes: Any, theta: FloatArray, radius: FloatArray, change: FloatArray, sd: FloatArray, factor: float,
    significant: NDArray[np.bool_],
) -> None:  # fmt: skip
    from matplotlib.collections import LineCollection, PolyCollection

    # towards the axis is inwards on the page
    outline, moved = _places(theta, radius), _places(theta, radius - factor * change)
    inner, outer = (_places(theta, radius - factor * (change + side * NORMAL_95 * sd)) for side in (1, -1))
    near = np.diff(theta) <= SEAM * float(np.median(np.diff(theta))) if len(theta) > 1 else np.empty(0, bool)
    pairs = np.flatnonzero(near)
    bands = np.stack([inner[pairs], inner[pairs + 1], outer[pairs + 1], outer[pairs]], axis=1)
    bands = bands[np.isfinite(bands).all(axis=(1, 2))]
    axes.add_collection(PolyCollection(list(bands), facecolor=RULE, edgecolor=RULE, linewidth=0.2, zorder=1))
    base = np.stack([outline[pairs], outline[pairs + 1]], axis=1)
    axes.add_collection(LineCollection(list(base), colors=[FAINT], linewidths=0.9, zorder=2))
    line = np.stack([moved[pairs], moved[pairs + 1]], axis=1)
    keep = np.isfinite(line).all(axis=(1, 2))
    negative, positive = signed_inks()
    inks = [
        (positive if change[k] > 0 else negative) if significant[k] and significant[k + 1] else FAINT
        for k in pairs[keep]
    ]
    axes.add_collection(LineCollection(list(line[keep]), colors=inks, linewidths=1.8, zorder=3, capstyle="round"))
    used = {ink: word for ink, word in ((positive, "moved inwards"), (negative, "moved outwards"),
                                        (FAINT, "not significant")) if ink in inks}  # fmt: skip
    _legend(axes, used)


def _legend(axes: Any, used: dict[Any, str]) -> None:
    """Name the lines that are there, in the free middle of the section."""
    from matplotlib.lines import Line2D

    samples = [Line2D([], [], color=FAINT, linewidth=0.9), *(Line2D([], [], color=ink, linewidth=1.8) for ink in used)]
    axes.legend(samples, ["reference", *used.values()], loc="upper center", frameon=False, fontsize=SMALL,
                bbox_to_anchor=(0, -0.06), bbox_transform=axes.transData)  # fmt: skip


def _size_of_change(axes: Any, factor: float) -> None:
    """Draw bars for a length on the section and for a size of change, below it."""
    end = axes.get_xlim()[1]
    length, size = round_up(end / 5), round_up(1e3 * end / 8 / factor) / 1e3
    for row, (long, word) in enumerate(
        ((length, f"{number(length, digits(length, 1))} m of the section"),
         (size * factor, f"{number(size * 1e3, digits(size * 1e3, 1))} mm of change"))
    ):  # fmt: skip
        y = axes.get_ylim()[0] - (0.12 + 0.17 * row) * 2 * end / SIDE
        axes.plot([-end, -end + long], [y, y], color=INK, linewidth=1.6, solid_capstyle="butt", clip_on=False)
        axes.text(-end + long + 0.03 * end, y, word, size=SMALL, va="center")


def _places(theta: FloatArray, radius: FloatArray) -> FloatArray:
    return np.stack([radius * np.sin(theta), radius * np.cos(theta)], axis=1)


def _hour(angle: float) -> str:
    hour = angle * 6 / np.pi % 12
    return f"{hour:.1f}" if hour >= 0.05 else "12"
