# SPDX-License-Identifier: MIT
"""Map of one quantity: the lining unrolled, the wall in elevation, anything else projected."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import Attribute
from scanstrain.outputs.colour import Limits, Scale, choose_scale
from scanstrain.outputs.figures.cells import gauge_colours, grey_rows, paint
from scanstrain.outputs.figures.colour_bar import draw_colour_bar
from scanstrain.outputs.figures.layout import BoolArray, Layout, lay_out
from scanstrain.outputs.figures.page import MapPage, map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import (
    caption,
    facts,
    finding,
    gaps,
    grouped,
    largest,
    median_limit,
    numbers_of,
    place,
    span,
    standing_out,
)
from scanstrain.outputs.figures.style import INK, SMALL, styled
from scanstrain.outputs.words import TITLES, attribute_of
from scanstrain.result import Result
from scanstrain.zones import Unrolled

HALO = 2.2
"""White rim around letters on a map [pt]."""
VEIL = 0.8
"""Opacity of the paper behind them: the line to the place ends at its edge, and dark cells stay seen."""


@styled
def draw_map(
    result: Result,
    name: str,
    *,
    unrolled: Unrolled | Layout | None = None,
    limits: Limits | None = None,
    colour_map: str | None = None,
    only_significant: bool = True,
) -> Picture | None:
    """Draw a map of one attribute.

    Parameters
    ----------
    result : Result
    name : str
        Attribute, such as disp_n; not one of the codes, which have figures of their own.
    unrolled : Unrolled or Layout, optional
        The gauges in coordinates of the structure, see `lay_out`.
    limits : float or (float, float), optional
        Ends of the colour scale in stored units, as for the coloured cloud, whose default this shares.
    colour_map : str, optional
        Table of colours, as for the coloured cloud.
    only_significant : bool
        Grey out gauges without a change beyond the false-discovery control, and those that changed in another
        component while this one lies within its own 95 % limit.

    Returns
    -------
    Picture or None
        None where no gauge has a value.

    Raises
    ------
    OptionError
        An unknown attribute, or limits that do not fit it.
    """
    attribute = attribute_of(name)
    scale = choose_scale(attribute, result.points[name], limits=limits, colour_map=colour_map)
    values = numbers_of(result, name)
    if scale.form == "steps" or not np.isfinite(values).any():
        return None
    layout = lay_out(result, unrolled)
    title, meaning = TITLES[name]
    said = finding(result, name, layout)
    page = map_page(
        layout, result.strain.gauge_spacing, title=title, unit=_unit(attribute),
        said=[f"{said} {gaps(values, layout)}"], foot=[f"{meaning[:1].upper()}{meaning[1:]}.", *facts(result, layout)],
    )  # fmt: skip
    outlined = paint_values(
        page,
        values,
        scale,
        significant=standing_out(result, name) if only_significant else None,
        region=grouped(result),
    )
    mark_largest(page, result, name, layout)
    key_of_values(page, values, scale, greyed=only_significant, outlined=outlined, limit=median_limit(result, name))
    top = largest(result, name, layout)
    where = f" Largest at {place(layout, top[0])}." if top else ""
    alt = f"Map over {span(layout)}: {title}. {said}{where}"
    grey = (
        "Grey: no change beyond the false-discovery control, or within the 95 % limit of this quantity. "
        if only_significant and scale.masked
        else ""
    )
    reading = f"{title}: {meaning}. {grey}Hatched: the data do not support a number."
    return Picture(page.figure, title, alt, caption(reading, result, layout))


def paint_values(
    page: MapPage,
    values: NDArray[np.float64],
    scale: Scale,
    *,
    significant: BoolArray | None = None,
    region: BoolArray | None = None,
) -> bool:
    """Fill the panels with the colours of values; says whether any region was outlined."""
    rgb, hatched = gauge_colours(values, scale, significant=significant)
    page.paint(lambda cells: paint(cells, rgb, hatched))
    return bool(region is not None and scale.masked and page.outline(region & np.isfinite(values)))


def key_of_values(
    page: MapPage,
    values: NDArray[np.float64],
    scale: Scale,
    *,
    greyed: bool = False,
    outlined: bool = False,
    limit: float | None = None,
) -> None:
    """Draw the colour bar and the meaning of greys and outlines."""
    finite = values[np.isfinite(values)]
    beyond = (bool((finite < scale.low).any()), bool((finite > scale.high).any()))
    draw_colour_bar(page, scale, limit=limit, beyond=beyond)
    outline = [(None, "changed in any component")] if outlined else []
    page.swatches([*grey_rows(scale, greyed), *outline])


def mark_largest(page: MapPage, result: Result, name: str, layout: Layout) -> None:
    """Point at the largest significant value and write it with its interval."""
    top = largest(result, name, layout)
    if top is None:
        return
    gauge, text = top
    x, y = float(layout.along[gauge]), float(layout.across[gauge])
    panel = next(panel for panel in page.panels if panel.box[0] <= x <= panel.box[1])
    left, right, bottom, up = panel.box
    from matplotlib.patheffects import withStroke

    aside = -1 if x > (left + right) / 2 else 1
    above = -1 if y > (bottom + up) / 2 else 1
    note = panel.axes.annotate(
        text, (x, y), (16 * aside, 14 * above), textcoords="offset points", size=SMALL, weight="bold", color=INK,
        ha="left" if aside > 0 else "right", va="center", zorder=6,
        arrowprops={"arrowstyle": "-", "color": INK, "linewidth": 0.8, "shrinkA": 0, "shrinkB": 3},
        path_effects=[withStroke(linewidth=HALO, foreground="white")],
        bbox={"boxstyle": "round,pad=0.2", "facecolor": "white", "edgecolor": "none", "alpha": VEIL},
    )  # fmt: skip
    note.arrow_patch.set_zorder(5)
    panel.axes.plot(x, y, "o", markersize=5, markerfacecolor="none", markeredgecolor=INK, markeredgewidth=0.9, zorder=5)


def _unit(attribute: Attribute) -> str:
    return f"in {attribute.person}" if attribute.person else ""
