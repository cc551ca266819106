# SPDX-License-Identifier: MIT
"""One comparison into a folder: what is there already stays, what a stopped run left is used, the rest is computed."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import TYPE_CHECKING, Any

from scanstrain.capacity import free_space, needed_space, stored_space
from scanstrain.clock import Progress
from scanstrain.errors import InputFileError, OptionError, OutputError, explain
from scanstrain.lock import locked

if TYPE_CHECKING:  # these load NumPy, which must not happen before a worker has set its threads
    from scanstrain.config import CompareConfig
    from scanstrain.stages import StageStore

EpochLabel = tuple[str, str | None]
"""What the user calls an epoch, and its date in ISO form."""

COMPUTING = 0.9
"""Share of the time before anything is written [1]."""


@dataclass(frozen=True, slots=True)
class Written:
    """What became of one comparison.

    Parameters
    ----------
    summary : dict
        The content of `summary.json`.
    up_to_date : bool
        Whether the result was there already, so that nothing was done.
    computed, taken : tuple of str
        Stages that ran, and those whose result an earlier run had left.
    notes : tuple of str
        What a user may want to know besides, in sentences.
    """

    summary: dict[str, Any]
    up_to_date: bool = False
    computed: tuple[str, ...] = ()
    taken: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


def compare_alone(
    reference: Path,
    current: Path,
    config: CompareConfig,
    folder: Path,
    *,
    assume_same_crs: bool = False,
    fresh: bool = False,
    progress: Progress | None = None,
) -> Written:
    """Do the same as `compare_to_folder` and keep other runs off the folder meanwhile.

    Raises
    ------
    OptionError
        The folder cannot serve.
    ScanstrainError
        Another run is at work on the folder, or whatever stopped the comparison.
    """
    check_result_folder(folder, [reference, current])
    with locked(folder):
        return compare_to_folder(
            reference, current, config, folder, assume_same_crs=assume_same_crs, fresh=fresh, progress=progress
        )


def compare_to_folder(
    reference: Path,
    current: Path,
    config: CompareConfig,
    folder: Path,
    *,
    assume_same_crs: bool = False,
    labels: tuple[EpochLabel, EpochLabel] | None = None,
    fresh: bool = False,
    progress: Progress | None = None,
) -> Written:
    """Compare two scans and write everything into a folder.

    Parameters
    ----------
    reference, current : Path
        Scan files.
    config : CompareConfig
        Options of all stages.
    folder : Path
        For the result; whoever calls sees to it that no other run is at work there.
    assume_same_crs : bool
        Compare although the stated coordinate systems differ.
    labels : pair of (str, str or None), optional
        What the user calls the two epochs, each with its date; by default the files name them.
    fresh : bool
        Forget the result and the stages that are there, and compute everything.
    progress : callable, optional
        Told of every step.

    Returns
    -------
    Written

    Raises
    ------
    OptionError
        The folder cannot serve: a file, an input, or a place that cannot be written to.
    ScanstrainError
        Whatever stopped the comparison; the folder then holds the result that it held before.
    """
    check_result_folder(folder, [reference, current])
    from scanstrain.io.count import expected_points
    from scanstrain.outputs.folder import recover
    from scanstrain.outputs.manifest import Standing, standing
    from scanstrain.stages.places import forget, gather
    from scanstrain.tiles import takes_tiles

    if progress:
        progress("check", 0.0)
    names = labels or ((reference.stem, None), (current.stem, None))
    request = _request(reference, current, names, config, assume_same_crs=assume_same_crs)
    recover(folder)
    gather(folder)
    found, detail = standing(folder, request)
    if found is Standing.UP_TO_DATE and not fresh:
        return Written(_summary(folder), up_to_date=True)
    notes = [f"{folder}: the result there was {found.value} ({detail}); it is made anew."] if detail else []
    if fresh:
        forget(folder)
    counts = [expected_points(scan) for scan in (reference, current)]
    check_space(folder, counts[:1], tiled=max(counts) if takes_tiles(config.neighbourhood.tiles, max(counts)) else 0)
    try:
        store = _compute(reference, current, config, folder, request, labels, progress)
    except InputFileError:
        forget(folder)  # a scan that changed on the way may have left stages under the wrong key
        raise
    if config.output.keep_stages:
        gather(folder)
    else:
        forget(folder)
    return Written(_summary(folder), False, tuple(store.computed), tuple(store.taken), (*notes, *store.notes))


def _compute(
    reference: Path,
    current: Path,
    config: CompareConfig,
    folder: Path,
    request: Mapping[str, Any],
    labels: tuple[EpochLabel, EpochLabel] | None,
    progress: Progress | None,
) -> StageStore:
    """Compute what is not kept, and write everything."""
    from scanstrain.io.steady import unchanged
    from scanstrain.outputs import write_result
    from scanstrain.pipeline import compare_files
    from scanstrain.stages import StageStore, stage_keys
    from scanstrain.stages.places import stage_folder

    # The names of the epochs stand in sentences that the stages hand on.
    read = {**request["inputs"], "labels": json.dumps([name for name, _ in request["labels"]])}
    store = StageStore(stage_folder(folder), stage_keys(config, read))
    assume, options = request["assume_same_crs"], config.output
    with unchanged([reference, current]):
        result = compare_files(
            reference,
            current,
            config,
            assume_same_crs=assume,
            labels=labels,
            progress=_part(progress),
            keep=store,
            stores=partial(_stores_beside, folder),
        )
        if progress:
            progress("write", COMPUTING)
        try:
            write_result(
                result,
                folder,
                colour_by=options.colour_by,
                colour_limits=options.colour_limits,
                no_data=options.no_data_number,
                only_significant=options.only_significant,
                report=options.report,
                ply=options.ply,
                colour_map=options.colour_map,
                request=request,
            )
        finally:
            result.close()
    return store


def _stores_beside(folder: Path) -> TemporaryDirectory[str]:
    """Make a folder for work in tiles on the disk of the result; the next run removes what a killed one leaves."""
    from scanstrain.outputs.folder import PARTIAL

    folder.parent.mkdir(parents=True, exist_ok=True)
    return TemporaryDirectory(prefix=f".{folder.name}.", suffix=PARTIAL, dir=folder.parent)


def _part(progress: Progress | None) -> Progress | None:
    """Give a reporter for the computation, which is not the whole."""
    if progress is None:
        return None

    def report(step: str, share: float) -> None:
        if share < 1:
            progress(step, COMPUTING * share)

    return report


def check_result_folder(folder: Path, inputs: Sequence[Path]) -> None:
    """Refuse, before anything is computed, a folder into which the result cannot go.

    Raises
    ------
    OptionError
        With what is wrong with it.
    """
    from scanstrain.outputs.folder import check_folder

    try:
        check_folder(folder, inputs=inputs)
    except OutputError as error:
        raise OptionError(str(error)) from None


def _request(
    reference: Path,
    current: Path,
    names: Sequence[EpochLabel],
    config: CompareConfig,
    *,
    assume_same_crs: bool,
) -> dict[str, Any]:
    """Put together what a result depends on: contents of files, wherever they lie, and options."""
    from scanstrain.io.steady import hash_files

    files = {"reference": reference, "current": current}
    if config.registration.start_file is not None:
        files["start_file"] = config.registration.start_file
    options = config.model_dump(mode="json")
    options["registration"].pop("start_file")
    options["output"].pop("keep_stages")
    labels = [list(name) for name in names]
    return {"inputs": hash_files(files), "labels": labels, "options": options, "assume_same_crs": assume_same_crs}


def _summary(folder: Path) -> dict[str, Any]:
    summary: dict[str, Any] = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    return summary


def check_space(folder: Path, points: Sequence[int], *, tiled: int = 0) -> None:
    """Refuse a disk without room for some results.

    Parameters
    ----------
    folder : Path
        Where they go.
    points : sequence of int
        Of each reference scan.
    tiled : int
        Points of the larger scan if one comparison is worked on in tiles.

    Raises
    ------
    OutputError
        With what is needed and what is free.
    """
    needed, free = sum(map(needed_space, points)) + stored_space(tiled), free_space(folder)
    if needed > free:
        required, got = f"about {needed / 1e9:.2g} GB of free space", f"{free / 1e9:.2g} GB"
        raise OutputError(explain(str(folder), required, got, "free some space or choose another disk"))
