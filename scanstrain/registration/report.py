# SPDX-License-Identifier: MIT
"""From the finished fit to the result: covariance, stable points, overlap, scale, words."""

from __future__ import annotations

from collections.abc import Callable

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import find_block
from scanstrain.epoch import Epoch
from scanstrain.registration.covariance import estimate, full_covariance, physical
from scanstrain.registration.match import nearest
from scanstrain.registration.options import Options
from scanstrain.registration.result import Registration, StableBlocks, StableGround
from scanstrain.registration.scale import scale_ppm
from scanstrain.registration.stable import Ground
from scanstrain.registration.start import GivenStart, held_covariance
from scanstrain.registration.surfaces import UNUSABLE, USABLE, Surface
from scanstrain.registration.texture_report import name_textured, texture_words, with_texture
from scanstrain.registration.weak import name_directions, reach, separate
from scanstrain.registration.words import doubts
from scanstrain.registration.work import Work

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


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
    far = reach(weak, fit.rows.place[used], work.metric)
    held = held_covariance(options.start, weak, far, work.metric, options.capture_range)
    covariance = full_covariance(solved, work.strong, weak, held)
    directions = name_directions(weak, fit.rows, used, far * np.sqrt(np.diag(held)))
    named = ((), ()) if work.texture is None else name_textured(work.texture, fit.rows, used, work.metric)
    if work.texture is not None:
        covariance = with_texture(work.texture, solved, work.strong, weak, held)
    scale, scale_sd = (
        scale_ppm(fit, work.patch, work.patches, work.metric, work.strong) if work.scale_known else (np.nan, np.nan)
    )
    blocks = _stable_blocks(work)
    stable = on_stable_ground(blocks, reference.points)
    if options.candidates is not None:
        stable &= options.candidates
    overlap = _overlap(whole, work.current, fit.T_ref_grid)
    ground = _stable_ground(work.ground, options)
    return Registration(
        T_ref_cur=work.T,
        origin=np.array(reference.origin, dtype=np.float64),
        pivot=work.metric.pivot,
        covariance=physical(covariance, work.metric),
        rms=float(np.sqrt((fit.weight * fit.rows.residual**2).sum() / fit.weight.sum())),
        stable=stable,
        blocks=blocks,
        overlap=overlap,
        scale_ppm=scale,
        scale_ppm_sd=scale_sd,
        weak_directions=directions,
        texture_directions=named[0],
        converged=fit.converged,
        iterations=work.iterations,
        start=started,
        targets=options.start.targets if isinstance(options.start, GivenStart) else None,
        ground=ground,
        warnings=(*doubts(ground, directions, overlap), *texture_words(*named)),
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


def _stable_blocks(work: Work) -> StableBlocks:
    """Blocks in a stable patch, without those that were left out as odd or found no partner."""
    surface, rows = work.reference, work.fit.rows
    ground = np.zeros(work.patches, bool)
    ground[work.patch[rows.block[work.fit.weight > 0]]] = True
    good = ground[work.patch] & (surface.state != USABLE)
    good[rows.block] = work.fit.weight > 0
    return StableBlocks(surface.cells.key, surface.width, good)


def on_stable_ground(blocks: StableBlocks, points: FloatArray) -> BoolArray:
    """Say which points (n, 3) lie in stable blocks."""
    block = _block_of_points(points, blocks.key, blocks.width)
    return np.asarray((block >= 0) & blocks.good[block])


def steady_places(registration: Registration) -> Callable[[FloatArray], BoolArray] | None:
    """Return what says of places (n, 3) [m] whether they do not lie in a block that moved; None if nothing is known."""
    blocks = registration.blocks
    if blocks is None:
        return None

    def steady(places: FloatArray) -> BoolArray:
        block = _block_of_points(places, blocks.key, blocks.width)
        return np.asarray((block < 0) | blocks.good[block])

    return steady


def _stable_ground(ground: Ground | None, options: Options) -> StableGround | None:
    if ground is None:
        return None
    chosen_by = options.stable if isinstance(options.stable, str) else "given"
    return StableGround(chosen_by, ground.share, ground.second_share, ground.second_shift, ground.by_strength)
