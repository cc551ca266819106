# SPDX-License-Identifier: MIT
"""Registration of two epochs: the stage from start to result."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import OverlapError, RegistrationError, explain
from scanstrain.registration.coarse import choose_start, refuse_apart, settle, to_grid
from scanstrain.registration.disguise import confirm, refuse_disguise
from scanstrain.registration.fit import align, level_metric, motion, rough, step_of, total
from scanstrain.registration.ground import find_ground, readmit
from scanstrain.registration.levels import check_blocks, cut_both
from scanstrain.registration.misread import refuse_misread
from scanstrain.registration.options import Options, check
from scanstrain.registration.patches import patch_of_blocks
from scanstrain.registration.report import assemble
from scanstrain.registration.result import Registration
from scanstrain.registration.rigid import inverse
from scanstrain.registration.scale import determined
from scanstrain.registration.start import GivenStart
from scanstrain.registration.surfaces import Surface, make_surface, pyramid
from scanstrain.registration.texture import settle_texture, use_texture
from scanstrain.registration.trace import follow
from scanstrain.registration.weak import complement, split
from scanstrain.registration.work import Work

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

LEAST_BUDGET = 1e-3
"""Weak means a standard error above the noise of one point, but never below this [m]."""
MAX_CUTS = 6
"""Most times that the current epoch is cut again in the reference's own grid."""
SETTLED = 0.1
"""Cutting again is over when it moves the result by less than this part of its standard error."""
TAKE_BACK = 5
"""Rounds of taking back a motion: each leaves an error of second order in the one before."""


def register(
    reference: Epoch,
    current: Epoch,
    *,
    start: str | FloatArray | GivenStart = "auto",
    stable: str | BoolArray = "auto",
    excluded: BoolArray | None = None,
    capture_range: float = 0.3,
    use_intensity: bool = True,
    seed: int = 0,
    max_iterations: int = 60,
    progress: Callable[[float], None] | None = None,
) -> Registration:
    """Estimate the rigid motion that brings the current epoch into the reference frame, on stable ground.

    Robust symmetric point-to-plane fit of block centres and planes, coarse to fine (`match.observe`, `fit.align`);
    stable ground by patches that share one motion (`stable.choose_ground`); covariance by leaving out patches
    (`covariance.estimate`). Six parameters: a scale would absorb uniform strain and is only reported.

    Motions that the surfaces do not fix (`weak.split`) are held at their start value: what the fit moved along them
    is taken back before the last iterations, which leave them out. In the covariance they carry that of the start
    where it has one (`GivenStart`). Otherwise each carries a standard deviation of a third of `capture_range` at the
    place that it moves most: the capture range is taken as the three-sigma limit of the start. `WeakDirection.sd` is
    the same number. Where both epochs carry intensity, it may fix some of them (`texture.use_texture`).

    Parameters
    ----------
    reference, current : Epoch
        In one local frame: the same `origin`, coordinates within 10 km of it.
    start : {"auto", "identity", "coarse"}, ndarray of shape (4, 4) or GivenStart
        Where to begin. "auto": the poses as given where the surfaces then fit, otherwise surface features. A matrix
        takes local current coordinates to local reference coordinates.
    stable : {"auto", "all"} or ndarray of shape (n_reference,), bool
        Reference points on stable ground, all of them, or "auto": the patches that share one motion.
    excluded : ndarray of shape (n_reference,), bool, optional
        Reference points that are no stable ground whatever `stable` says.
    capture_range : float
        How far apart [m] the surfaces may lie at the start; width of the first blocks.
    use_intensity : bool
        Whether returned intensity may fix motions that the surfaces leave open.
    seed : int
        Of the random choices in the coarse start and in the search for stable ground.
    max_iterations : int
        Most iterations at any one level.
    progress : callable, optional
        Called with the finished share, 0 to 1.

    Returns
    -------
    Registration

    Raises
    ------
    OptionError
        Options out of range, origins that differ, coordinates that are not local.
    OverlapError
        The epochs do not show the same surface.
    RegistrationError
        Nothing stable was found, or the fit did not converge.
    MissingDependencyError
        A coarse start is needed and open3d cannot be loaded.
    """
    options = Options(start, stable, excluded, capture_range, seed, max_iterations, progress, use_intensity)
    check(reference, current, options)
    work, whole, started = _begin(reference, current, options)
    options.report(0.5)
    find_ground(work, options)
    _decide_weak(work)
    options.report(0.6)
    _take_back(work)
    if work.weak.shape[1] and use_intensity:
        use_texture(work, reference, current, options)
    _finish(work, current.points, options)
    settle_texture(work)
    options.report(0.95)
    result = assemble(work, whole, reference, options, started)
    options.report(1.0)
    return result


