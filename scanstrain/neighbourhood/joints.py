# SPDX-License-Identifier: MIT
"""Movements across joints: both sides fitted each for itself and extrapolated to the line.

Each side is a surface of its own: cells, smooth surface, predictions and fit see no point of the other. The two fits
share no point, so their errors are independent, and an error of the registration is common to both and drops out.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import make_cells, median_spacing
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.finish import gauge_status
from scanstrain.neighbourhood.fit import POINTS
from scanstrain.neighbourhood.gauges import turned_curvature
from scanstrain.neighbourhood.joint_cuts import Cuts, cuts_at
from scanstrain.neighbourhood.joint_jumps import JointJumps, Side, jumps_between
from scanstrain.neighbourhood.joint_lines import Joint, Trace, lay_on_surface, pieces_of
from scanstrain.neighbourhood.level import Estimate, Level, make_surface
from scanstrain.neighbourhood.piece import beside, part_of
from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.neighbourhood.setting import CELLS_ACROSS, Requirements, units_of
from scanstrain.neighbourhood.smooth import SmoothSurface, smooth_surface, support_cells
from scanstrain.neighbourhood.textures import pair_of_textures

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

HALF_DISC = np.sqrt(2.0)
"""Radius of the half disc of one side, in radii of a gauge: it covers as much surface as a whole gauge."""
NEAR = 10.0
"""Points so far from a line matter to it at all, in radii of a gauge."""
REACH = 1.25
"""Points so far from the line are used, in radii of the half disc: its predictions need some border."""
TURNS = 3
"""Comparisons a side; the field has already brought the linearisation close."""
NORMAL = (2, 7, 8, 9, 10, 11)
"""Unknowns that the surface itself shows."""


@dataclass(frozen=True, slots=True)
class Task:
    """What the fits of both sides of a joint have in common.

    Parameters
    ----------
    field : AffineField
        Of the whole surface.
    gauges : SmoothSurface
        Places along the joint, with its axes as frames.
    cuts : Cuts
        The other joints about them.
    greys : pair of ndarray or None
        Texture of the points of both epochs.
    width, radius : float
        Of a cell and of a half disc [m].
    min_points : int
        Fewest matched cells of a side.
    need : Requirements
    """

    field: AffineField
    gauges: SmoothSurface
    cuts: Cuts
    greys: tuple[FloatArray | None, FloatArray | None]
    width: float
    radius: float
    min_points: int
    need: Requirements


def measure_joints(
    reference: Epoch,
    current: Epoch,
    field: AffineField,
    joints: Sequence[Joint],
    *,
    use_intensity: bool = True,
    min_points: int = 30,
    required_displacement_sd: float | None = None,
    required_strain_sd: float | None = None,
    spacing: float | None = None,
) -> tuple[JointJumps, ...]:
    """Opening, slip, step and hinge angle along every joint.

    Parameters
    ----------
    reference, current : Epoch
        As of `fit_affine`.
    field : AffineField
        Its result with the same joints: says where both sides went, which side is free, and how much noise neighbouring
        points share.
    joints : sequence of Joint
        Lines on the surface.
    use_intensity : bool
        Whether intensity may fix opening and slip.
    min_points : int
        Fewest matched cells of a side.
    required_displacement_sd, required_strain_sd : float, optional
        As of `fit_affine`, for each side.
    spacing : float, optional
        Of the points of the coarser epoch [m], where the epochs hold only what is near the joints.

    Returns
    -------
    tuple of JointJumps

    Raises
    ------
    OptionError
        A line that does not lie on the surface.
    """
    plain = Requirements()
    need = replace(
        plain,
        displacement=required_displacement_sd or plain.displacement,
        strain=required_strain_sd or plain.strain,
    )
    spacing = spacing or max(median_spacing(reference.points), median_spacing(current.points))
    width = max(spacing, field.gauge_length / CELLS_ACROSS)
    cells = make_cells(reference.points, width)
    traces = [_to_free_side(lay_on_surface(joint, cells, field.gauge_length / 2), field) for joint in joints]
    epochs = reference, current if use_intensity else replace(current, intensity=None)
    return tuple(
        _measure(*epochs, field, number, joints, traces, width, min_points, need) for number in range(len(joints))
    )


def _measure(
    reference: Epoch,
    current: Epoch,
    field: AffineField,
    number: int,
    joints: Sequence[Joint],
    traces: Sequence[Trace],
    width: float,
    min_points: int,
    need: Requirements,
) -> JointJumps:
    """All places of one joint."""
    joint, trace = joints[number], traces[number]
    radius = HALF_DISC * field.gauge_length / 2
    reach = REACH * radius
    reference, current = (_near(epoch, trace.node, 2 * radius) for epoch in (reference, current))
    along = trace.places(radius)
    places, frames = trace.frames(along)
    fitted = smooth_surface(places, frames[:, :, 2], support_cells(reference.points, radius))
    gauges = SmoothSurface(places, frames, turned_curvature(fitted, frames), fitted.support)
    others = [k for k in range(len(joints)) if k != number]
    pieces = pieces_of([joints[k] for k in others], [traces[k] for k in others], width, radius)
    cuts = cuts_at(places, frames, gauges.curvature, radius, *pieces)
    greys = pair_of_textures(reference, current, field.gauge_length, width) if len(current) else (None, None)
    task = Task(field, gauges, cuts, greys, width, radius, min_points, need)
    sides = []
    for sign in (1.0, -1.0):
        # Current points are judged where they came from, as far as the field knows.
        motion = _known_motion(task, trace, sign)
        back = current.points - motion[_nearest(places, current.points)]
        ours = sign * trace.offsets(reference.points, radius, reach) > joint.width / 2
        theirs = sign * trace.offsets(back, radius, reach) > joint.width / 2
        sides.append(_fit_side(task, (reference.points, current.points), (ours, theirs), motion))
    return jumps_between(joint.name, along, places, frames, sides[0], sides[1])


def _near(epoch: Epoch, line: FloatArray, reach: float) -> Epoch:
    """Return the points of an epoch about a line, with their intensity and set-up."""
    return part_of(epoch, beside(epoch.points, [line], reach))


def _nearest(places: FloatArray, points: FloatArray) -> NDArray[np.int64]:
    """Number of the nearest place for every point."""
    from scipy.spatial import cKDTree

    return np.asarray(cKDTree(places).query(points)[1], np.int64)


def _to_free_side(trace: Trace, field: AffineField) -> Trace:
    """Turn the normals of a line to where those of the gauges about it look."""
    normal = field.frame[_nearest(field.position, trace.node)][:, :, 2]
    return trace if np.sum(normal * trace.normal) > 0 else replace(trace, normal=-trace.normal)


def _known_motion(task: Task, trace: Trace, sign: float) -> FloatArray:
    """Motion of one side at the places, from the nearest gauge of that side, local axes (k, 3) [m]."""
    field, places = task.field, task.gauges.origin
    on_side = sign * trace.offsets(field.position, field.gauge_length / 2, 2 * field.gauge_length) > 0
    usable = np.flatnonzero(on_side & (field.status == Status.FINE))
    if not len(usable):
        return np.zeros_like(places)
    g = usable[_nearest(field.position[usable], places)]
    x = np.einsum("ga,gab->gb", places - field.position[g], field.frame[g])[:, :2]
    # What a gauge does not show counts as no motion.
    u = np.nan_to_num(field.displacement[g]) + np.einsum("gij,gj->gi", np.nan_to_num(field.gradient[g]), x)
    return np.einsum("gab,gb->ga", field.frame[g], u)


def _fit_side(
    task: Task, points: tuple[FloatArray, FloatArray], keep: tuple[BoolArray, BoolArray], motion: FloatArray
) -> Side:
    """Fit the part of both epochs on one side of the line, moved by about `motion` (k, 3) [m] at the places."""
    gauges, field, width, radius = task.gauges, task.field, task.width, task.radius
    k = len(gauges.origin)
    if min(part.sum() for part in keep) < task.min_points:
        return _nothing(k, Status.TOO_FEW_POINTS if keep[0].sum() < task.min_points else Status.NO_OVERLAP)
    wide = max(field.gauge_length / 4, 6 * width)
    ours, theirs = (
        make_surface(xyz[part], None if grey is None else grey[part], width, wide, max(field.gauge_spacing, 4 * width))
        for xyz, part, grey in zip(points, keep, task.greys, strict=True)
    )
    level = Level(ours, theirs, gauges, radius, radius, task.cuts)
    scale = units_of(radius)
    state = Estimate(np.zeros((k, 12)), np.ones(k), task.need.limits() / scale)
    state.held[:, :3] = np.einsum("ka,kab->kb", motion, gauges.frame)
    for _ in range(TURNS):
        before = state.held[:, :3].copy()
        level.fit(state, gate=ours.gate + width, min_points=task.min_points)
    moving = np.abs(state.held[:, :3] - before).max(axis=1) > 0.5 * width
    status = gauge_status(state, gauges, radius, moving, task.min_points)
    factor = np.array(field.correlation.factor) if field.correlation else np.ones(12)
    units = scale * factor
    covariance = state.covariance * units[:, None] * units
    sd = state.data_sd * units
    sd[:, NORMAL] = np.sqrt(np.einsum("kii->ki", covariance))[:, NORMAL]
    observable = (sd <= task.need.limits()) & (status == Status.FINE)[:, None]
    return Side(state.values * scale, covariance, observable, status, state.info[:, POINTS].astype(np.int64))


def _nothing(places: int, why: Status) -> Side:
    """Return a side without a number."""
    return Side(
        np.full((places, 12), np.nan),
        np.zeros((places, 12, 12)),
        np.zeros((places, 12), np.bool_),
        np.full(places, why, np.uint8),
        np.zeros(places, np.int64),
    )
