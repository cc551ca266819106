# SPDX-License-Identifier: MIT
"""Figures of a result: maps, arrows, sections and series, each with its words."""

from scanstrain.outputs.figures.catalogue import FIGURES, draw_all
from scanstrain.outputs.figures.layout import Layout, lay_flat, lay_out
from scanstrain.outputs.figures.maps import draw_map
from scanstrain.outputs.figures.picture import Picture
from scanstrain.outputs.figures.rates import draw_rates
from scanstrain.outputs.figures.sections import draw_section
from scanstrain.outputs.figures.series import draw_series

__all__ = [
    "FIGURES",
    "Layout",
    "Picture",
    "draw_all",
    "draw_map",
    "draw_rates",
    "draw_section",
    "draw_series",
    "lay_flat",
    "lay_out",
]
