# SPDX-License-Identifier: MIT
"""The ground that the registration stands on, and what it left there."""

from __future__ import annotations

import numpy as np

from scanstrain.outputs.colour import choose_scale, round_up
from scanstrain.outputs.figures.cells import flat_swatch, gauge_colours, hatched_swatch, paint
from scanstrain.outputs.figures.colour_bar import draw_colour_bar
from scanstrain.outputs.figures.layout import BoolArray, Layout, lay_out
from scanstrain.outputs.figures.page import map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import caption, facts, median_limit, span
from scanstrain.outputs.figures.style import SET_ASIDE, styled
from scanstrain.outputs.words import amount, attribute_of, listed, percent
from scanstrain.result import Result
from scanstrain.zones import Unrolled

MOST_POINTS = 200_000
"""Reference points that are looked at: every gauge keeps dozens."""
WIDE = 4.0
"""Ends of the scale in detection limits: noise stays pale, and what the registration missed does not."""


@styled
def draw_stable_ground(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw where the stable ground is, coloured by the normal displacement that is left on it.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where no gauge lies on stable ground or none of them has a normal displacement.
    """
    values = np.asarray(result.strain.values["disp_n"], float)
    stable = stable_gauges(result)
    used, limit = stable & np.isfinite(values), median_limit(result, "disp_n")
    if not used.any() or limit is None:
        return None
    layout, attribute, registration = lay_out(result, unrolled), attribute_of("disp_n"), result.registration
    end = round_up(max(WIDE * limit, 1e-9) * attribute.factor) / attribute.factor
    scale = choose_scale(attribute, values, limits=end)
    weak = [each.description for each in registration.weak_directions]
    rms = f": {amount(registration.rms, attribute)} rms" if np.isfinite(registration.rms) else ""
    said = [
        ("Registration" if registration.converged else "Registration did not converge")
        + f"{rms}, {percent(registration.stable_fraction)} of the reference points on stable ground.",
        f"Not fixed by the surfaces: {listed(weak)}." if weak else "",
    ]
    title = "Stable ground and what is left on it"
    meaning = "Coloured: normal displacement of gauges on the ground that the registration took as not moved."
    page = map_page(
        layout,
        result.strain.gauge_spacing,
        title=title,
        unit="in mm",
        said=said,
        foot=[meaning, *facts(result, layout)],
    )
    rgb, _ = gauge_colours(values, scale)
    rgb[~stable] = SET_ASIDE
    page.paint(lambda cells: paint(cells, rgb, ~np.isfinite(values)))
    left = values[used]
    beyond = (bool((left < scale.low).any()), bool((left > scale.high).any()))
    draw_colour_bar(page, scale, limit=limit, beyond=beyond)
    page.swatches([(flat_swatch(SET_ASIDE), "not taken as stable"), (hatched_swatch(), "not observable")])
    spread = amount(float(np.median(np.abs(left))), attribute)
    alt = f"Map of the stable ground over {span(layout)}. {said[0]} Half of its gauges are within ± {spread}."
    return Picture(page.figure, title, alt, caption(meaning, result, layout))


def stable_gauges(result: Result) -> BoolArray:
    """Which gauges have most of the points about them on stable ground."""
    from scipy.spatial import cKDTree

    points = result.reference.points
    step = max(1, len(points) // MOST_POINTS)
    strain, stable = result.strain, np.asarray(result.points["stable"])[::step] > 0
    # every point speaks for its nearest gauge only
    distance, gauge = cKDTree(strain.position).query(points[::step])
    near = distance <= strain.gauge_length / 2
    every = np.bincount(gauge[near], minlength=len(strain))
    mine = np.bincount(gauge[near], weights=stable[near], minlength=len(strain))
    return np.asarray((every > 0) & (2 * mine > every))
