# SPDX-License-Identifier: MIT
"""report.html: everything that a person wants to see of one comparison, in one file."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

from scanstrain.outputs.colour import Limits
from scanstrain.outputs.figures import Layout, draw_all, lay_out
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.report.ground import ground_tables
from scanstrain.outputs.report.head import head_of
from scanstrain.outputs.report.images import Shown, show, show_dots
from scanstrain.outputs.report.joints import joint_tables
from scanstrain.outputs.report.page import render
from scanstrain.outputs.report.parts import budget_table, measure_table, trigger_table, zone_table
from scanstrain.outputs.report.places import places_of
from scanstrain.outputs.report.quantities import quality_tables, quantities, quantity_table
from scanstrain.outputs.report.record import record_tables
from scanstrain.outputs.report.still import still
from scanstrain.outputs.report.tunnel import section_pictures, section_tables
from scanstrain.outputs.report.wall import wall_tables
from scanstrain.outputs.report3d import scene_data, scene_html
from scanstrain.outputs.summary import summary as summarise
from scanstrain.outputs.words import TITLES
from scanstrain.result import Result

NAME = "report.html"
MAIN = "map_disp_n"
"""Figure on the first screen."""
GROUND = ("stable_ground",)
QUALITY = ("observability", "detection_limit", "standardised", "map_significance")
DIRECTIONS = ("displacement_arrows", "tilt_arrows", "strain_crosses")
"""Figures by the part of the page to which they belong; the other ones are maps of quantities."""


def write_report(result: Result, folder: Path, options: OutputOptions) -> Path | None:
    """Write `report.html`, which opens anywhere and loads nothing.

    Parameters
    ----------
    result : Result
        A finished comparison.
    folder : Path
        Existing folder.
    options : OutputOptions
        Its colour limits hold for the figure of the attribute that they are for.

    Returns
    -------
    Path or None
        None where the options ask for no report.
    """
    if not options.report:
        return None
    target = folder / NAME
    target.write_text(report_page(result, options), encoding="utf-8")
    return target


def report_page(result: Result, options: OutputOptions) -> str:
    """Make the page of a result as HTML text."""
    summary = summarise(result, no_data=options.no_data)
    layout = layout_of(result)
    limits = {} if options.colour_limits is None else {options.colour_by: options.colour_limits}
    maps_of = {} if options.colour_map is None else {options.colour_by: options.colour_map}
    drawn = draw_all(result, unrolled=layout, limits=limits, colour_maps=maps_of)
    figures = {name: show(name, picture) for name, picture in drawn}
    places = places_of(result, layout)
    zones = trigger_table(summary), zone_table(summary)
    maps = [figure for name, figure in figures.items() if name not in (*GROUND, *QUALITY, *DIRECTIONS)]
    return render(
        "report.html",
        head=head_of(summary, places),
        places=places,
        main=figures.get(MAIN),
        ground={"tables": ground_tables(summary), "figures": _some(figures, GROUND)},
        quantity_table=quantity_table(summary),
        quantities=quantities(summary, maps, elsewhere=MAIN),
        directions=_some(figures, DIRECTIONS),
        sections={
            "tables": [*section_tables(summary), *wall_tables(summary)],
            "figures": [show(name, picture) for name, picture in section_pictures(result)],
            "title": "The wall" if summary.get("wall") else "Sections",
        },
        joints=joint_tables(summary),
        parts_tables=[each for each in (*zones, budget_table(summary)) if each],
        parts_title="Zones and limits" if any(zones) else "Even strain",
        view=_view(result, limits, maps_of),
        quality={"tables": quality_tables(summary), "figures": _some(figures, QUALITY)},
        measure=summary["strain_measure"],
        measure_table=measure_table(summary),
        gauges=summary["gauges"],
        warnings=summary["warnings"],
        cautions=summary["cautions"],
        record=record_tables(summary),
    )


def layout_of(result: Result) -> Layout:
    """Lay the gauges flat, by the axis of the tunnel where there is one."""
    axis = result.axis
    return lay_out(result, None if axis is None else axis.unroll(result.strain.position))


def _some(figures: dict[str, Shown], names: tuple[str, ...]) -> list[Shown]:
    return [figures[name] for name in names if name in figures]


def _view(result: Result, limits: dict[str, Limits], colour_maps: dict[str, str]) -> str:
    """Make the 3-D view with its picture, grey where nothing is significant as the maps are."""
    chosen: dict[str, Any] = dict(_chainage(result))
    scene = scene_data(result, limits=limits, colour_maps=colour_maps, only_significant=True, **chosen)
    title = TITLES[scene.layers[0].scale.attribute.name][0]
    alt = f"The cloud in space, coloured by {title.lower()}; grey where nothing significant changed."
    picture = show_dots("view", still(result, scene, only_significant=True), title=title, alt=alt, caption="")
    return scene_html(scene, element_id="view", picture=picture.source, alt=alt)


def _chainage(result: Result) -> Iterator[tuple[str, Any]]:
    if result.axis is not None and "chainage" in result.points:
        yield "along", result.points["chainage"]
