# SPDX-License-Identifier: MIT
"""One colour scale for all comparisons of a batch, so that a colour means the same on every date."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import ScanstrainError
from scanstrain.outputs.colour import Scale, choose_scale, colours
from scanstrain.outputs.folder import finished_only
from scanstrain.outputs.key import write_key
from scanstrain.outputs.manifest import painted_limits, renew_manifest
from scanstrain.outputs.notes import notes_beside, significant_or_all
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.ply import write_coloured_ply
from scanstrain.outputs.words import attribute_of

POOLED = ("signed", "magnitude", "error")
"""Kinds of attributes whose limits come from the data; those of the others are the same everywhere."""
MOST_LOOKED_AT = 200_000
"""Values of one comparison that are pooled: every comparison counts alike, however dense its scan."""


def harmonise(folders: Sequence[Path], options: OutputOptions) -> list[Path]:
    """Colour the clouds of finished comparisons by one scale, and say so in their keys.

    The limits are those that all values together would get: 99 % of them, rounded up. Only clouds whose own limits
    differ are written anew. Nothing is done where the user gave limits, for codes, and for fewer than two results.

    Parameters
    ----------
    folders : sequence of Path
        Result folders of the batch; those without a coloured cloud that can be read are passed over.
    options : OutputOptions
        As the comparisons were written with.

    Returns
    -------
    list of Path
        Clouds that were coloured anew.

    Raises
    ------
    OutputError
        A folder cannot be written to; what stood in it stands there still.
    """
    name = options.colour_by
    attribute = attribute_of(name)
    if options.colour_limits is not None or attribute.kind not in POOLED:
        return []
    own: dict[Path, Scale] = {}
    values = []
    for cloud in filter(None, (_cloud_of(folder, name) for folder in folders)):
        shown = _values(cloud, options)
        if shown is not None:
            own[cloud] = choose_scale(attribute, shown, colour_map=options.colour_map)
            finite = shown[np.isfinite(shown)]
            values.append(finite[:: max(1, -(-len(finite) // MOST_LOOKED_AT))])
    if len(own) < 2:
        return []
    shared = choose_scale(attribute, np.concatenate(values), colour_map=options.colour_map)
    shared = replace(shared, shared=len(own))
    ends, anew = (shared.low, shared.high), []
    for cloud, scale in own.items():
        differs = (painted_limits(cloud.parent) or (scale.low, scale.high)) != ends
        anew += [cloud] if differs else []
        _repaint(cloud, shared, options, anew=differs)
        renew_manifest(cloud.parent, painted=ends)
    return anew


def _cloud_of(folder: Path, name: str) -> Path | None:
    """The coloured cloud of a folder: LAZ, or LAS for the formats that cannot be compressed."""
    found = (folder / f"strain_{name}{suffix}" for suffix in (".laz", ".las"))
    return next((path for path in found if path.is_file()), None)


def _values(cloud: Path, options: OutputOptions) -> NDArray[Any] | None:
    """Values that give the colours; None for a cloud that cannot be coloured anew: damaged, or of another version."""
    from scanstrain import io

    wanted = (options.colour_by, "discovery") if options.only_significant else (options.colour_by,)
    try:
        return io.read_result_cloud(cloud, attributes=wanted)[1][options.colour_by]
    except ScanstrainError:
        return None


def _repaint(cloud: Path, scale: Scale, options: OutputOptions, *, anew: bool) -> None:
    """Write the key, which names the rule, and the clouds if their colours change."""
    from scanstrain import io
    from scanstrain.outputs.cloud import spread

    name, notes = options.colour_by, notes_beside(cloud, options.colour_by)
    epoch, shown = io.read_result_cloud(cloud)
    significant = significant_or_all(shown, options.only_significant)
    with finished_only(cloud.parent) as work:
        write_key(scale, shown[name], work / f"strain_{name}.png", notes=notes, significant=significant)
        if anew:
            values = spread(epoch, shown)
            rgb = colours(values[name], scale, significant=significant_or_all(values, options.only_significant))
            io.write_result_cloud(cloud, work / cloud.name, {}, colour=rgb)
            if options.ply:
                write_coloured_ply(
                    work / f"strain_{name}.ply", epoch, shown, scale,
                    only_significant=options.only_significant, no_data=options.no_data,
                )  # fmt: skip
