# SPDX-License-Identifier: MIT
"""The method in one screen: two epochs in, registration, local affine fit, strain, and back to the points."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.config import CompareConfig, config_from_options
from scanstrain.datum import check_setups, datum_options
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.parts import bodies_of, gauges_of_zones
from scanstrain.result import Result
from scanstrain.shape import Shape, places_on, sections_of, shape_of, wall_movement
from scanstrain.sources import auto_gauge_length, number_or_none, points_for_sections, source_of
from scanstrain.spread import values_at
from scanstrain.tiles import THINNED, thinned, thinning_of

if TYPE_CHECKING:  # the stages compile when they are loaded
    from scanstrain.neighbourhood.joint_jumps import JointJumps
    from scanstrain.neighbourhood.joint_lines import Joint
    from scanstrain.neighbourhood.piece import Source
    from scanstrain.neighbourhood.result import AffineField
    from scanstrain.registration.result import Registration
    from scanstrain.strain.calibration import Calibration
    from scanstrain.strain.result import StrainField

FloatArray = NDArray[np.float64]
Progress = Callable[[str, float], None]
EpochLabel = tuple[str, str | None]


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
) -> Result:
    """Read two scan files and compare them; arguments as of `compare` and `compare_epochs`.

    `labels` are what the user calls the two epochs, each with its date; by default the files name them.
    """
    from scanstrain.io import check_same_frame, read_scan

    clock = Clock(progress)
    if in_tiles(reference, current, config):
        return _compare_tiled(reference, current, config, clock, assume_same_crs=assume_same_crs, labels=labels)
    with clock.stage("read", 0.0):
        first = read_scan(reference)
        second = read_scan(current, origin=first.origin)
        notices = check_same_frame(first, second, assume_same_crs=assume_same_crs)
    if labels:
        first, second = _named(first, *labels[0]), _named(second, *labels[1])
    return _compare(first, second, config, clock, notices)


def in_tiles(reference: Path, current: Path, config: CompareConfig) -> bool:
    """Whether two files are worked on in tiles.

    Raises
    ------
    OptionError
        Tiles are asked for, and a file is no LAS or LAZ file.
    """
    from scanstrain.io.las import SUFFIXES
    from scanstrain.io.las_mapped import count_points
    from scanstrain.tiles import TILED_FROM

    asked = config.neighbourhood.tiles
    other = [path for path in (reference, current) if path.suffix.lower() not in SUFFIXES]
    if asked is True and other:
        got = other[0].name
        raise OptionError(explain("tiles", "LAS or LAZ files", got, "export the scans as LAZ, or leave tiles out"))
    if asked is False or other:
        return False
    return asked is True or max(count_points(path) for path in (reference, current)) >= TILED_FROM


def _compare_tiled(
    reference: Path,
    current: Path,
    config: CompareConfig,
    clock: Clock,
    *,
    assume_same_crs: bool,
    labels: tuple[EpochLabel, EpochLabel] | None,
) -> Result:
    """Compare with points, tiles and values on disk, in a folder that goes with the result."""
    from tempfile import TemporaryDirectory

    from scanstrain.io import check_same_frame
    from scanstrain.io.las_mapped import read_mapped

    scratch = TemporaryDirectory(prefix="scanstrain-tiles-")
    try:
        folder = Path(scratch.name)
        with clock.stage("read", 0.0):
            first = read_mapped(reference, folder / "reference")
            second = read_mapped(current, folder / "current", origin=first.origin)
            notices = check_same_frame(first, second, assume_same_crs=assume_same_crs)
        if labels:
            first, second = _named(first, *labels[0]), _named(second, *labels[1])
        return replace(_compare(first, second, config, clock, notices, folder), scratch=scratch)
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
    return _compare(reference, current.shifted(reference.origin), config, Clock(progress), ())


def _compare(
    reference: Epoch,
    current: Epoch,
    config: CompareConfig,
    clock: Clock,
    notices: tuple[str, ...],
    folder: Path | None = None,
) -> Result:
    from scanstrain.registration import register
    from scanstrain.strain import calibrate

    align = config.registration.align_setups
    with clock.stage("set-ups", 0.06):
        # What concerns the object as a whole is judged on points drawn from a large scan, in tiles or not.
        few = thinned(reference), thinned(current)
        (ours, own_seams, own_doubts), (theirs, seams, more_doubts) = (check_setups(each, align=align) for each in few)
        reference, current = _aligned(reference, few[0], ours), _aligned(current, few[1], theirs)
        thinning = thinning_of(len(reference))
    with clock.stage("structure", 0.08):
        shape = shape_of(ours, config)
        unrolled = shape.unroll(ours.points)
    with clock.stage("registration", 0.1):
        registration = register(ours, theirs, **datum_options(ours, config, unrolled))
        source = source_of(reference, current, registration.T_ref_cur, ours, config, folder)
        spacing = source.spacing()
    with clock.stage("neighbourhood", 0.3):
        affine = _fit(source, spacing, reference.origin, shape, config, clock)
        joints = _joints(source, spacing, reference.origin, affine, config)
    with clock.stage("strain", 0.8):
        affine, calibration, doubts = calibrate(affine, registration, ours.points, thinning=thinning)
        strain = _strain(affine, registration, calibration, shape, config)
        zones = gauges_of_zones(affine, ours, config, unrolled, thinning=thinning)
        bodies = bodies_of(affine, registration, zones)
    with clock.stage("sections", 0.83):
        both, thickness = points_for_sections(source, shape, config, spacing)
        sections = sections_of(shape, both, registration, config, thickness)
        wall = wall_movement(shape, affine, registration, config)
    with clock.stage("points", 0.85):
        place = None if folder is None else folder / "values"
        points = values_at(
            strain, reference, shape, registration, config, place, lambda s: clock.say("points", 0.85 + 0.1 * s)
        )
    clock.say("done", 1.0)
    targets = registration.targets.warnings if registration.targets else ()
    said = (
        *notices,
        *shape.warnings,
        *own_doubts,
        *more_doubts,
        *targets,
        *registration.warnings,
        *affine.warnings,
        *doubts,
    )
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
        tuple(dict.fromkeys((*said, *strain.warnings))),
        bodies=bodies,
        zones=zones,
        seams={"reference": own_seams, "current": seams},
        axis=shape.axis,
        sections=sections,
        wall=wall,
        joints=joints,
    )


def _aligned(epoch: Epoch, few: Epoch, aligned: Epoch) -> Epoch:
    """Take over what aligning set-ups did to an epoch, unless it was done to points drawn from it only."""
    if aligned is few:
        return epoch
    if few is epoch:
        return aligned
    required = f"at most {THINNED} points and no tiles, to move set-ups"
    got = f"{len(epoch)} points in {epoch.label}"
    raise OptionError(explain("align_setups", required, got, "align the set-ups before the comparison"))


def _fit(
    source: Source, spacing: float, origin: FloatArray, shape: Shape, config: CompareConfig, clock: Clock
) -> AffineField:
    """Run the neighbourhood stage with its options."""
    from scanstrain.neighbourhood.affine import fit_pieces, setting_for

    options, free_side = config.neighbourhood, config.strain.free_side
    setting = setting_for(
        source,
        gauge_length=number_or_none(options.gauge_length) or auto_gauge_length(spacing, source.extent()),
        gauge_spacing=number_or_none(options.gauge_spacing),
        resolution=number_or_none(options.resolution),
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=number_or_none(options.required_displacement_sd),
        required_strain_sd=number_or_none(options.required_strain_sd),
        spacing=spacing,
    )
    return fit_pieces(
        source,
        setting,
        free_side=None if free_side is None else np.array(free_side) - origin,
        axis=shape.guide(),
        joints=_joint_lines(origin, config),
        progress=lambda phrase, share: clock.say(f"neighbourhood, {phrase}", 0.3 + 0.5 * share),
    )


def _joint_lines(origin: FloatArray, config: CompareConfig) -> tuple[Joint, ...]:
    from scanstrain.neighbourhood.joint_lines import Joint

    at = origin.tolist()
    return tuple(Joint(each.name, np.array(each.local_line(at)), each.width) for each in config.joint)


def _joints(
    source: Source, spacing: float, origin: FloatArray, affine: AffineField, config: CompareConfig
) -> tuple[JointJumps, ...]:
    """Measure what the joints did that the user named."""
    if not config.joint:
        return ()
    from scanstrain.neighbourhood.joints import NEAR, measure_joints

    options, lines = config.neighbourhood, _joint_lines(origin, config)
    return measure_joints(
        *source.near([line.line for line in lines], NEAR * affine.gauge_length / 2),
        affine,
        lines,
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=number_or_none(options.required_displacement_sd),
        required_strain_sd=number_or_none(options.required_strain_sd),
        spacing=spacing,
    )


def _strain(
    affine: AffineField, registration: Registration, calibration: Calibration, shape: Shape, config: CompareConfig
) -> StrainField:
    """Run the strain stage with its options."""
    from scanstrain.strain import compute_strain

    options = config.strain
    return compute_strain(
        affine,
        registration=registration,
        measure=options.measure,
        structure=options.structure,
        thickness=options.thickness,
        axis=shape.directions(affine.position),
        false_discovery_rate=options.false_discovery_rate,
        known={"stable": calibration.steady, **places_on(shape.unroll(affine.position))},
    )


def _named(epoch: Epoch, label: str, date: str | None) -> Epoch:
    """Return the epoch under the user's label and date."""
    provenance = replace(epoch.provenance, date=date or epoch.provenance.date)
    return replace(epoch, label=label, provenance=provenance)


@dataclass
class Clock:
    """Seconds per stage, and progress to whoever wants to hear it."""

    progress: Progress | None = None
    seconds: dict[str, float] = field(default_factory=dict)

    def say(self, phrase: str, share: float) -> None:
        """Report progress."""
        if self.progress:
            self.progress(phrase, share)

    @contextmanager
    def stage(self, name: str, share: float) -> Iterator[None]:
        """Time a stage."""
        self.say(name, share)
        start = time.perf_counter()
        yield
        self.seconds[name] = time.perf_counter() - start
