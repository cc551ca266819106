# SPDX-License-Identifier: MIT
"""Arrows on a map: displacement in the surface with its ellipses, and the direction in which the surface tilted."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import Attribute
from scanstrain.outputs.colour import round_up
from scanstrain.outputs.figures.cells import flat_swatch, hatched_swatch, paint
from scanstrain.outputs.figures.layout import BoolArray, FloatArray, Layout, lay_out, map_directions
from scanstrain.outputs.figures.page import MapPage, map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import caption, discovered, facts, gaps, span
from scanstrain.outputs.figures.style import GROUND, INK, styled
from scanstrain.outputs.words import amount, attribute_of, number
from scanstrain.result import Result
from scanstrain.zones import Unrolled

ELLIPSE_95 = 5.991464547107979
"""95 % point of chi-square with two degrees of freedom: squared size of the ellipse in standard errors."""
SPACE = 0.21
"""Distance between arrows [inch]; closer ones would cross."""
LONG = 0.42
"""Length of an arrow that stands for the 95 % quantile of the lengths [inch]."""
THIN = 0.013
"""Width of a shaft [inch]."""


@dataclass(frozen=True, slots=True)
class Arrows:
    """Vectors on a map in stored units, with covariances where ellipses are wanted: (g, 2), (g, 2, 2), (g,)."""

    vector: FloatArray
    covariance: FloatArray | None
    drawn: BoolArray


@styled
def draw_displacement(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw the displacement in the surface as arrows with their 95 % ellipses.

    Only gauges that changed, whose whole vector is observable and lies outside its own ellipse get an arrow; of
    close ones only some are drawn.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where the vector is not observable at any gauge.
    """
    layout = lay_out(result, unrolled)
    vector = np.stack([np.asarray(result.strain.values[f"disp_{axis}"], float) for axis in "xyz"], axis=1)
    if not np.isfinite(vector[:, 0]).any():
        return None
    basis = _basis(result, layout)
    flat, covariance = np.einsum("gik,gi->gk", basis, vector), _covariance(result, basis)
    distance = _squared(flat, covariance)
    drawn = discovered(result) & layout.shown & (distance > ELLIPSE_95)
    title = "Displacement in the surface"
    return _picture(
        result, layout, Arrows(flat, covariance, drawn), attribute_of("disp_x"), title, vector[:, 0],
        "Arrow: displacement along the two axes of the map, with its 95 % ellipse, where it is significant. "
        "The part across the surface is in the map of normal displacement.",
    )  # fmt: skip


