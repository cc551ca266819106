# SPDX-License-Identifier: MIT
"""Principal strains as crosses: direction, size and sign of both at once."""

from __future__ import annotations

import numpy as np

from scanstrain.outputs.colour import round_up
from scanstrain.outputs.figures.cells import flat_swatch, hatched_swatch
from scanstrain.outputs.figures.layout import FloatArray, Layout, lay_out, map_directions
from scanstrain.outputs.figures.page import MapPage, map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import caption, discovered, facts, gaps, span
from scanstrain.outputs.figures.style import GROUND, signed_inks, styled
from scanstrain.outputs.figures.vectors import paint_ground, thinned
from scanstrain.outputs.words import NORMAL_95, amount, attribute_of, number
from scanstrain.result import Result
from scanstrain.zones import Unrolled

SPACE = 0.24
"""Distance between crosses [inch]."""
LONG = 0.4
"""Length of an arm, both sides together, that stands for the 95 % quantile of the strains drawn [inch]."""
WEIGHT = 1.4
"""Width of an arm [pt]."""


@styled
def draw_strain_crosses(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw the two principal strains of gauges as crosses.

    An arm is drawn where the gauge changed, the two principal strains differ significantly, so that there is a
    direction, and the strain along the arm lies outside its own 95 % interval; of close gauges only some are drawn.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where strain is not observable at any gauge.
    """
    strain = result.strain
    sizes = np.stack([np.asarray(strain.values[f"strain_{k}"], float) for k in (1, 2)], axis=1)
    if not np.isfinite(sizes).any():
        return None
    layout, attribute = lay_out(result, unrolled), attribute_of("strain_1")
    errors = np.stack([np.asarray(strain.values[f"strain_{k}_sd"], float) for k in (1, 2)], axis=1)
    directions = _directions(result, layout)
    arms = (np.abs(sizes) > NORMAL_95 * errors) & np.isfinite(directions).all(axis=1)
    arms &= (discovered(result) & layout.shown)[:, None]
    drawn, seen = arms.any(axis=1), np.isfinite(sizes).all(axis=1)
    count = number(int((seen & layout.shown).sum()), 0)
    found = f"No significant principal strain at any of the {count} gauges shown."
    if drawn.any():
        most = amount(float(np.abs(sizes[arms]).max()), attribute)
        found = f"Significant at {number(int(drawn.sum()), 0)} of the {count} gauges shown, up to {most}."
    title = "Principal strains in the surface"
    meaning = (
        "Arms lie along the principal directions, where both strains differ for sure and the strain of the arm is "
        "outside its own 95 % interval."
    )
    page = map_page(
        layout, strain.gauge_spacing, title=title, said=[f"{found} {gaps(sizes[:, 0], layout)}"],
        foot=[meaning, *facts(result, layout)],
    )  # fmt: skip
    paint_ground(page, seen)
    if drawn.any():
        end = round_up(float(np.quantile(np.abs(sizes[arms]), 0.95)) * attribute.factor) / attribute.factor
        _draw(page, layout, np.where(arms, sizes, np.nan) / end * LONG, directions)
        _key(page, amount(end, attribute))
    page.swatches([(flat_swatch(GROUND), "measured, not significant"), (hatched_swatch(), "not observable")])
    alt = f"Map of crosses for the principal strains over {span(layout)}. {found}"
    return Picture(page.figure, title, alt, caption(meaning, result, layout))


def _directions(result: Result, layout: Layout) -> FloatArray:
    """Unit directions of the larger and the smaller principal strain on the map, (g, 2 components, 2 strains).

    NaN where no direction is known.
    """
    strain = result.strain
    angle = np.asarray(strain.details["direction_1"], float)
    c, s = np.cos(angle), np.sin(angle)
    in_axes = np.stack([np.stack([c, -s], 1), np.stack([s, c], 1)], axis=1)
    basis = np.stack(map_directions(strain.position, strain.normal, layout, strain.gauge_spacing), axis=2)
    return np.asarray(np.einsum("gim,gik,gkp->gmp", basis, strain.axes, in_axes))


def _draw(page: MapPage, layout: Layout, inches: FloatArray, directions: FloatArray) -> None:
    from matplotlib.collections import LineCollection

    chosen = thinned(layout, np.asarray(np.isfinite(inches).any(axis=1)), SPACE * page.inch)
    middle = np.stack([layout.along, layout.across], axis=1)[chosen]
    lines, inks = [], []
    for k in (0, 1):
        arm = np.abs(inches[chosen, k, None]) * page.inch / 2 * directions[chosen, :, k]
        lines.append(np.stack([middle - arm, middle + arm], axis=1))
        inks += [signed_inks()[int(size > 0)] for size in inches[chosen, k]]
    segments = np.concatenate(lines)
    keep = np.asarray(np.isfinite(segments).all(axis=(1, 2)))
    inks = [ink for ink, kept in zip(inks, keep, strict=True) if kept]
    for panel in page.panels:
        panel.axes.add_collection(
            LineCollection(list(segments[keep]), colors=inks, linewidths=WEIGHT, capstyle="butt", zorder=4)
        )
        panel.axes.set_xlim(panel.box[:2])
        panel.axes.set_ylim(panel.box[2:])


def _key(page: MapPage, value: str) -> None:
    """Draw an arm of a round size in both inks."""
    left, top, _ = page.key
    for row, (ink, word) in enumerate(zip(reversed(signed_inks()), ("elongation", "shortening"), strict=True)):
        axes = page.figure.add_axes(page.share(left, top - 0.19 - 0.19 * row, LONG, 0.18))
        axes.set_axis_off()
        axes.set_xlim(0, 1)
        axes.set_ylim(-1, 1)
        axes.plot([0, 1], [0, 0], color=ink, linewidth=WEIGHT + 0.2, solid_capstyle="butt")
        page.write(left + LONG + 0.12, top - 0.1 - 0.19 * row, f"{word} of {value}")
