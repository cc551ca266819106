# SPDX-License-Identifier: MIT
"""The coloured cloud once more, as binary PLY."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.io.ply_write import write_ply
from scanstrain.outputs.colour import Scale, choose_scale, colours
from scanstrain.outputs.notes import beside, significant_or_all
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.words import attribute_of, number
from scanstrain.result import Result


def write_ply_cloud(result: Result, folder: Path, options: OutputOptions) -> Path | None:
    """Write `strain_<attribute>.ply`, or nothing where the options ask for none."""
    if not options.ply:
        return None
    name = options.colour_by
    scale = choose_scale(
        attribute_of(name), result.points[name], limits=options.colour_limits, colour_map=options.colour_map
    )
    return write_coloured_ply(
        folder / f"strain_{name}.ply", result.reference, result.points, scale,
        only_significant=options.only_significant, no_data=options.no_data,
    )  # fmt: skip


def write_coloured_ply(
    target: Path,
    epoch: Epoch,
    values: Mapping[str, NDArray[np.generic]],
    scale: Scale,
    *,
    only_significant: bool = False,
    no_data: float | None = None,
) -> Path:
    """Write the points of an epoch in the colours of a scale, with the attribute, its standard error and the codes.

    Points of the file that were dropped at reading are left out: nothing is known of them.

    Parameters
    ----------
    target : Path
        Ends in .ply.
    epoch : Epoch
        Of n points.
    values : mapping of str to ndarray of shape (n,)
        Results at its points.
    scale : Scale
        Of the attribute that gives the colours.
    only_significant : bool
        Grey out places without a change beyond the false-discovery control.
    no_data : float, optional
        Written in place of NaN.

    Returns
    -------
    Path
        `target`.
    """
    name = scale.attribute.name
    rgb = colours(values[name], scale, significant=significant_or_all(values, only_significant))
    return write_ply(target, epoch, rgb, beside(name, values), no_data=no_data, comments=[_limits(scale)])


def _limits(scale: Scale) -> str:
    """Say what the colours of the head mean; the key beside the file says more."""
    if scale.form == "steps":
        return f"colours: {scale.attribute.name} as a code, see the key beside this file"
    low, high = (number(end * scale.attribute.factor, 4).rstrip("0").rstrip(".") for end in (scale.low, scale.high))
    unit = scale.attribute.person.replace("µε", "microstrain")
    return f"colours: {scale.attribute.name} from {low} to {high} {unit}, see the key beside this file"
