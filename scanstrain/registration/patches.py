# SPDX-License-Identifier: MIT
"""Patches: pieces of the surface whose rows are averaged, so that errors which neighbours share count once."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.fit import MIN_SCALE, TUKEY, biweight, robust_scale
from scanstrain.registration.match import Rows
from scanstrain.registration.surfaces import Surface

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MIN_PATCH, MAX_PATCH = 0.5, 1.0
"""Patch width [m]: longer than the usual correlation of scan errors, shorter than the usual moved area."""
WANTED_PATCHES = 40
"""Smaller objects are cut into smaller patches, so that at least about so many are left."""
SCATTER_ROUNDS = 3
"""Rounds of weighting down odd blocks inside the patches."""


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
