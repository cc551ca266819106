# SPDX-License-Identifier: MIT
"""From the finished fit to the result: covariance, stable points, overlap, scale, words."""

from __future__ import annotations

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import find_block
from scanstrain.epoch import Epoch
from scanstrain.registration.covariance import estimate, full_covariance, physical
from scanstrain.registration.match import nearest
from scanstrain.registration.options import Options
from scanstrain.registration.result import Registration, WeakDirection
from scanstrain.registration.scale import scale_ppm
from scanstrain.registration.stable import CLEAR_SHARE, Ground
from scanstrain.registration.surfaces import UNUSABLE, USABLE, Surface
from scanstrain.registration.weak import name_directions, reach, separate
from scanstrain.registration.work import Work

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

START_SIGMAS = 3.0
"""The capture range is taken as the three-sigma limit of the start along directions that stay at the start."""
RIVAL = 0.45
"""A second group of this part of the first one's area could as well be the stable one."""
LOW_OVERLAP = 0.3
"""Share of the reference surface below which the overlap is worth a warning."""


def assemble(work: Work, whole: Surface, reference: Epoch, options: Options, started: str) -> Registration:
    """Make the result of a finished fit.

    Parameters
    ----------
    work : Work
    whole : Surface
        Finest level of the whole reference epoch, stable or not.
    reference : Epoch
    options : Options
    started : str
        Where the fine fit began.

    Returns
    -------
    Registration
    """
    fit = work.fit
    basis = np.concatenate([work.strong, np.zeros((1, work.strong.shape[1]))])
    _, solved, _ = estimate(fit, work.patch, work.patches, basis)
    used = fit.weight > 0
    weak = separate(work.weak)
    held_sd = options.capture_range / START_SIGMAS
    weak_sd = held_sd / reach(weak, fit.rows.place[used], work.metric)
    covariance = full_covariance(solved, work.strong, weak, weak_sd)
    sd = np.full(weak.shape[1], held_sd)
    directions = name_directions(weak, fit.rows, used, sd)
    scale, scale_sd = (
        scale_ppm(fit, work.patch, work.patches, work.metric, work.strong) if work.scale_known else (np.nan, np.nan)
    )
    overlap = _overlap(whole, work.current, fit.T_ref_grid)
    return Registration(
        T_ref_cur=work.T,
        origin=np.array(reference.origin, dtype=np.float64),
        pivot=work.metric.pivot,
        covariance=physical(covariance, work.metric),
        rms=float(np.sqrt((fit.weight * fit.rows.residual**2).sum() / fit.weight.sum())),
        stable=_stable_points(work, reference.points, options),
        overlap=overlap,
        scale_ppm=scale,
        scale_ppm_sd=scale_sd,
        weak_directions=directions,
        converged=fit.converged,
        iterations=work.iterations,
        start=started,
        warnings=tuple(_warnings(work.ground, directions, overlap)),
    )


def _overlap(reference: Surface, current: Surface, T_ref_grid: FloatArray) -> float:
    """Share of reference blocks that have a current block within one block width."""
    other = nearest(reference, current, T_ref_grid, min_cosine=-1.0)
    shown = reference.state != UNUSABLE
    met = shown & (other >= 0)
    theirs = current.cells.centre[other[met]] @ T_ref_grid[:3, :3].T + T_ref_grid[:3, 3]
    near = np.linalg.norm(reference.cells.centre[met] - theirs, axis=1) < reference.width
    return float(near.sum() / max(int(shown.sum()), 1))


@numba.njit(cache=True, nogil=True)
def _block_of_points(points: FloatArray, keys: NDArray[np.int64], size: float) -> NDArray[np.int64]:
    """Block of every point, -1 without one.

    Blocks hold points as projected onto the surface, so a point whose own voxel is empty is looked for a quarter of a
    block further along the axes.
    """
    out = np.empty(len(points), np.int64)
    for p in range(len(points)):
        x, y, z = points[p, 0], points[p, 1], points[p, 2]
        found = find_block(keys, size, x, y, z)
        step = 0
        while found < 0 and step < 6:
            shift = size / 4 if step % 2 == 0 else -size / 4
            axis = step // 2
            found = find_block(
                keys,
                size,
                x + (shift if axis == 0 else 0.0),
                y + (shift if axis == 1 else 0.0),
                z + (shift if axis == 2 else 0.0),
            )
            step += 1
        out[p] = found
    return out


def _stable_points(work: Work, points: FloatArray, options: Options) -> BoolArray:
    """Points in a stable patch, without those in blocks that were left out as odd or found no partner."""
    surface, rows = work.reference, work.fit.rows
    ground = np.zeros(work.patches, bool)
    ground[work.patch[rows.block[work.fit.weight > 0]]] = True
    good = ground[work.patch] & (surface.state != USABLE)
    good[rows.block] = work.fit.weight > 0
    block = _block_of_points(points, surface.cells.key, surface.width)
    stable = (block >= 0) & good[block]
    if isinstance(options.stable, np.ndarray):
        stable &= options.stable
    return np.asarray(stable)


def _warnings(ground: Ground | None, weak: tuple[WeakDirection, ...], overlap: float) -> list[str]:
    said = []
    if ground is not None and ground.second_share > RIVAL * ground.share:
        said.append(
            f"stable ground is ambiguous: {ground.share:.0%} of the matched surface shares one motion and "
            f"{ground.second_share:.0%} shares another; if the second group were the stable one, displacements would "
            f"change by up to {ground.second_shift * 1e3:.1f} mm: name stable ground to be sure"
        )
    elif ground is not None and ground.share < CLEAR_SHARE:
        said.append(
            f"only {ground.share:.0%} of the matched surface shares one rigid motion; with about half of it moved "
            "nothing but named stable ground can tell which half: check the stable area"
        )
    if weak:
        names = "; ".join(direction.description for direction in weak)
        said.append(f"the surfaces do not fix these motions, which were held at the start value: {names}")
    if overlap < LOW_OVERLAP:
        said.append(f"the current epoch shows only {overlap:.0%} of the reference surface")
    return said