def _begin(reference: Epoch, current: Epoch, options: Options) -> tuple[Work, Surface, str]:
    """Cut both epochs, choose a start and come down to the finest level with all of the ground."""
    whole, theirs = cut_both(reference.points, current.points, options.capture_range)
    mine = whole
    if options.candidates is not None:
        mine = pyramid(reference.points[options.candidates], [s.width for s in whole], own_grid=False)
    check_blocks(mine[-1])
    options.report(0.2)
    T_raw, T, started = _start(whole, theirs, reference, current, options)
    if mine is not whole:
        T = settle(mine, theirs, T_raw)[0]
    fit = align(mine[-1], theirs[-1], T, metric=level_metric(mine[-1]), **rough(mine[-1], options.max_iterations))
    T_start = T_raw @ theirs[-1].T_grid_epoch
    index, count = patch_of_blocks(mine[-1])
    work = Work(mine[-1], theirs[-1], fit, T, T_start, level_metric(mine[-1]), index, count)
    work.take(fit)
    return work, whole[-1], started


def _start(
    mine: list[Surface], theirs: list[Surface], reference: Epoch, current: Epoch, options: Options
) -> tuple[FloatArray, FloatArray, str]:
    """Pose of the current grid frame to begin with, the same after a rough alignment, and where it came from."""
    if not isinstance(options.start, str):
        given = options.start if isinstance(options.start, GivenStart) else GivenStart(options.start)
        T = to_grid(given.T_ref_cur, theirs[-1])
        settled = settle(mine, theirs, T)[0]
        refuse_misread(mine, theirs, given.T_ref_cur, settled, reference.origin)
        return confirm(mine, theirs, reference, current, (T, settled, given.source), searching=False, seed=options.seed)
    try:
        if options.start == "auto":
            refuse_apart(reference.points, current.points)
        found = choose_start(mine, theirs, to_grid(np.eye(4), theirs[-1]), options.start, options.seed)
    except OverlapError:
        refuse_disguise(mine, theirs, reference, current, best=0.0, seed=options.seed)
        raise
    return confirm(mine, theirs, reference, current, found, searching=options.start == "auto", seed=options.seed)


def _decide_weak(work: Work) -> None:
    """Split the motions into those that the surfaces fix and weak ones, while the two grids are still independent."""
    at = work.metric
    # Same pose, rows about the final pivot.
    fit = align(
        work.reference,
        work.current,
        work.pose,
        metric=at,
        budget=np.inf,
        tolerance=np.inf,
        limit=1,
        keep=work.keep,
    )
    full, shared, _ = total(fit.rows, fit.weight)
    used = fit.weight > 0
    noise = float(np.median(work.reference.cells.roughness[fit.rows.block[used]]))
    work.budget = max(noise, LEAST_BUDGET)
    work.strong, work.weak = split(
        full[:6, :6],
        shared[:6, :6],
        variance=fit.variance(),
        places=fit.rows.place[used],
        metric=at,
        budget=work.budget,
    )
    if not work.strong.shape[1]:
        raise RegistrationError(
            explain("registration", "a surface that fixes some motion", "none fixed", "scan more of the object")
        )
    work.scale_known = determined(fit, work.strong)
    if work.weak.shape[1]:
        work.weak = follow(work)
        work.strong = complement(work.weak)


def _take_back(work: Work) -> None:
    """Undo what moved along weak directions since the start."""
    for _ in range(TAKE_BACK if work.weak.shape[1] else 0):
        back = work.weak @ (work.weak.T @ motion(work.T @ inverse(work.T_start), work.metric))
        work.T = step_of(-back, work.metric) @ work.T


def _finish(work: Work, points: FloatArray, options: Options) -> None:
    """Cut the current epoch in the reference's own grid, where both show the same pieces, and fit to the end."""
    for cut in range(MAX_CUTS):
        _take_back(work)
        work.current = make_surface(points, work.reference.width, T_grid_epoch=work.T)
        work.take(
            align(
                work.reference,
                work.current,
                np.eye(4),
                metric=work.metric,
                budget=np.inf,
                tolerance=0.0,
                limit=options.max_iterations,
                strong=(work.strong, work.weak),
                keep=work.keep,
            )
        )
        changed = cut < 2 and readmit(work)
        step = motion(work.fit.T_ref_grid, work.metric)
        moved = float(np.linalg.norm(step[:3]) + np.linalg.norm(step[3:]))
        if not changed and moved < SETTLED * work.fit.standard_error():
            break
    if not work.fit.converged:
        raise RegistrationError(
            explain(
                "registration",
                f"convergence within {options.max_iterations} iterations at one level",
                f"a last step of {work.fit.step * 1e3:.3g} mm against a standard error of "
                f"{work.fit.standard_error() * 1e3:.3g} mm",
                "raise max_iterations or name stable ground",
            )
        )
