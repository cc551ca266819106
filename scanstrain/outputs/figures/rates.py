# SPDX-License-Identifier: MIT
"""Map of a rate of change from several epochs."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from scanstrain.attributes import Attribute
from scanstrain.errors import OptionError, explain
from scanstrain.outputs.colour import Limits, choose_scale
from scanstrain.outputs.figures.layout import BoolArray, FloatArray, Layout
from scanstrain.outputs.figures.maps import key_of_values, paint_values
from scanstrain.outputs.figures.page import map_page
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.sentences import MINUS, span
from scanstrain.outputs.figures.style import SMALL_LETTERS, plain, styled
from scanstrain.outputs.words import NORMAL_95, amount, attribute_of, interval, number


@styled
def draw_rates(
    layout: Layout,
    rate: FloatArray,
    rate_sd: FloatArray,
    *,
    name: str,
    title: str,
    spacing: float,
    limits: Limits | None = None,
    only_significant: bool = True,
    facts: Sequence[str] = (),
) -> Picture | None:
    """Draw a map of rates.

    Parameters
    ----------
    layout : Layout
        Places of the gauges on the map, from `lay_out`.
    rate, rate_sd : array_like of shape (g,)
        Rate and its standard error in stored units per year; NaN where not known.
    name : str
        Attribute that changes, such as disp_n: gives unit and colours.
    title : str
        Heading.
    spacing : float
        Gauge spacing [m].
    limits : float or (float, float), optional
        Ends of the colour scale in stored units per year.
    only_significant : bool
        Grey out gauges whose 95 % interval contains zero.
    facts : sequence of str
        Further lines for the foot, such as the dates of the epochs.

    Returns
    -------
    Picture or None
        None where no rate is known.

    Raises
    ------
    OptionError
        Arrays that do not fit the layout, or limits that do not fit the attribute.
    """
    values, errors = np.asarray(rate, float), np.asarray(rate_sd, float)
    if values.shape != layout.along.shape or errors.shape != layout.along.shape:
        raise OptionError(
            explain("rates", f"{len(layout.along)} rates and errors", f"{values.shape} and {errors.shape}",
                    "give one value a gauge")
        )  # fmt: skip
    known = np.asarray(np.isfinite(values) & np.isfinite(errors) & layout.shown)
    if not known.any():
        return None
    attribute = attribute_of(name)
    attribute = replace(attribute, person=f"{attribute.person} per year".strip())
    changing = known & (np.abs(values) > NORMAL_95 * errors)
    found, head = _finding(attribute, values, errors, known, changing), plain(title, 60)
    said = [plain(fact, SMALL_LETTERS) for fact in facts]
    page = map_page(
        layout, spacing, title=head, unit=f"in {attribute.person}", said=[found],
        foot=["Each gauge is judged by its own 95 % interval: one in twenty is expected beyond it by chance.", *said],
    )  # fmt: skip
    scale = choose_scale(attribute, values, limits=limits)
    paint_values(page, np.where(known, values, np.nan), scale, significant=changing if only_significant else None)
    key_of_values(page, values, scale, greyed=only_significant)
    return Picture(page.figure, head, f"Map over {span(layout)}: {head}. {found}", " ".join(["Rate per year.", *said]))


def _finding(
    attribute: Attribute, values: FloatArray, errors: FloatArray, known: BoolArray, changing: BoolArray
) -> str:
    count = number(int(known.sum()), 0)
    if not changing.any():
        limit = amount(NORMAL_95 * float(np.median(errors[known])), attribute)
        return f"No rate above its 95 % interval at any of {count} gauges; a gauge shows {limit} (median)."
    worst = int(np.argmax(np.where(changing, np.abs(values), -1.0)))
    most = interval(float(values[worst]), float(errors[worst]), attribute).replace("-", MINUS)
    return f"The 95 % interval excludes zero at {number(int(changing.sum()), 0)} of {count} gauges; largest {most}."