@styled
def draw_tilt(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw the tilt as arrows that point where the normal of the surface leans.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where tilt is not observable at any gauge.
    """
    layout = lay_out(result, unrolled)
    tilt = np.asarray(result.strain.values["tilt"], float)
    if not np.isfinite(tilt).any():
        return None
    # a surface that rises along a tangent leans its normal against that tangent
    slope = -np.einsum("gik,gk->gi", result.field.frame[:, :, :2], result.field.gradient[:, 2])
    flat = np.einsum("gik,gi->gk", _basis(result, layout), slope)
    length = np.linalg.norm(flat, axis=1)
    flat = flat * np.divide(tilt, length, out=np.full(len(tilt), np.nan), where=length > 0)[:, None]
    drawn = discovered(result) & layout.shown & (tilt > result.strain.detection_limit["tilt"])
    return _picture(
        result, layout, Arrows(flat, None, drawn & np.isfinite(flat).all(axis=1)), attribute_of("tilt"),
        "Direction of tilt", tilt,
        "Arrow: direction in which the normal of the surface leans over, where the tilt is above its 95 % limit.",
    )  # fmt: skip


def _picture(
    result: Result, layout: Layout, arrows: Arrows, attribute: Attribute, title: str, values: FloatArray, meaning: str
) -> Picture:
    size = np.linalg.norm(arrows.vector, axis=1)
    count = int(arrows.drawn.sum())
    seen = number(int((np.isfinite(values) & layout.shown).sum()), 0)
    if count:
        gauge = int(np.argmax(np.where(arrows.drawn, size, -1.0)))
        most = amount(size[gauge], attribute)
        found = f"Significant at {number(count, 0)} of the {seen} gauges shown; the longest is {most}."
    else:
        found = f"No significant vector at any of the {seen} gauges shown."
    page = map_page(
        layout, result.strain.gauge_spacing, title=title, said=[f"{found} {gaps(values, layout)}"],
        foot=[meaning, *facts(result, layout)],
    )  # fmt: skip
    paint_ground(page, np.isfinite(values))
    if count:
        chosen = thinned(layout, arrows.drawn, SPACE * page.inch)
        scale = round_up(float(np.quantile(size[arrows.drawn], 0.95)) * attribute.factor) / attribute.factor / LONG
        _draw(page, layout, arrows, chosen, scale)
        _key_arrow(page, scale, attribute)
    page.swatches([(flat_swatch(GROUND), "measured, not significant"), (hatched_swatch(), "not observable")])
    return Picture(page.figure, title, f"Map of arrows over {span(layout)}. {found}", caption(meaning, result, layout))


def paint_ground(page: MapPage, seen: BoolArray) -> None:
    """Fill the panels with a pale ground where there is something to see, and hatching where there is not."""
    rgb = np.full((len(seen), 3), GROUND, np.uint8)
    page.paint(lambda cells: paint(cells, rgb, ~seen))


def thinned(layout: Layout, wanted: BoolArray, step: float) -> NDArray[np.intp]:
    """Choose one gauge of each square of a side [m]: the one nearest to its centre."""
    rows = np.flatnonzero(wanted)
    places = np.stack([layout.along, layout.across], axis=1)[rows] / step
    square = np.floor(places)
    off = np.linalg.norm(places - square - 0.5, axis=1)
    order = np.lexsort((off, square[:, 1], square[:, 0]))
    first = np.ones(len(order), bool)
    first[1:] = (np.diff(square[order], axis=0) != 0).any(axis=1)
    return rows[order[first]]


def _draw(page: MapPage, layout: Layout, arrows: Arrows, chosen: NDArray[np.intp], scale: float) -> None:
    """Draw arrows at `scale` stored units per inch, and ellipses about their tips."""
    from matplotlib.collections import EllipseCollection

    x, y, vector = layout.along[chosen], layout.across[chosen], arrows.vector[chosen]
    for panel in page.panels:
        if arrows.covariance is not None:
            roots, axes = np.linalg.eigh(arrows.covariance[chosen])
            full = 2 * np.sqrt(ELLIPSE_95 * np.maximum(roots, 0.0)) / scale
            tips = np.stack([x, y], axis=1) + vector / scale * page.inch
            angle = np.degrees(np.arctan2(axes[:, 1, 1], axes[:, 0, 1]))
            panel.axes.add_collection(
                EllipseCollection(full[:, 1], full[:, 0], angle, units="inches", offsets=tips, facecolor="white",
                                  edgecolor=INK, alpha=0.55, linewidth=0.5, transOffset=panel.axes.transData, zorder=3)
            )  # fmt: skip
        _quiver(panel.axes, x, y, vector, scale)
        panel.axes.set_xlim(panel.box[:2])
        panel.axes.set_ylim(panel.box[2:])


def _quiver(axes: Any, x: Any, y: Any, vector: FloatArray, scale: float) -> None:
    axes.quiver(x, y, vector[:, 0], vector[:, 1], color=INK, units="inches", scale_units="inches", scale=scale,
                width=THIN, headwidth=4.5, headlength=5.5, headaxislength=5.0, minlength=0.5, zorder=4)  # fmt: skip


def _key_arrow(page: MapPage, scale: float, attribute: Attribute) -> None:
    """Draw an arrow of a round length with its value."""
    left, top, _ = page.key
    value = LONG * scale
    axes = page.figure.add_axes(page.share(left, top - 0.2, 1.0, 0.2))
    axes.set_xlim(0, 1)
    axes.set_ylim(-1, 1)
    axes.set_axis_off()
    _quiver(axes, [0.0], [0.0], np.array([[value, 0.0]]), scale)
    page.write(left + LONG + 0.12, top - 0.1, amount(value, attribute))


def _basis(result: Result, layout: Layout) -> FloatArray:
    """Unit tangents along the axes of the map as columns, (g, 3, 2)."""
    strain = result.strain
    return np.stack(map_directions(strain.position, strain.normal, layout, strain.gauge_spacing), axis=2)


def _covariance(result: Result, basis: FloatArray) -> FloatArray:
    """Covariance of the displacement along the axes of the map, registration included, (g, 2, 2) [m²]."""
    local = np.einsum("gik,gia->gka", result.field.frame, basis)
    own = np.einsum("gka,gkl,glb->gab", local, result.field.covariance[:, :3, :3], local)
    datum = np.einsum(
        "gia,gij,gjb->gab", basis, result.registration.displacement_covariance(result.strain.position), basis
    )
    return np.asarray(own + datum)


def _squared(vector: FloatArray, covariance: FloatArray) -> FloatArray:
    """Squared length in standard errors, v' S^-1 v; zero where either is not known."""
    known = np.asarray(np.isfinite(vector).all(axis=1) & np.isfinite(covariance).all(axis=(1, 2)))
    safe = np.where(known[:, None, None], covariance, np.eye(2))
    known &= np.linalg.det(safe) > 0
    out = np.zeros(len(vector))
    weighted = np.linalg.solve(safe[known], vector[known][..., None])[..., 0]
    out[known] = np.einsum("gi,gi->g", vector[known], weighted)
    return out
