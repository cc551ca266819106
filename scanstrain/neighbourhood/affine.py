# SPDX-License-Identifier: MIT
"""The neighbourhood stage: from two aligned epochs to one local affine map per gauge."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import replace
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import BLOCK_WIDTH
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.bias import REACH, gauge_bias
from scanstrain.neighbourhood.finish import finish
from scanstrain.neighbourhood.fitting import joined, some_of
from scanstrain.neighbourhood.gauges import Guide, choose_gauges
from scanstrain.neighbourhood.joint_cuts import WIDEST, cuts_at
from scanstrain.neighbourhood.joint_lines import Joint
from scanstrain.neighbourhood.layout import Lines, lay_lines, lay_out
from scanstrain.neighbourhood.piece import InMemory, Source, corners_of
from scanstrain.neighbourhood.pieces import BLOCKS, find_candidates, fit_piece
from scanstrain.neighbourhood.plan import Steady, measure_plan
from scanstrain.neighbourhood.result import AffineField
from scanstrain.neighbourhood.setting import (
    REQUIRED_DISPLACEMENT_SD,
    REQUIRED_STRAIN_SD,
    Requirements,
    Setting,
    cell_width,
)

FloatArray = NDArray[np.float64]
Progress = Callable[[str, float], None]
COVERED = 24
"""Voxels across a gauge that tell which part of its disc is covered: their steps shift its moments by a percent."""
Run = Callable[[Callable[[Any], Any], Iterable[Any]], Iterator[Any]]
"""Applies a function to every piece, here or elsewhere, and gives the results in order, as `map` does."""


def fit_affine(
    reference: Epoch,
    current: Epoch,
    *,
    gauge_length: float,
    gauge_spacing: float | None = None,
    resolution: float | None = None,
    use_intensity: bool = True,
    min_points: int = 30,
    required_displacement_sd: float | None = None,
    required_strain_sd: float | None = None,
    free_side: FloatArray | None = None,
    axis: FloatArray | Guide | None = None,
    joints: Sequence[Joint] = (),
    progress: Progress | None = None,
) -> AffineField:
    """Fit a local affine map of the reference surface onto the current one at every gauge.

    Minimises, per gauge, the weighted squares of two kinds of misfit: the height of every moved reference cell over
    the current surface, and the difference of its intensity from the predicted one up to a local gain and offset.
    Surface and intensity of both epochs are best linear predictions with covariances measured on the scans.
    Displacements larger than the texture's own width are reached over a pyramid of coarser cells.

    Parameters
    ----------
    reference, current : Epoch
        In one local frame; `current` already registered.
    gauge_length : float
        Diameter of the patch of one gauge [m].
    gauge_spacing : float, optional
        Distance between gauges [m]; a quarter of the gauge length by default.
    resolution : float, optional
        Cell width [m]; by default the point spacing of the coarser epoch, or a hundredth of the gauge length if
        that is more.
    use_intensity : bool
        Whether intensity may fix in-plane components.
    min_points : int
        Fewest matched cells of a gauge.
    required_displacement_sd, required_strain_sd : float, optional
        Standard errors above which in-plane displacement [m] and strain [1] are given as not observable.
    free_side : ndarray of shape (3,), optional
        A local point on the free side of the surface [m]: fixes the sign of normals.
    axis : ndarray of shape (3,) or callable, optional
        Unit direction of a straight tunnel, or for any tunnel the nearest places on its axis and the directions
        there, each (n, 3), from places (n, 3): normals look to the axis and a2 runs along it, otherwise a2 is upward.
    joints : sequence of Joint
        Lines across which the surface is not continuous: a patch ends at them.
    progress : callable, optional
        Called with a phrase and the share done.

    Returns
    -------
    AffineField

    Raises
    ------
    OptionError
        A length that does not fit the spacing or the object.
    FitError
        No gauge anywhere could be fitted.
    """
    source = InMemory(reference, current)
    setting = setting_for(
        source,
        gauge_length=gauge_length,
        gauge_spacing=gauge_spacing,
        resolution=resolution,
        use_intensity=use_intensity,
        min_points=min_points,
        required_displacement_sd=required_displacement_sd,
        required_strain_sd=required_strain_sd,
    )
    return fit_pieces(source, setting, free_side=free_side, axis=axis, joints=joints, progress=progress)


def setting_for(
    source: Source,
    *,
    gauge_length: float,
    gauge_spacing: float | None,
    resolution: float | None,
    use_intensity: bool,
    min_points: int,
    required_displacement_sd: float | None,
    required_strain_sd: float | None,
    spacing: float | None = None,
) -> Setting:
    """Check the options of `fit_affine` and choose what they leave open; `spacing` of the points [m] if it is known."""
    spacing = source.spacing() if spacing is None else spacing
    return Setting(
        gauge_length,
        gauge_spacing or gauge_length / 4,
        cell_width(spacing, source.extent(), gauge_length, resolution),
        use_intensity,
        min_points,
        Requirements(
            displacement=required_displacement_sd or REQUIRED_DISPLACEMENT_SD,
            strain=required_strain_sd or REQUIRED_STRAIN_SD,
        ),
    )


def fit_pieces(
    source: Source,
    setting: Setting,
    *,
    free_side: FloatArray | None = None,
    axis: FloatArray | Guide | None = None,
    joints: Sequence[Joint] = (),
    steady: Steady | None = None,
    run: Run = map,
    progress: Progress | None = None,
) -> AffineField:
    """Fit an object piece by piece: what is common first, then every piece, then what follows from all of them.

    Parameters
    ----------
    source : Source
        Both epochs, in one local frame.
    setting : Setting
    free_side, axis, joints : optional
        As of `fit_affine`.
    steady : callable, optional
        Says of places (n, 3) [m] whether they are known not to have moved: shared noise is measured there.
    run : callable
        Applies a function to the boxes of the pieces, as `map` does; the results must come in their order.
    progress : callable, optional
        As of `fit_affine`.

    Returns
    -------
    AffineField

    Raises
    ------
    OptionError, FitError
        As of `fit_affine`.
    """
    say = progress or _silent
    boxes = source.boxes()
    lines = _lines(source, setting, joints)
    plan, trial = measure_plan(source, setting, lines, free_side, axis, steady, say)
    if trial.whole and len(boxes) == 1:
        field = finish(trial.fittings[0].close(plan.shared), setting, plan.shared, trial.warnings)
        return _with_bias(field, source, setting, lines)
    del trial
    found = []
    for number, each in enumerate(run(partial(find_candidates, source, setting), boxes)):
        say("places of gauges", 0.1 * (number + 1) / len(boxes))
        found.append(each)
    layout, warnings = lay_out(*choose_gauges(found, setting.spacing), free_side, axis)
    numbers, parts = [], []
    for number, (own, fitted) in enumerate(run(partial(fit_piece, source, setting, plan, layout, lines), boxes)):
        say(f"piece {number + 1} of {len(boxes)}", 0.1 + 0.9 * (number + 1) / len(boxes))
        numbers.append(own)
        parts += [fitted] if fitted is not None else []
    order = np.argsort(np.concatenate(numbers), kind="stable")
    field = finish(some_of(joined(parts), order), setting, plan.shared, warnings)
    return _with_bias(field, source, setting, lines)


def _with_bias(field: AffineField, source: Source, setting: Setting, lines: Lines) -> AffineField:
    """Judge how far the gauges are off because the motion varies within them; voxels tell what of a disc is covered."""
    width = setting.gauge_length / COVERED
    covered = corners_of(source.counts(width)[0], width) + 0.5 * width
    cuts = cuts_at(field.position, field.frame, field.shape, REACH / WIDEST * setting.radius, lines.ends, lines.half)
    return replace(field, bias=gauge_bias(field, covered, cuts))


def _lines(source: Source, setting: Setting, joints: Sequence[Joint]) -> Lines:
    """Lay the joints on the reference surface near them."""
    reach = 2 * setting.radius + BLOCKS * BLOCK_WIDTH * setting.width
    near = [source.near([joint.line], reach)[0].points for joint in joints]
    return lay_lines(joints, near, setting.width, setting.radius)


def _silent(_phrase: str, _share: float) -> None:
    """Report progress to nobody."""
