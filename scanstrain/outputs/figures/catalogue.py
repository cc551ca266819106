# SPDX-License-Identifier: MIT
"""Every figure that a result can have, in the order in which a report shows them."""

from __future__ import annotations

import functools
from collections.abc import Iterator, Mapping
from typing import Protocol

from scanstrain.outputs.colour import Limits
from scanstrain.outputs.figures.coverage import draw_detection_limit, draw_observability
from scanstrain.outputs.figures.crosses import draw_strain_crosses
from scanstrain.outputs.figures.ground import draw_stable_ground
from scanstrain.outputs.figures.histogram import draw_standardised
from scanstrain.outputs.figures.layout import Layout, lay_out
from scanstrain.outputs.figures.maps import draw_map
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.vectors import draw_displacement, draw_tilt
from scanstrain.registry import Registry
from scanstrain.result import Result
from scanstrain.zones import Unrolled

MAPPED = (
    "disp_n", "tilt", "strain_1", "strain_2", "strain_u", "strain_v", "shear_uv", "shear_max", "dilation", "spin",
    "curv_1", "curv_2", "bend_1", "bend_2",
)  # fmt: skip
"""Attributes that get a map; `draw_map` draws the others, such as components along the axes of the file, too."""

MAP = "map_"
"""Before the name of an attribute: the name of its map."""


class Draw(Protocol):
    """What draws a figure of a result, or gives None where the figure does not apply."""

    def __call__(self, result: Result, *, unrolled: Unrolled | Layout | None = None) -> Picture | None:
        """Draw the figure."""


FIGURES: Registry[Draw] = Registry("figure")


def draw_all(
    result: Result,
    *,
    unrolled: Unrolled | Layout | None = None,
    limits: Mapping[str, Limits] | None = None,
    colour_maps: Mapping[str, str] | None = None,
    only_significant: bool = True,
) -> Iterator[tuple[str, Picture]]:
    """Draw every figure that applies to a result, one after the other.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        See `lay_out`; the work is shared by all figures.
    limits : mapping of str to limits, optional
        Ends of the colour scale of an attribute in stored units, the same for all epochs of a batch.
    colour_maps : mapping of str to str, optional
        Table of colours of an attribute, see `outputs.colour_maps`.
    only_significant : bool
        As for `draw_map`.

    Yields
    ------
    name : str
        As in `FIGURES`, such as map_disp_n.
    picture : Picture
    """
    layout = lay_out(result, unrolled)
    for name in FIGURES:
        if name.startswith(MAP):
            attribute = name.removeprefix(MAP)
            given = (limits or {}).get(attribute)
            table = (colour_maps or {}).get(attribute)
            picture = draw_map(
                result, attribute, unrolled=layout, limits=given, colour_map=table, only_significant=only_significant
            )
        else:
            picture = FIGURES[name](result, unrolled=layout)
        if picture is not None:
            yield name, picture


for _name in MAPPED:
    FIGURES.add(f"{MAP}{_name}", functools.partial(draw_map, name=_name))
FIGURES.add("displacement_arrows", draw_displacement)
FIGURES.add("tilt_arrows", draw_tilt)
FIGURES.add("strain_crosses", draw_strain_crosses)
FIGURES.add("stable_ground", draw_stable_ground)
FIGURES.add("observability", draw_observability)
FIGURES.add("detection_limit", draw_detection_limit)
FIGURES.add("standardised", draw_standardised)
FIGURES.add(f"{MAP}significance", functools.partial(draw_map, name="significance"))
