# SPDX-License-Identifier: MIT
"""Stable ground: which patches of the surface share one rigid motion, and what else could be true."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.fit import TUKEY, biweight, robust_scale
from scanstrain.registration.match import Metric
from scanstrain.registration.patches import Patches
from scanstrain.registration.weak import reach

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

DRAWS = 600
"""Random starts: with 40 % of the surface moved, one draw of 6 patches in 21 is clean, so about 28 are."""
CORE, CORE_QUANTILE = 0.35, 0.4538
"""Share of the patches that a trimmed fit rests on, so that a group of 40 % can win whole, and the normal quantile
within which that share of the errors lies."""
AGREES = 3.0
"""A patch agrees with a motion within this many robust standard deviations."""
CLEAR_SHARE = 0.65
"""Below this share of agreeing surface, what moved and what stood still is a matter of opinion."""
SAMPLE = 1000
"""Patches that random starts are scored on."""
RIVAL = 0.45
"""A second group of this part of the first one's area could as well be the stable one."""
STRONGER = 1.5
"""A rival that fixes the motion this many times better takes the place of a larger group: ground on two ends of an
object is a datum, a bulge between them is none."""


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """A pose that could be the right one, and what the patches say about it.

    Parameters
    ----------
    motion : ndarray of shape (6,)
        From the present pose, metric unknowns [m].
    patches : Patches
        Of the matches at that pose.
    """

    motion: FloatArray
    patches: Patches


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
    by_strength : bool
        Whether a smaller group was chosen because it fixes the motion much better than the largest one.
    """

    stable: BoolArray
    motion: FloatArray
    scale: float
    share: float
    second_share: float = 0.0
    second_shift: float = 0.0
    by_strength: bool = False

    @property
    def has_rival(self) -> bool:
        """Whether another group could as well be the stable one."""
        return self.second_share > RIVAL * self.share


def choose_ground(
    hypotheses: Sequence[Hypothesis],
    strong: FloatArray,
    metric: Metric,
    places: FloatArray,
    *,
    limit: float,
    seed: int,
) -> Ground:
    """Find the patches that stood still: a group that shares one rigid motion.

    Each hypothesis is refined from the plain fit of all its patches, from its own pose and from random small sets of
    patches (least quantile of squares, Rousseeuw 1984, as a start only), by least trimmed squares, then by
    redescending weights under a scale that only falls. The one with the largest supporting area wins. Then the
    patches that disagree are searched for a second group. Of two groups that rival in size, the one that fixes the
    motion better is taken; otherwise the larger one.

    Parameters
    ----------
    hypotheses : sequence of Hypothesis
        At least one.
    strong : ndarray of shape (6, r)
        Motions to consider.
    metric : Metric
    places : ndarray of shape (m, 3)
        Matched places, to say what a second group would change [m].
    limit : float
        Longest step [m] from the pose of a hypothesis: its matches show nothing beyond the width of a block.
    seed : int
        Of the random starts.

    Returns
    -------
    Ground
    """
    rng = np.random.default_rng(seed)
    first = _best(hypotheses, [h.patches.blocks > 0 for h in hypotheses], strong, limit, rng)
    total = max(float(h.patches.blocks.sum()) for h in hypotheses)
    stable = first.agrees(AGREES)
    ground = Ground(stable, first.motion, first.scale, share=float(first.area[stable].sum()) / total)
    rest = ~first.agrees(1.5 * AGREES)
    left = [(h.patches.blocks > 0) & rest for h in hypotheses]
    if max(each.sum() for each in left) < 2 * strong.shape[1] + 2:
        return ground
    second = _best(hypotheses, left, strong, limit, rng, scale=first.scale)
    others = second.agrees(AGREES) & ~stable
    change = second.motion - first.motion
    size = float(np.linalg.norm(change))
    shift = size * float(reach((change / max(size, 1e-300))[:, None], places, metric)[0])
    share = float(second.area[others].sum()) / total
    ground = replace(ground, second_share=share, second_shift=shift)
    loose = [
        _looseness(fit.patches, group, strong, metric, places) for fit, group in ((first, stable), (second, others))
    ]
    if not (ground.has_rival and loose[0] > STRONGER * loose[1]):
        return ground
    taken = second.agrees(AGREES)
    share = float(second.area[taken].sum()) / total
    return Ground(taken, second.motion, second.scale, share, ground.share, shift, by_strength=True)


@dataclass(frozen=True, slots=True)
class _Candidate:
    """A refined hypothesis: its patches, motion (6,), standardised misfits (g,) and robust scale."""

    patches: Patches
    motion: FloatArray
    misfit: FloatArray
    scale: float

    @property
    def area(self) -> FloatArray:
        return self.patches.blocks

    def agrees(self, limit: float) -> BoolArray:
        return np.asarray((self.area > 0) & (np.abs(self.misfit) < limit * self.scale))


def _best(
    hypotheses: Sequence[Hypothesis],
    among: Sequence[BoolArray],
    strong: FloatArray,
    limit: float,
    rng: np.random.Generator,
    scale: float | None = None,
) -> _Candidate:
    """Refine every hypothesis on some of its patches and return the one with the largest supporting area."""
    found = []
    for hypothesis, use in zip(hypotheses, among, strict=True):
        if use.sum() <= strong.shape[1]:
            continue
        patches = hypothesis.patches
        y, spread = _search(patches, use, strong, limit, rng)
        misfit = (patches.residual - patches.row @ (strong @ y)) / patches.sd
        found.append((use, _Candidate(patches, hypothesis.motion + strong @ y, misfit, scale or spread)))
    # One yardstick for all: a hypothesis that is loose everywhere must not win by its own wide scale.
    yardstick = AGREES * min(candidate.scale for _, candidate in found)
    support = [float((c.area * biweight(c.misfit / yardstick))[use].sum()) for use, c in found]
    return found[int(np.argmax(support))][1]


def _looseness(patches: Patches, group: BoolArray, strong: FloatArray, metric: Metric, places: FloatArray) -> float:
    """Largest standard error [m] at any matched place of the motion that a group fixes, per unit of patch noise."""
    A = (patches.row[group] @ strong) / patches.sd[group, None]
    values, vectors = np.linalg.eigh(A.T @ A)
    far = reach(strong @ vectors, places, metric)
    return float((far / np.sqrt(np.maximum(values, 1e-300))).max())


def agreeing(patches: Patches, scale: float) -> BoolArray:
    """Patches whose residual at the present motion is within the agreement limit."""
    return np.asarray((patches.blocks > 0) & (np.abs(patches.residual) < AGREES * scale * patches.sd))


def _search(
    patches: Patches, among: BoolArray, strong: FloatArray, limit: float, rng: np.random.Generator
) -> tuple[FloatArray, float]:
    """Return the step (r,) that most of the patches agree on, and the scale of their agreement."""
    A = (patches.row[among] @ strong) / patches.sd[among, None]
    b = patches.residual[among] / patches.sd[among]
    area = patches.blocks[among]
    starts = [np.zeros(A.shape[1]), _solve(A, b, np.ones(len(b))), *_random_starts(A, b, rng)]
    refined = [_refine(A, b, start) for start in starts]
    near = [(y, scale) for y, scale in refined if np.linalg.norm(y[:3]) + np.linalg.norm(y[3:]) <= limit]
    refined = near or [(np.zeros(A.shape[1]), max(1.0, robust_scale(b)))]
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
    core = min(max(int(CORE * len(b)), A.shape[1] + 2), len(b))
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
