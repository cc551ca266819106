# SPDX-License-Identifier: MIT
"""What can be seen where: the components that every place observes, and the smallest change that shows."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.result import Observed, Status
from scanstrain.outputs.colour import choose_scale, colour_table, round_up
from scanstrain.outputs.figures.cells import flat_swatch, hatched_swatch, nearest_gauges, paint
from scanstrain.outputs.figures.layout import Layout, lay_out, structure_of
from scanstrain.outputs.figures.maps import key_of_values, paint_values
from scanstrain.outputs.figures.page import PIXELS, edges_of, map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import caption, facts, gaps, span
from scanstrain.outputs.figures.sheet import EDGE, blank, footing, heading, swatch, wrapped
from scanstrain.outputs.figures.style import FAINT, GROUND, INK, LINE, SMALL, SMALL_LETTERS, WIDTH, styled
from scanstrain.outputs.words import OBSERVED_WORDS, amount, attribute_of, number, percent, status_word
from scanstrain.result import Result
from scanstrain.zones import Unrolled

SEEN_ROW = 150
"""Row of the table of errors whose green stands for "observed": apart from all signed values."""
GAP = 0.16
NAME = 0.27
"""Room for the name over a small map [inch]."""
LOWEST, HIGHEST = 0.4, 2.2
"""Heights of a small map [inch]; a longer object is then not drawn to one scale."""
COLUMNS = ((1.2, 4), (2.6, 3), (5.0, 2))
"""Up to this ratio of length to height, this many small maps stand in a row; beyond, one."""
REASONS = 3
"""Reasons for gauges without a fit that are written out."""


@styled
def draw_observability(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw one small map for each component: where the data support it.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where there is no gauge to show.
    """
    layout = lay_out(result, unrolled)
    if not layout.shown.any():
        return None
    title = "What can be observed where"
    bits = np.asarray(result.strain.values["observed"], np.uint8)
    shares = [float(np.mean((bits[layout.shown] & bit) > 0)) for bit in Observed]
    said = _no_fit(result, layout)
    foot = ["Shares count all gauges that are shown.", *facts(result, layout)]
    figure, boxes = _grid(result, layout, title, said, foot)
    box = edges_of(layout, result.strain.gauge_spacing)
    pixel = (box[1] - box[0]) / (boxes[0][2] * PIXELS)
    cells = nearest_gauges(layout, box, pixel, result.strain.gauge_spacing)
    fine = result.strain.status == Status.FINE
    names = _names(structure_of(result))
    for bit, word, share, place in zip(Observed, names, shares, boxes, strict=True):
        seen = (bits & bit) > 0
        rgb = np.where(seen[:, None], _seen(), np.array(GROUND, np.uint8)).astype(np.uint8)
        _small_map(figure, place, paint(cells, rgb, fine & ~seen), f"{word[:1].upper()}{word[1:]}", percent(share))
    words = "; ".join(f"{word} {percent(share)}" for word, share in zip(OBSERVED_WORDS, shares, strict=True))
    alt = f"Small maps over {span(layout)} of where each component is observable: {words}."
    reading = "Green: observable. Hatched: fitted, but the data do not support this component. Pale: no fit. " + said[0]
    return Picture(figure, title, alt, caption(reading, result, layout))


