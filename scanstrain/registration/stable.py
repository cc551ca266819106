# SPDX-License-Identifier: MIT
"""Stable ground: which patches of the surface share one rigid motion, and what else could be true."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.fit import MIN_SCALE, TUKEY, biweight, robust_scale
from scanstrain.registration.match import Metric, Rows
from scanstrain.registration.surfaces import Surface
from scanstrain.registration.weak import reach

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

DRAWS = 600
"""Random starts: with 40 % of the surface moved, one draw of 6 patches in 21 is clean, so about 28 are."""
CORE, CORE_QUANTILE = 0.35, 0.4538
"""Share of the patches that a trimmed fit rests on, so that a group of 40 % can win whole, and the normal quantile
within which that share of the errors lies."""
AGREES = 3.0
"""A patch agrees with a motion within this many robust standard deviations."""
MIN_PATCH, MAX_PATCH = 0.5, 1.0
"""Patch width [m]: longer than the usual correlation of scan errors, shorter than the usual moved area."""
WANTED_PATCHES = 40
"""Smaller objects are cut into smaller patches, so that at least about so many are left."""
CLEAR_SHARE = 0.65
"""Below this share of agreeing surface, what moved and what stood still is a matter of opinion."""
SCATTER_ROUNDS = 3
"""Rounds of weighting down odd blocks inside the patches."""
SAMPLE = 1000
"""Patches that random starts are scored on."""


@dataclass(frozen=True, slots=True)
class Patches:
    """One mean observation per patch.

    Parameters
    ----------
    row : ndarray of shape (g, 6)
        Weighted mean row in metric unknowns.
    residual : ndarray of shape (g,)
        Weighted mean residual [m].
    sd : ndarray of shape (g,)
        Its standard deviation from the scatter inside the patches [m].
    blocks : ndarray of shape (g,)
        Matched blocks, a measure of area; 0 for patches without one and for those that are torn.
    """

    row: FloatArray
    residual: FloatArray
    sd: FloatArray
    blocks: FloatArray


@dataclass(frozen=True, slots=True)
class Ground:
    """Patches that were chosen as stable.

    Parameters
    ----------
    stable : ndarray of shape (g,), bool
        Per patch.
    motion : ndarray of shape (6,)
        Step to the motion of the stable patches, metric unknowns [m].
    scale : float
        Robust standard deviation of the stable patches' standardised residuals [1].
    share : float
        Stable share of the matched surface.
    second_share : float
        Share of the largest group of the others that moved as one.
    second_shift : float
        What the result would change at the worst place, were that group the stable one [m].
    """

    stable: BoolArray
    motion: FloatArray
    scale: float
    share: float
    second_share: float = 0.0
    second_shift: float = 0.0


def patch_of_blocks(surface: Surface) -> tuple[IntArray, int]:
    """Number the patch of every block: a square column along the axis that the normal follows, cut at gaps.

    Returns
    -------
    index : ndarray of shape (b,), int64
    count : int
    """
    width = patch_width(surface)
    centre, facing = surface.cells.centre, np.abs(surface.cells.normal).argmax(axis=1)
    along = centre[np.arange(len(centre)), facing]
    column = np.floor(centre / width).astype(np.int64)
    column[np.arange(len(centre)), facing] = 0
    order = np.lexsort((along, *column.T, facing))
    same = (np.diff(column[order], axis=0) == 0).all(axis=1) & (np.diff(facing[order]) == 0)
    # Cut along the normal only where there is a gap: a fixed cut would sort blocks by the sign of their noise.
    new = np.r_[False, ~same | (np.diff(along[order]) > width / 2)]
    index = np.empty(len(centre), np.int64)
    index[order] = np.cumsum(new)
    return index, int(index.max()) + 1


def patch_width(surface: Surface) -> float:
    """Choose the patch width [m] from the area of the surface and its blocks."""
    area = surface.flat() * surface.width**2
    wanted = min(max(MIN_PATCH, np.sqrt(area / 200)), MAX_PATCH)
    return float(max(min(wanted, np.sqrt(area / WANTED_PATCHES)), 2 * surface.width))


def make_patches(rows: Rows, index: IntArray, count: int) -> Patches:
    """Average the rows of each patch, with single odd blocks in a patch weighted down.

    Parameters
    ----------
    rows : Rows
        Of all matches.
    index : ndarray of shape (b,), int64
        Patch of every reference block.
    count : int
        Number of patches.
    """
    mine = index[rows.block]
    blocks = np.bincount(mine, minlength=count).astype(float)
    spare = np.maximum(blocks - 3, 0)[mine]
    judge = spare > 0
    weight = 1 / rows.sd**2
    scale = np.inf
    for _ in range(SCATTER_ROUNDS):
        inside = (rows.residual - _trend(rows, mine, weight, count)) / rows.sd
        z = inside[judge] * np.sqrt(blocks[mine] / np.maximum(spare, 1))[judge]
        scale = max(min(scale, robust_scale(z)), MIN_SCALE) if len(z) else 1.0
        weight = np.where(judge, biweight(inside / (TUKEY * scale)), 1.0) / rows.sd**2
    summed = np.maximum(np.bincount(mine, weight, minlength=count), 1e-300)
    row = np.stack([np.bincount(mine, weight * rows.row[:, a], minlength=count) for a in range(6)], axis=1)
    return Patches(
        row=row / summed[:, None],
        residual=np.bincount(mine, weight * rows.residual, minlength=count) / summed,
        sd=scale / np.sqrt(summed),
        blocks=np.where(_even(rows, mine, weight, blocks), blocks, 0.0),
    )


def _even(rows: Rows, patch: IntArray, weight: FloatArray, blocks: FloatArray) -> BoolArray:
    """Patches that are mostly of one piece: one that a moved part only half covers belongs to neither side."""
    kept = np.bincount(patch, weight * rows.sd**2, minlength=len(blocks))
    return np.asarray(kept >= blocks / 2)


def _trend(rows: Rows, patch: IntArray, weight: FloatArray, count: int) -> FloatArray:
    """Plane through the residuals of every patch, at the blocks [m].

    A patch that is tilted, by a wrong pose or by deformation, is not a noisy patch.
    """
    summed = np.maximum(np.bincount(patch, weight, minlength=count), 1e-300)
    middle = np.stack([np.bincount(patch, weight * rows.place[:, a], minlength=count) for a in range(3)], axis=1)
    x = np.concatenate([rows.place - (middle / summed[:, None])[patch], np.ones((len(patch), 1))], axis=1)
    N, right = np.empty((count, 4, 4)), np.empty((count, 4))
    for a in range(4):
        right[:, a] = np.bincount(patch, weight * x[:, a] * rows.residual, minlength=count)
        for b in range(4):
            N[:, a, b] = np.bincount(patch, weight * x[:, a] * x[:, b], minlength=count)
    # The ridge stands for the third dimension, in which a patch has no extent.
    ridge = 1e-6 * np.trace(N, axis1=1, axis2=2) + 1e-300
    solved = np.linalg.solve(N + ridge[:, None, None] * np.eye(4), right[..., None])[..., 0]
    return np.asarray((x * solved[patch]).sum(axis=1))


def choose_ground(patches: Patches, strong: FloatArray, metric: Metric, places: FloatArray, seed: int) -> Ground:
    """Find the patches that stood still, as the largest group that shares one rigid motion.

    Starts from the plain fit of all, from the present motion and from random small sets of patches (least quantile of
    squares, Rousseeuw 1984, as a start only). Each is refined by least trimmed squares, then by redescending weights
    under a scale that only falls. Then the patches that disagree are searched for a second group.

    Parameters
    ----------
    patches : Patches
    strong : ndarray of shape (6, r)
        Motions to consider.
    metric : Metric
    places : ndarray of shape (m, 3)
        Matched places, to say what a second group would change [m].
    seed : int
        Of the random starts.

    Returns
    -------
    Ground
    """
    rng = np.random.default_rng(seed)
    present = patches.blocks > 0
    first, scale = _search(patches, present, strong, rng)
    off = np.abs(_misfit(patches, strong, first)) / scale
    stable = present & (off < AGREES)
    area = patches.blocks.sum()
    ground = Ground(
        stable=stable,
        motion=strong @ first,
        scale=scale,
        share=float(patches.blocks[stable].sum() / area),
    )
    rest = present & (off > 1.5 * AGREES)
    if rest.sum() < 2 * strong.shape[1] + 2:
        return ground
    second, _ = _search(patches, rest, strong, rng)
    agrees = present & ~stable & (np.abs(_misfit(patches, strong, second)) / scale < AGREES)
    change = strong @ (second - first)
    size = float(np.linalg.norm(change))
    shift = size * float(reach((change / max(size, 1e-300))[:, None], places, metric)[0])
    return Ground(
        stable=stable,
        motion=ground.motion,
        scale=scale,
        share=ground.share,
        second_share=float(patches.blocks[agrees].sum() / area),
        second_shift=shift,
    )


def agreeing(patches: Patches, scale: float) -> BoolArray:
    """Patches whose residual at the present motion is within the agreement limit."""
    return np.asarray((patches.blocks > 0) & (np.abs(patches.residual) < AGREES * scale * patches.sd))


def _misfit(patches: Patches, strong: FloatArray, y: FloatArray) -> FloatArray:
    return np.asarray((patches.residual - patches.row @ (strong @ y)) / patches.sd)


def _search(
    patches: Patches, among: BoolArray, strong: FloatArray, rng: np.random.Generator
) -> tuple[FloatArray, float]:
    """Return the motion (r,) that most of the patches agree on, and the scale of their agreement."""
    A = (patches.row[among] @ strong) / patches.sd[among, None]
    b = patches.residual[among] / patches.sd[among]
    area = patches.blocks[among]
    starts = [np.zeros(A.shape[1]), _solve(A, b, np.ones(len(b))), *_random_starts(A, b, rng)]
    refined = [_refine(A, b, start) for start in starts]
    # One yardstick for all: a hypothesis that is loose everywhere must not win by its own wide scale.
    yardstick = min(scale for _, scale in refined)
    support = [float((area * biweight((b - A @ y) / (AGREES * yardstick))).sum()) for y, _ in refined]
    best = int(np.argmax(support))
    return refined[best]


def _random_starts(A: FloatArray, b: FloatArray, rng: np.random.Generator, best: int = 5) -> list[FloatArray]:
    m, r = A.shape
    if m <= r:
        return []
    draws = np.argsort(rng.random((DRAWS, min(m, SAMPLE))), axis=1)[:, :r]
    sample = rng.permutation(m)[:SAMPLE]
    sets, target = A[sample][draws], b[sample][draws]
    normal = np.einsum("dki,dkj->dij", sets, sets)
    ridge = 1e-9 * np.trace(normal, axis1=1, axis2=2)[:, None, None] * np.eye(r)
    y = np.linalg.solve(normal + ridge, np.einsum("dki,dk->di", sets, target)[..., None])[..., 0]
    off = np.abs(b[sample][None] - np.einsum("mi,di->dm", A[sample], y))
    rank = int(CORE * off.shape[1])
    score = np.partition(off, rank, axis=1)[:, rank]
    return list(y[np.argsort(score, kind="stable")[:best]])


def _refine(A: FloatArray, b: FloatArray, y: FloatArray) -> tuple[FloatArray, float]:
    """Least trimmed squares steps, then redescending weights under a falling scale not below the patch noise."""
    core = min(int(CORE * len(b)) + A.shape[1] + 1, len(b))
    for _ in range(10):
        nearest = np.argsort(np.abs(b - A @ y), kind="stable")[:core]
        weight = np.zeros(len(b))
        weight[nearest] = 1.0
        y = _solve(A, b, weight)
    scale = max(float(np.sort(np.abs(b - A @ y))[core - 1]) / CORE_QUANTILE, 1.0)
    for _ in range(30):
        z = b - A @ y
        inside = np.abs(z) < AGREES * scale
        scale = max(1.0, min(scale, robust_scale(z[inside])))
        y = _solve(A, b, biweight(z / (TUKEY * scale)))
    return y, scale


def _solve(A: FloatArray, b: FloatArray, weight: FloatArray) -> FloatArray:
    N = A.T @ (weight[:, None] * A)
    ridge = 1e-12 * max(float(np.trace(N)), 1e-300) * np.eye(len(N))
    return np.asarray(np.linalg.solve(N + ridge, A.T @ (weight * b)))
