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

if TYPE_CHECKING:  # the stages compile when they are loaded
    from scanstrain.neighbourhood.joint_jumps import JointJumps
    from scanstrain.neighbourhood.joint_lines import Joint
    from scanstrain.neighbourhood.result import AffineField
    from scanstrain.registration.result import Registration
    from scanstrain.strain.calibration import Calibration
    from scanstrain.strain.result import StrainField

FloatArray = NDArray[np.float64]
Progress = Callable[[str, float], None]
EpochLabel = tuple[str, str | None]

AUTO_SPACINGS = 60.0
"""Gauge length of `gauge_length = "auto"`, in point spacings: some 2 800 points a gauge, which brings the noise of a
normal displacement down to about a twenty-fifth of that of a point."""
AUTO_SHARE = 0.25
"""The same never exceeds this share of the object's extent."""


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
    with clock.stage("read", 0.0):
        first = read_scan(reference)
        second = read_scan(current, origin=first.origin)
        notices = check_same_frame(first, second, assume_same_crs=assume_same_crs)
    if labels:
        first, second = _named(first, *labels[0]), _named(second, *labels[1])
    return _compare(first, second, config, clock, notices)


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


def _compare(reference: Epoch, current: Epoch, config: CompareConfig, clock: Clock, notices: tuple[str, ...]) -> Result:
    from scanstrain.registration import register
    from scanstrain.strain import blend_to_points, calibrate

    align = config.registration.align_setups
    with clock.stage("set-ups", 0.06):
        reference, own_seams, own_doubts = check_setups(reference, align=align)
        current, seams, more_doubts = check_setups(current, align=align)
    with clock.stage("structure", 0.08):
        shape = shape_of(reference, config)
        unrolled = shape.unroll(reference.points)
    with clock.stage("registration", 0.1):
        registration = register(reference, current, **datum_options(reference, config, unrolled))
        moved = current.moved(registration.T_ref_cur)
    with clock.stage("neighbourhood", 0.3):
        affine = _fit(reference, moved, shape, config, clock)
        joints = _joints(reference, moved, affine, config)
    with clock.stage("strain", 0.8):
        affine, calibration, doubts = calibrate(affine, registration, reference.points)
        strain = _strain(affine, registration, calibration, shape, config)
        zones = gauges_of_zones(affine, reference, config, unrolled)
        bodies = bodies_of(affine, registration, zones)
    with clock.stage("sections", 0.83):
        sections = sections_of(shape, reference, moved, registration, config)
        wall = wall_movement(shape, affine, registration, config)
    with clock.stage("points", 0.85):
        points = blend_to_points(strain, reference.points)
        points |= {"stable": registration.stable.astype(np.uint8), **places_on(unrolled)}
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


def _fit(reference: Epoch, moved: Epoch, shape: Shape, config: CompareConfig, clock: Clock) -> AffineField:
    """Run the neighbourhood stage with its options."""
    from scanstrain.neighbourhood import fit_affine

    options, free_side = config.neighbourhood, config.strain.free_side
    return fit_affine(
        reference,
        moved,
        gauge_length=_number(options.gauge_length) or auto_gauge_length(reference, moved),
        gauge_spacing=_number(options.gauge_spacing),
        resolution=_number(options.resolution),
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=_number(options.required_displacement_sd),
        required_strain_sd=_number(options.required_strain_sd),
        free_side=None if free_side is None else np.array(free_side) - reference.origin,
        axis=shape.guide(),
        joints=_joint_lines(reference, config),
        progress=lambda phrase, share: clock.say(f"neighbourhood, {phrase}", 0.3 + 0.5 * share),
    )


def _joint_lines(reference: Epoch, config: CompareConfig) -> tuple[Joint, ...]:
    from scanstrain.neighbourhood.joint_lines import Joint

    origin = reference.origin.tolist()
    return tuple(Joint(each.name, np.array(each.local_line(origin)), each.width) for each in config.joint)


def _joints(reference: Epoch, moved: Epoch, affine: AffineField, config: CompareConfig) -> tuple[JointJumps, ...]:
    """Measure what the joints did that the user named."""
    if not config.joint:
        return ()
    from scanstrain.neighbourhood.joints import measure_joints

    options = config.neighbourhood
    return measure_joints(
        reference,
        moved,
        affine,
        _joint_lines(reference, config),
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=_number(options.required_displacement_sd),
        required_strain_sd=_number(options.required_strain_sd),
    )


def _strain(
    affine: AffineField, registration: Registration, calibration: Calibration, shape: Shape, config: CompareConfig
) -> StrainField:
    """Run the strain stage with its options."""
    from scanstrain.strain import compare_measures, compute_strain

    options = config.strain
    strain = compute_strain(
        affine,
        registration=registration,
        measure=options.measure,
        structure=options.structure,
        thickness=options.thickness,
        bending_form=options.bending_form,
        axis=shape.directions(affine.position),
        false_discovery_rate=options.false_discovery_rate,
        known={"stable": calibration.steady, **places_on(shape.unroll(affine.position))},
    )
    if not options.compare_measures:
        return strain
    return replace(strain, compared=compare_measures(affine, used=strain.measure, registration=registration))


def auto_gauge_length(reference: Epoch, current: Epoch) -> float:
    """Choose a gauge length [m] from the point spacing and the extent, to two digits."""
    from scanstrain.cells import median_spacing

    spacing = max(median_spacing(reference.points), median_spacing(current.points))
    length = min(AUTO_SPACINGS * spacing, AUTO_SHARE * float(np.ptp(reference.points, axis=0).max()))
    if not length > 0:
        raise OptionError(explain("gauge_length", "scans with distinct points", "coincident ones", "export them again"))
    return float(f"{length:.2g}")


def _number(value: float | str) -> float | None:
    """Turn the word auto into None."""
    return None if isinstance(value, str) else float(value)


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