@styled
def draw_detection_limit(result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
    """Draw the smallest normal displacement that is significant at each gauge.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`.

    Returns
    -------
    Picture or None
        None where normal displacement is not observable at any gauge.
    """
    limits = result.strain.detection_limit["disp_n"]
    seen = np.isfinite(limits)
    if not seen.any():
        return None
    layout, attribute = lay_out(result, unrolled), attribute_of("disp_n_sd")
    low, middle, high = (amount(float(q), attribute) for q in np.quantile(limits[seen], [0.05, 0.5, 0.95]))
    title = "Smallest normal displacement that shows"
    found = f"95 % detection limit: median {middle}, from {low} to {high} at 90 % of the gauges."
    meaning = "1.96 standard errors of a single gauge, registration included; a smaller change can hide here."
    page = map_page(
        layout, result.strain.gauge_spacing, title=title, unit="in mm",
        said=[f"{found} {gaps(limits, layout)}"], foot=[meaning, *facts(result, layout)],
    )  # fmt: skip
    end = round_up(float(np.quantile(limits[seen], 0.95)) * attribute.factor) / attribute.factor
    scale = choose_scale(attribute, limits, limits=end)
    paint_values(page, limits, scale)
    key_of_values(page, limits, scale)
    return Picture(
        page.figure, title, f"Map of the detection limit over {span(layout)}. {found}",
        caption(meaning, result, layout),
    )  # fmt: skip


def _no_fit(result: Result, layout: Layout) -> list[str]:
    """Say how many of the gauges shown carry no fit, and why."""
    status = result.strain.status[layout.shown]
    codes, counts = np.unique(status[status != Status.FINE], return_counts=True)
    if not len(codes):
        return [f"All {number(len(status), 0)} gauges shown have a fit."]
    order = np.argsort(-counts, kind="stable")[:REASONS]
    reasons = "; ".join(f"{status_word(int(codes[k]))} ({percent(counts[k] / len(status))})" for k in order)
    return [f"No fit at {percent(counts.sum() / len(status))} of the {number(len(status), 0)} gauges shown: {reasons}."]


Boxes = list[tuple[float, float, float, float]]


def _grid(result: Result, layout: Layout, title: str, said: list[str], foot: list[str]) -> tuple[Any, Boxes]:
    """Make the page of small maps; gives the figure and each map's (left, bottom, width, height) [inch]."""
    left, right, bottom, top = edges_of(layout, result.strain.gauge_spacing)
    ratio = (right - left) / (top - bottom)
    columns = next((count for most, count in COLUMNS if ratio < most), 1)
    wide = (WIDTH - 2 * EDGE - GAP * (columns - 1)) / columns
    tall = wide / ratio
    if tall < LOWEST:
        foot.insert(0, "Length and height are not drawn to one scale.")
    wide, tall = (HIGHEST * ratio, HIGHEST) if tall > HIGHEST else (wide, max(tall, LOWEST))
    rows = -(-len(OBSERVED_WORDS) // columns)
    head, tail = wrapped(said), wrapped(foot, SMALL_LETTERS)
    under = LINE * len(tail) + (0.3 if columns == 1 else 0.05)
    height = 0.5 + LINE * len(head) + rows * (tall + NAME + 0.1) + under
    figure = blank(height)
    heading(figure, title, head)
    footing(figure, tail)
    upper = height - 0.5 - LINE * len(head)
    boxes = []
    for place in range(len(OBSERVED_WORDS)):
        row, column = divmod(place, columns)
        boxes.append((EDGE + column * (wide + GAP), upper - (row + 1) * (tall + NAME + 0.1) + 0.1, wide, tall))
    _meanings(figure, boxes, columns, under)
    return figure, boxes


def _meanings(figure: Any, boxes: Boxes, columns: int, under: float) -> None:
    """Draw the colour samples in the free place behind the last map, or in a row below."""
    samples = ((flat_swatch(_seen()), "observable"), (hatched_swatch(), "fitted, not observable"),
               (flat_swatch(GROUND), "no fit"))  # fmt: skip
    free = len(boxes) % columns
    for place, (pixels, word) in enumerate(samples):
        if free:
            left = EDGE + free * (boxes[0][2] + GAP)
            swatch(figure, left, boxes[-1][1] + boxes[-1][3] - 0.1 - 0.2 * place, pixels, word)
        else:
            swatch(figure, EDGE + 1.9 * place, under - 0.1, pixels, word)


def _small_map(figure: Any, box: tuple[float, ...], image: NDArray[np.uint8], word: str, share: str) -> None:
    height = float(figure.get_figheight())
    left, bottom, wide, tall = box
    axes = figure.add_axes((left / WIDTH, bottom / height, wide / WIDTH, tall / height))
    axes.imshow(image, aspect="auto", interpolation="nearest")
    axes.set_xticks([])
    axes.set_yticks([])
    axes.spines[:].set_visible(False)
    y = (bottom + tall + 0.1) / height
    figure.text(left / WIDTH, y, word, size=SMALL, va="center", color=INK)
    figure.text((left + wide) / WIDTH, y, share, size=SMALL, va="center", ha="right", color=FAINT)


def _names(structure: str) -> list[str]:
    """Short names of the components; u and v by what they are on this structure."""
    u, v = ("hoop", "axial") if structure == "tunnel" else ("horizontal", "upward")
    short = {"normal displacement": "along the normal"} | {
        f"displacement along {axis}": f"in-plane, {word}" for axis, word in (("u", u), ("v", v))
    }
    return [short.get(word, word) for word in OBSERVED_WORDS]


def _seen() -> NDArray[np.uint8]:
    return colour_table("imola")[SEEN_ROW]
