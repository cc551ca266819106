# SPDX-License-Identifier: MIT
"""The method in one screen: two epochs in, registration, local affine fit, strain, and back to the points."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

from scanstrain.clock import Clock, Progress
from scanstrain.colours import with_colour
from scanstrain.config import CompareConfig, config_from_options
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.result import Result
from scanstrain.spread import values_at
from scanstrain.steps import Material, aligned, at, fitted, registered, strained
from scanstrain.tiles import thinned

EpochLabel = tuple[str, str | None]
Keep = Callable[[str, Callable[[], Any]], Any]
"""Given the name of a stage and what computes it, returns its result: computed, or kept from an earlier run."""


Stores = Callable[[], "TemporaryDirectory[str]"]
"""Makes a folder that goes with the result, for points and values that do not fit into memory."""


def temporary_stores() -> TemporaryDirectory[str]:
    """Make a folder where the system keeps temporary files."""
    return TemporaryDirectory(prefix="scanstrain-tiles-")


def compute_always(_stage: str, compute: Callable[[], Any]) -> Any:
    """Keep nothing: run the stage."""
    return compute()


def compare(reference: str | Path, current: str | Path, **options: Any) -> Result:
    """Compare two scan files; nothing is written.

    Parameters
    ----------
    reference, current : path
        The earlier and the later scan.
    **options
        Any option of any stage by its name (`scanstrain config new` lists them), for example `gauge_length=0.8`.

    Returns
    -------
    Result

    Raises
    ------
    OptionError, InputFileError, OverlapError, RegistrationError, FitError
        With what was required, what came and what to do.
    """
    assume = bool(options.pop("assume_same_crs", False))
    return compare_files(Path(reference), Path(current), config_from_options(options), assume_same_crs=assume)


def compare_files(
    reference: Path,
    current: Path,
    config: CompareConfig,
    *,
    assume_same_crs: bool = False,
    labels: tuple[EpochLabel, EpochLabel] | None = None,
    progress: Progress | None = None,
    keep: Keep = compute_always,
    stores: Stores = temporary_stores,
) -> Result:
    """Read two scan files and compare them; arguments as of `compare` and `compare_epochs`.

    `labels` are what the user calls the two epochs, each with its date; by default the files name them. `keep` may
    hand back the result of a stage that an earlier run left; by default nothing is kept. `stores` makes the folder for
    work in tiles; by default it lies where the system keeps temporary files.
    """
    from scanstrain.io import check_same_frame, read_scan

    clock = Clock(progress)
    if in_tiles(reference, current, config):
        return _compare_tiled(
            reference, current, config, clock, keep, stores, assume_same_crs=assume_same_crs, labels=labels
        )
    with clock.stage("read", 0.0):
        first = read_scan(reference)
        second = read_scan(current, origin=first.origin)
        notices = check_same_frame(first, second, assume_same_crs=assume_same_crs)
    if labels:
        first, second = _named(first, *labels[0]), _named(second, *labels[1])
    return _compare(first, second, config, clock, notices, keep)


def in_tiles(reference: Path, current: Path, config: CompareConfig) -> bool:
    """Whether two files are worked on in tiles.

    Raises
    ------
    OptionError
        Tiles are asked for, and a file is no LAS or LAZ file.
    """
    from scanstrain.io.las import SUFFIXES
    from scanstrain.io.las_mapped import count_points
    from scanstrain.tiles import takes_tiles

    asked = config.neighbourhood.tiles
    other = [path for path in (reference, current) if path.suffix.lower() not in SUFFIXES]
    if asked is True and other:
        got = other[0].name
        raise OptionError(explain("tiles", "LAS or LAZ files", got, "export the scans as LAZ, or leave tiles out"))
    if asked is False or other:
        return False
    return takes_tiles(asked, max(count_points(path) for path in (reference, current)))


def _compare_tiled(
    reference: Path,
    current: Path,
    config: CompareConfig,
    clock: Clock,
    keep: Keep,
    stores: Stores,
    *,
    assume_same_crs: bool,
    labels: tuple[EpochLabel, EpochLabel] | None,
) -> Result:
    """Compare with points, tiles and values on disk, in a folder that goes with the result."""
    from scanstrain.io import check_same_frame
    from scanstrain.io.las_mapped import read_mapped

    scratch = stores()
    try:
        folder = Path(scratch.name)
        with clock.stage("read", 0.0):
            first = read_mapped(reference, folder / "reference")
            second = read_mapped(current, folder / "current", origin=first.origin)
            notices = check_same_frame(first, second, assume_same_crs=assume_same_crs)
        if labels:
            first, second = _named(first, *labels[0]), _named(second, *labels[1])
        return replace(_compare(first, second, config, clock, notices, keep, folder), scratch=scratch)
    except BaseException:
        scratch.cleanup()
        raise


def compare_epochs(
    reference: Epoch, current: Epoch, config: CompareConfig, *, progress: Progress | None = None
) -> Result:
    """Compare two epochs in memory.

    Parameters
    ----------
    reference, current : Epoch
        The earlier and the later epoch; different origins are brought together.
    config : CompareConfig
        Options of all stages.
    progress : callable, optional
        Called with the name of a stage and the share of the whole that is done.

    Returns
    -------
    Result
    """
    return _compare(reference, current.shifted(reference.origin), config, Clock(progress), (), compute_always)


def _compare(
    reference: Epoch,
    current: Epoch,
    config: CompareConfig,
    clock: Clock,
    notices: tuple[str, ...],
    keep: Keep,
    folder: Path | None = None,
) -> Result:
    if folder is None and config.neighbourhood.use_intensity and config.neighbourhood.use_colour:
        reference, current, said = with_colour(reference, current)
        notices = (*notices, *said)
    # What concerns the object as a whole is judged on points drawn from a large scan, in tiles or not.
    few = thinned(reference), thinned(current)
    found = keep("registration", lambda: registered(*few, config, clock))
    shape, registration, seams, doubts, moved_setups = found
    ours, theirs = (at(each, points) for each, points in zip(few, moved_setups, strict=True))
    reference, current = aligned(reference, few[0], ours), aligned(current, few[1], theirs)
    material = Material(reference, current, ours, registration.T_ref_cur, config, folder)
    affine, joints = keep("field", lambda: fitted(material, registration, shape, config, clock))
    affine, calibration, more_doubts, strain, zones, bodies, sections, wall = keep(
        "strain", lambda: strained(material, affine, registration, shape, config, clock)
    )
    with clock.stage("points", 0.85):
        place = None if folder is None else folder / "values"
        points = values_at(
            strain, reference, shape, registration, config, place, lambda s: clock.say("points", 0.85 + 0.1 * s)
        )
    clock.say("done", 1.0)
    targets = registration.targets.warnings if registration.targets else ()
    before = (*notices, *shape.warnings, *doubts, *targets, *registration.warnings)
    said = (*before, *affine.warnings, *more_doubts, *strain.warnings)
    return Result(
        reference,
        current,
        registration,
        affine,
        calibration,
        strain,
        points,
        config,
        clock.seconds,
        tuple(dict.fromkeys(said)),
        bodies=bodies,
        zones=zones,
        seams=seams,
        axis=shape.axis,
        sections=sections,
        wall=wall,
        joints=joints,
    )


def _named(epoch: Epoch, label: str, date: str | None) -> Epoch:
    """Return the epoch under the user's label and date."""
    provenance = replace(epoch.provenance, date=date or epoch.provenance.date)
    return replace(epoch, label=label, provenance=provenance)
