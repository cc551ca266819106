# SPDX-License-Identifier: MIT
"""Where two intensity images agree best over a range of motions, and whether only there."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import find_block
from scanstrain.linalg import rotation_matrix
from scanstrain.registration.match import Metric
from scanstrain.registration.rigid import inverse
from scanstrain.registration.texture_image import Image, blocks_of, voxel_means

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MOST_TRIALS = 5000
"""Motions that are tried at once: with three open motions the first steps are then some 40 mm."""
BEYOND = 1.1
"""The search reaches a little beyond the capture range, so that a peak at its end is seen whole."""
FINEST_CELLS = 1.0
"""Least step in cells."""
MIN_SHARED = 0.3
"""Part of the places that the other epoch must show for a motion to be judged."""
RIVAL = 0.6
"""A second peak of this part of the best one makes the answer ambiguous; it also ends the best peak's own lobe."""
MIN_SIGNIFICANCE = 7.0
"""Least height of the peak in robust standard deviations of the agreement elsewhere; pure noise reaches 5 in
thousands of trials."""


@dataclass(frozen=True, slots=True)
class Peak:
    """The motion at which two images agree best.

    Parameters
    ----------
    at : ndarray of shape (k,)
        Motion along every direction, at the place moved most [m].
    height : float
        Correlation there [1].
    significant : bool
        Whether it stands out from the agreement elsewhere.
    repeats : ndarray of shape (k,), bool
        Directions along which another motion agrees nearly as well.
    """

    at: FloatArray
    height: float
    significant: bool
    repeats: BoolArray


def search(
    mine: Image,
    theirs: Image,
    places: FloatArray,
    T: FloatArray,
    units: FloatArray,
    metric: Metric,
    capture_range: float,
) -> Peak:
    """Try motions all over the capture range, then ever finer ones around the best.

    Score: normalised cross-correlation of voxel means of both images (Lewis 1995, from memory) at sampled places.

    Parameters
    ----------
    mine, theirs : Image
        Of the reference and the current epoch.
    places : ndarray of shape (n, 3)
        Reference places to compare at [m].
    T : ndarray of shape (4, 4)
        Current to reference at the middle of the range.
    units : ndarray of shape (6, k)
        Open motions, in metric unknowns, each of one metre at the place that it moves most.
    metric : Metric
    capture_range : float
        [m]

    Returns
    -------
    Peak
    """
    k = units.shape[1]
    finest = FINEST_CELLS * mine.cells.resolution
    span = BEYOND * capture_range
    side = max(int(MOST_TRIALS ** (1 / k)) // 2, 1)
    step = max(finest, span / side)
    ticks = np.arange(-int(span / step), int(span / step) + 1) * step
    shape = (len(ticks),) * k
    grid = np.stack(np.meshgrid(*[ticks] * k, indexing="ij"), axis=-1).reshape(-1, k)
    score = _scorer(mine, theirs, places, T, units, metric, max(step, finest))
    scores = score(grid).reshape(shape)
    best = grid[int(scores.argmax())]
    height, spread = float(scores.max()), float(np.median(np.abs(scores - np.median(scores)))) * 1.4826
    significant = height - float(np.median(scores)) > MIN_SIGNIFICANCE * spread and height > 0
    repeats = np.array([_repeats(scores.max(axis=tuple(a for a in range(k) if a != j))) for j in range(k)])
    while step > finest:
        step = max(step / 2, finest)
        score = _scorer(mine, theirs, places, T, units, metric, max(step, finest))
        near = best + np.stack(np.meshgrid(*[[-step, 0.0, step]] * k, indexing="ij"), axis=-1).reshape(-1, k)
        best = near[int(score(near).argmax())]
    # Patterns that repeat within the first steps show only along fine lines through the best motion.
    lines = np.arange(-int(2 * span / finest), int(2 * span / finest) + 1) * finest
    for j in range(k):
        line = np.tile(best, (len(lines), 1))
        line[:, j] = best[j] + lines
        repeats[j] |= _repeats(score(line[np.abs(line[:, j]) <= span]))
    return Peak(best, height, significant, repeats)


def _repeats(profile: FloatArray) -> bool:
    """Whether a profile reaches its peak's height nearly again outside the peak's own lobe, or never leaves it."""
    top = int(profile.argmax())
    low = profile < RIVAL * profile[top]
    if not low[:top].any() and not low[top:].any():
        return True
    # The lobe ends where the profile falls below the limit; at the end of the range it may be cut.
    left = top - int(low[:top][::-1].argmax()) if low[:top].any() else 0
    right = top + int(low[top:].argmax()) if low[top:].any() else len(profile)
    return not bool(low[:left].all() and low[right:].all())


def poses(T: FloatArray, motions: FloatArray, metric: Metric) -> FloatArray:
    """Return reference to current (n, 3, 4) after steps (n, 6) in metric unknowns on top of `T`; see `rigid.about`."""
    H = rotation_matrix(motions[:, :3] / (2 * metric.arm))
    R = H @ H
    t = np.einsum("nij,nj->ni", H, motions[:, 3:]) + metric.pivot - R @ metric.pivot
    back = inverse(T)
    turned = back[:3, :3] @ R.transpose(0, 2, 1)
    return np.concatenate([turned, (back[:3, 3] - np.einsum("nij,nj->ni", turned, t))[:, :, None]], axis=2)


def _scorer(
    mine: Image,
    theirs: Image,
    places: FloatArray,
    T: FloatArray,
    units: FloatArray,
    metric: Metric,
    width: float,
) -> Callable[[FloatArray], FloatArray]:
    """Prepare voxel means of a width [m]; the result maps motions (n, k) to correlations (n,)."""
    keys, means = voxel_means(mine, width)
    voxel = blocks_of(places, keys, width)
    value = np.where(voxel >= 0, means[voxel], 0.0)
    keys, means = voxel_means(theirs, width)

    def score(c: FloatArray) -> FloatArray:
        out = np.empty(len(c))
        _correlate(places, value, np.ascontiguousarray(poses(T, c @ units.T, metric)), keys, means, width, out)
        return out

    return score


@numba.njit(cache=True, nogil=True, parallel=True)
def _correlate(
    places: FloatArray,
    value: FloatArray,
    T: FloatArray,
    keys: IntArray,
    means: FloatArray,
    width: float,
    out: FloatArray,
) -> None:
    """Correlation of values at places with voxel means at the moved places, 0 where too few are met."""
    for g in numba.prange(len(T)):
        m, aa, bb, ab = 0, 0.0, 0.0, 0.0
        for p in range(len(places)):
            x = T[g, 0, 0] * places[p, 0] + T[g, 0, 1] * places[p, 1] + T[g, 0, 2] * places[p, 2] + T[g, 0, 3]
            y = T[g, 1, 0] * places[p, 0] + T[g, 1, 1] * places[p, 1] + T[g, 1, 2] * places[p, 2] + T[g, 1, 3]
            z = T[g, 2, 0] * places[p, 0] + T[g, 2, 1] * places[p, 1] + T[g, 2, 2] * places[p, 2] + T[g, 2, 3]
            b = find_block(keys, width, x, y, z)
            if b < 0:
                continue
            m += 1
            aa += value[p] * value[p]
            bb += means[b] * means[b]
            ab += value[p] * means[b]
        out[g] = ab / np.sqrt(aa * bb) if m >= MIN_SHARED * len(places) and aa * bb > 0 else 0.0
