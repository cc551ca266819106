# SPDX-License-Identifier: MIT
"""The clouds of a result: all attributes in one file, and one attribute in colour in another."""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import Attribute
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, OutputError, explain
from scanstrain.mapped import release, slices
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.colour import Limits, choose_scale, colours
from scanstrain.outputs.folder import check_folder, finished_only, is_ours
from scanstrain.outputs.key import write_key
from scanstrain.outputs.notes import beside, notes_beside, significant_or_all
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.ply import write_coloured_ply
from scanstrain.outputs.words import attribute_of
from scanstrain.result import Result


def write_strain_cloud(result: Result, folder: Path, options: OutputOptions) -> Path:
    """Write `strain.laz`: the reference scan with every attribute."""
    from scanstrain import io

    source = Path(result.reference.provenance.path)
    values = spread(result.reference, result.points)
    return io.write_result_cloud(source, folder / "strain.laz", values, no_data=options.no_data)


def write_coloured_cloud(result: Result, folder: Path, options: OutputOptions) -> Path:
    """Write `strain_<attribute>.laz`: the reference scan with that attribute in colour.

    Of the values it holds the attribute itself, its standard error and the codes; all others are in `strain.laz`.
    """
    from scanstrain import io

    name = options.colour_by
    values = spread(result.reference, beside(name, result.points))
    scale = choose_scale(
        attribute_of(name), result.points[name], limits=options.colour_limits, colour_map=options.colour_map
    )
    rgb = np.empty((len(values[name]), 3), np.uint16)
    for rows in slices(len(rgb)):
        part = {each: row[rows] for each, row in values.items()}
        rgb[rows] = colours(part[name], scale, significant=significant_or_all(part, options.only_significant))
    release(*values.values())
    source, target = Path(result.reference.provenance.path), folder / f"strain_{name}.laz"
    return io.write_result_cloud(source, target, values, colour=rgb, no_data=options.no_data)


def recolour(
    cloud: str | os.PathLike[str],
    attribute: str,
    *,
    limits: Limits | None = None,
    colour_map: str | None = None,
    only_significant: bool = False,
    ply: bool = True,
    out: str | os.PathLike[str] | None = None,
) -> list[Path]:
    """Write a copy of a result cloud with another attribute in colour, and its key.

    Parameters
    ----------
    cloud : path
        A cloud that holds attributes of a result, such as `strain.laz`; it is not changed.
    attribute : str
        Name of the attribute.
    limits : float or (float, float), optional
        Ends of the colour scale in stored units, see `outputs.colour.choose_scale`.
    colour_map : str, optional
        Table of colours, see `outputs.colour_maps`.
    only_significant : bool
        Grey out places without a change beyond the false-discovery control.
    ply : bool
        Write the cloud as binary PLY too.
    out : path, optional
        Folder for the files, by default the one of the cloud.

    Returns
    -------
    list of Path
        `strain_<attribute>.laz`, `.ply` and `.png`, after the name of the cloud.

    Raises
    ------
    OptionError
        The attribute does not exist or is not in this cloud; the nearest name is suggested.
    OutputError
        The folder cannot be written to, or the cloud itself would be overwritten.
    """
    from scanstrain import io

    wanted, source = attribute_of(attribute), Path(cloud)
    folder = check_folder(source.parent if out is None else out)
    stem = _free_stem(source, folder, wanted)
    epoch, shown = io.read_result_cloud(source)
    if attribute not in shown:
        raise _not_in(source, attribute, list(shown))
    scale = choose_scale(wanted, shown[attribute], limits=limits, colour_map=colour_map)
    significant = significant_or_all(shown, only_significant)
    notes = notes_beside(source, attribute)
    values = spread(epoch, shown)
    rgb = colours(values[attribute], scale, significant=significant_or_all(values, only_significant))
    with finished_only(folder) as work:
        # without values the cloud keeps all it has, and only its colours change
        written = io.write_result_cloud(source, work / f"{stem}.laz", {}, colour=rgb)
        made = [written]
        if ply:
            target = work / f"{stem}.ply"
            made.append(write_coloured_ply(target, epoch, shown, scale, only_significant=only_significant))
        made.append(write_key(scale, shown[attribute], work / f"{stem}.png", notes=notes, significant=significant))
    return [folder / path.name for path in made]


def _not_in(source: Path, attribute: str, held: list[str]) -> OptionError:
    """Say that a cloud lacks an attribute that there is: it was coloured by another one, or is of another version."""
    beside = source.with_name("strain.laz")
    remedy = "compare again if it was made by another version"
    if beside != source and beside.is_file():
        remedy = "colour strain.laz in the same folder"
    return OptionError(explain(source.name, f"a cloud with the attribute {attribute}", ", ".join(held), remedy))


def spread(epoch: Epoch, values: Mapping[str, NDArray[np.generic]]) -> dict[str, NDArray[np.generic]]:
    """Spread values of the epoch over all points of its file: what was dropped at reading has no data."""
    from scanstrain import io

    return io.expand_to_file(epoch, values, dropped_status=int(Status.OUTSIDE))


def _free_stem(source: Path, folder: Path, attribute: Attribute) -> str:
    """Name the recoloured cloud after its source, never as its source."""
    stem = f"{'strain' if is_ours(source.name) else source.stem}_{attribute.name}"
    if source.stem == stem and source.parent.resolve() == folder.resolve():
        raise OutputError(
            explain(source.name, "a cloud other than the one to be written", "the same file",
                    "colour strain.laz instead, or give another output folder")
        )  # fmt: skip
    return stem
