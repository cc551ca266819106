# SPDX-License-Identifier: MIT
"""Write all outputs of a result into one folder, together or not at all."""

from __future__ import annotations

import os
from collections.abc import Callable, Mapping
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path
from typing import Any

from scanstrain.outputs.cloud import write_coloured_cloud, write_strain_cloud
from scanstrain.outputs.colour import Limits, choose_scale
from scanstrain.outputs.folder import check_folder, finished_only, is_ours
from scanstrain.outputs.joint_table import write_joint_table
from scanstrain.outputs.key import write_colour_key
from scanstrain.outputs.manifest import write_manifest
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.ply import write_ply_cloud
from scanstrain.outputs.registered import write_registered
from scanstrain.outputs.report import write_report
from scanstrain.outputs.section_table import write_section_table
from scanstrain.outputs.summary import write_summary
from scanstrain.outputs.table import write_gauge_table
from scanstrain.outputs.wall_table import write_bulge_table, write_wall_table
from scanstrain.outputs.words import attribute_of
from scanstrain.registry import Registry
from scanstrain.result import Result

Writer = Callable[[Result, Path, OutputOptions], Path | None]
"""Writes one file into a folder and returns it, or None where the result has nothing for it."""

BESIDE = ("strain cloud", "coloured cloud")
"""Written one after the other in a thread beside the rest: the compressor lets go of the interpreter, which meanwhile
draws the figures of the report."""

LAST = "manifest"
"""Names all other files, so it is written when they are there."""

OUTPUTS: Registry[Writer] = Registry("output")
OUTPUTS.add("strain cloud", write_strain_cloud)
OUTPUTS.add("coloured cloud", write_coloured_cloud)
OUTPUTS.add("coloured PLY", write_ply_cloud)
OUTPUTS.add("colour key", write_colour_key)
OUTPUTS.add("gauge table", write_gauge_table)
OUTPUTS.add("section table", write_section_table)
OUTPUTS.add("wall table", write_wall_table)
OUTPUTS.add("bulge table", write_bulge_table)
OUTPUTS.add("joint table", write_joint_table)
OUTPUTS.add("registered", write_registered)
OUTPUTS.add("summary", write_summary)
OUTPUTS.add("report", write_report)
OUTPUTS.add("manifest", write_manifest)


def write_result(
    result: Result,
    folder: str | os.PathLike[str],
    *,
    colour_by: str = "disp_n",
    colour_limits: Limits | None = None,
    no_data: float | None = None,
    only_significant: bool = False,
    report: bool = True,
    ply: bool = True,
    colour_map: str | None = None,
    request: Mapping[str, Any] | None = None,
) -> list[Path]:
    """Write a result into a folder.

    Parameters
    ----------
    result : Result
        A finished comparison.
    folder : path
        New or existing. Of an existing folder, files that an earlier result left there are replaced once everything
        is written; other files stay.
    colour_by : str
        Attribute of the coloured cloud.
    colour_limits : float or (float, float), optional
        Ends of the colour scale in stored units, see `outputs.colour.choose_scale`.
    no_data : float, optional
        Finite value for no-data in the clouds, NaN by default.
    only_significant : bool
        Grey out places without a change beyond the false-discovery control.
    report : bool
        Write `report.html`.
    ply : bool
        Write the coloured cloud as binary PLY too.
    colour_map : str, optional
        Table of colours, see `outputs.colour_maps`.
    request : mapping, optional
        What was asked for, as plain JSON; goes into `manifest.json`, by which a second run knows it again.

    Returns
    -------
    list of Path
        The files, in the order of the registry.

    Raises
    ------
    OptionError
        An unknown attribute, with the nearest name, or colour limits that do not fit it.
    OutputError
        The folder is a file, holds an input in the place of an output, cannot be written to, or the disk is full.
        What stood there before stands there still.
    """
    options = OutputOptions(colour_by, colour_limits, no_data, only_significant, report, ply, colour_map, request)
    # limits that do not fit are refused before anything is written
    choose_scale(attribute_of(colour_by), result.points[colour_by][:0], limits=colour_limits, colour_map=colour_map)
    sources = [epoch.provenance.path for epoch in (result.reference, result.current)]
    target = check_folder(folder, inputs=[source for source in sources if source])
    with finished_only(target, retire=is_ours) as work:
        written = _write_all(result, work, options)
    return [target / path.name for path in written if path is not None]


def _write_all(result: Result, work: Path, options: OutputOptions) -> list[Path | None]:
    """Run every writer in the order of the registry, those in `BESIDE` in a thread of their own, and `LAST` last."""
    with ThreadPoolExecutor(max_workers=1) as thread:
        beside = {name: thread.submit(OUTPUTS[name], result, work, options) for name in OUTPUTS if name in BESIDE}
        others = [name for name in OUTPUTS if name not in beside and name != LAST]
        written = {name: OUTPUTS[name](result, work, options) for name in others}
        written |= {name: each.result() for name, each in beside.items()}
    written[LAST] = OUTPUTS[LAST](result, work, options)
    return [written[name] for name in OUTPUTS]
