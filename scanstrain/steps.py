# SPDX-License-Identifier: MIT
"""The stages with the options of a configuration; what each of them returns can be kept."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property, partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.clock import Clock
from scanstrain.config import CompareConfig
from scanstrain.datum import check_setups, datum_options
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.parts import bodies_of, gauges_of_zones
from scanstrain.shape import Shape, places_on, sections_of, shape_of, wall_movement
from scanstrain.sources import number_or_none, points_for_sections, source_of
from scanstrain.tiles import THINNED, thinning_of

if TYPE_CHECKING:  # the stages compile when they are loaded
    from scanstrain.neighbourhood.joint_jumps import JointJumps
    from scanstrain.neighbourhood.joint_lines import Joint
    from scanstrain.neighbourhood.piece import InMemory
    from scanstrain.neighbourhood.result import AffineField
    from scanstrain.registration.result import Registration
    from scanstrain.stores import OnDisk
    from scanstrain.strain.calibration import Calibration
    from scanstrain.strain.result import StrainField

FloatArray = NDArray[np.float64]


@dataclass(frozen=True)
class Material:
    """Both epochs, brought into one frame only when a stage needs them: kept stages do without.

    Parameters
    ----------
    reference, current : Epoch
    few : Epoch
        Reference points that stand for all.
    T_ref_cur : ndarray of shape (4, 4)
        From the current to the reference frame.
    config : CompareConfig
    folder : Path or None
        For tiles; None keeps everything in memory.
    """

    reference: Epoch
    current: Epoch
    few: Epoch
    T_ref_cur: FloatArray
    config: CompareConfig
    folder: Path | None

    @cached_property
    def source(self) -> InMemory | OnDisk:
        """Both epochs in the reference frame, as the neighbourhood stage takes them."""
        return source_of(self.reference, self.current, self.T_ref_cur, self.few, self.config, self.folder)

    @cached_property
    def spacing(self) -> float:
        """Point spacing of the coarser epoch [m]."""
        return self.source.spacing()


def registered(reference: Epoch, current: Epoch, config: CompareConfig, clock: Clock) -> tuple[Any, ...]:
    """Run all that comes before the gauges; aligned set-ups are handed on as points, or None where nothing moved."""
    from scanstrain.registration import register

    align = config.registration.align_setups
    with clock.stage("set-ups", 0.06):
        first, own_seams, own_doubts = check_setups(reference, align=align)
        second, seams, more_doubts = check_setups(current, align=align)
    with clock.stage("structure", 0.08):
        shape = shape_of(first, config)
        unrolled = shape.unroll(first.points)
    with clock.stage("registration", 0.1):
        registration = register(first, second, **datum_options(first, config, unrolled))
    moved = tuple(None if new is old else new.points for new, old in ((first, reference), (second, current)))
    return shape, registration, {"reference": own_seams, "current": seams}, (*own_doubts, *more_doubts), moved


def at(epoch: Epoch, points: FloatArray | None) -> Epoch:
    """Return the epoch with its set-ups aligned."""
    return epoch if points is None else replace(epoch, points=points)


def aligned(epoch: Epoch, few: Epoch, moved: Epoch) -> Epoch:
    """Take over what aligning set-ups did to an epoch, unless it was done to points drawn from it only.

    Raises
    ------
    OptionError
        The latter.
    """
    if moved is few:
        return epoch
    if few is epoch:
        return moved
    required = f"at most {THINNED} points and no tiles, to move set-ups"
    got = f"{len(epoch)} points in {epoch.label}"
    raise OptionError(explain("align_setups", required, got, "align the set-ups before the comparison"))


def fitted(
    material: Material, registration: Registration, shape: Shape, config: CompareConfig, clock: Clock
) -> tuple[Any, ...]:
    """Run the neighbourhood stage, joints included."""
    with clock.stage("neighbourhood", 0.3):
        affine = _fit(material, registration, shape, config, clock)
        return affine, _joints(material, affine, config)


def strained(
    material: Material,
    affine: AffineField,
    registration: Registration,
    shape: Shape,
    config: CompareConfig,
    clock: Clock,
) -> tuple[Any, ...]:
    """Run all that comes after the gauges but the way back to the points."""
    from scanstrain.strain import calibrate

    few, thinning = material.few, thinning_of(len(material.reference))
    with clock.stage("strain", 0.8):
        affine, calibration, doubts = calibrate(affine, registration, few.points, thinning=thinning)
        strain = _strain(affine, registration, calibration, shape, config)
        zones = gauges_of_zones(affine, few, config, shape.unroll(few.points), thinning=thinning)
        bodies = bodies_of(affine, registration, zones)
    with clock.stage("sections", 0.83):
        both, thickness = points_for_sections(material.source, shape, config, material.spacing)
        sections = sections_of(shape, both, registration, config, thickness)
        wall = wall_movement(shape, affine, registration, config)
    return affine, calibration, doubts, strain, zones, bodies, sections, wall


def _fit(
    material: Material, registration: Registration, shape: Shape, config: CompareConfig, clock: Clock
) -> AffineField:
    """Run the neighbourhood stage with its options."""
    from scanstrain.neighbourhood.affine import fit_pieces, setting_for
    from scanstrain.neighbourhood.gauge_length import GaugeLength, choose_gauge_length
    from scanstrain.neighbourhood.ladder import fit_on_ladder, rungs
    from scanstrain.registration.report import steady_places

    options, free_side = config.neighbourhood, config.strain.free_side
    source, spacing, origin = material.source, material.spacing, material.reference.origin
    given, need = number_or_none(options.gauge_length), number_or_none(options.required_strain_sd)
    chosen = (
        choose_gauge_length(source, spacing=spacing, use_intensity=options.use_intensity, required_strain_sd=need)
        if given is None
        else GaugeLength(given, "Set by the caller.")
    )
    shortest = setting_for(
        source,
        gauge_length=chosen.length,
        gauge_spacing=number_or_none(options.gauge_spacing),
        resolution=number_or_none(options.resolution),
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=number_or_none(options.required_displacement_sd),
        required_strain_sd=need,
        spacing=spacing,
    )
    fit = partial(
        fit_pieces,
        source,
        free_side=None if free_side is None else np.array(free_side) - origin,
        axis=shape.guide(),
        joints=_joint_lines(origin, config),
        steady=steady_places(registration),
        progress=lambda phrase, share: clock.say(f"neighbourhood, {phrase}", 0.3 + 0.5 * share),
    )
    if options.gauge_ladder is None:
        field = fit(shortest)
    else:
        # Spacing and cells are those of the shortest one, so that gauges stand in the same places on all rungs.
        lengths = rungs(chosen.length, options.gauge_ladder)
        field = fit_on_ladder(lambda length: fit(replace(shortest, gauge_length=length)), lengths)
    return replace(field, gauge_length_reason=chosen.reason)


def _joint_lines(origin: FloatArray, config: CompareConfig) -> tuple[Joint, ...]:
    from scanstrain.neighbourhood.joint_lines import Joint

    at = origin.tolist()
    return tuple(Joint(each.name, np.array(each.local_line(at)), each.width) for each in config.joint)


def _joints(material: Material, affine: AffineField, config: CompareConfig) -> tuple[JointJumps, ...]:
    """Measure what the joints did that the user named."""
    if not config.joint:
        return ()
    from scanstrain.neighbourhood.joints import NEAR, measure_joints

    options, lines = config.neighbourhood, _joint_lines(material.reference.origin, config)
    return measure_joints(
        *material.source.near([line.line for line in lines], NEAR * affine.gauge_length / 2),
        affine,
        lines,
        use_intensity=options.use_intensity,
        min_points=options.min_points,
        required_displacement_sd=number_or_none(options.required_displacement_sd),
        required_strain_sd=number_or_none(options.required_strain_sd),
        spacing=material.spacing,
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
