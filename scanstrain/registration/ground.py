# SPDX-License-Identifier: MIT
"""Stable ground in a registration at work: poses that could be right, the choice among them, and second thoughts."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OverlapError, RegistrationError, explain
from scanstrain.registration.fit import MIN_MATCHES, Fit, align, metric_of, motion, rough, step_of
from scanstrain.registration.options import Options
from scanstrain.registration.patches import Patches, make_patches
from scanstrain.registration.rigid import inverse
from scanstrain.registration.stable import Ground, Hypothesis, agreeing, choose_ground
from scanstrain.registration.work import Work

BoolArray = NDArray[np.bool_]

MIN_PATCHES, MIN_SHARE = 6, 0.1
"""Fewer stable patches, or less of the surface, are no ground to stand on."""
CLEAR, CLEAR_SCALE = 0.8, 2.0
"""Where this share of the surface agrees on one motion within this many times its own noise, nothing else could be."""
STRIPS = 4
"""Strips along each of the two longest extents that propose a motion of their own: a quarter of the surface lies
whole on either side of most boundaries between what moved and what did not."""
LONG_ENOUGH = 0.4
"""An extent below this part of the longest one is not cut."""


def find_ground(work: Work, options: Options) -> None:
    """Choose stable patches and fit them alone; ground that the user named is only judged.

    Raises
    ------
    RegistrationError
        Too little of the surface shares one motion.
    """
    hypotheses = [Hypothesis(np.zeros(6), _patches(work, work.fit))]
    work.ground = _choose(work, hypotheses, options)
    if work.ground.share < CLEAR or work.ground.scale > CLEAR_SCALE:
        # The fit of everything is a compromise, whose wrong matches hide what the parts really did.
        hypotheses += _regional(work)
        work.ground = _choose(work, hypotheses, options)
    if isinstance(options.stable, str) and options.stable == "auto":
        _check(work.ground, hypotheses[0].patches)
        work.T = step_of(work.ground.motion, work.metric) @ work.T
        work.keep = work.ground.stable[work.patch]
    work.take(
        align(
            work.reference,
            work.current,
            work.pose,
            metric=work.metric,
            keep=work.keep,
            **rough(work.reference, options.max_iterations),
        )
    )
    work.metric = metric_of(work.fit.rows.place[work.fit.weight > 0])


def readmit(work: Work) -> bool:
    """Let stable patches leave and others return, by their residuals now; say whether any did.

    Never so many that hardly any is left: then the choice stays as it was.
    """
    if work.keep is None or work.ground is None:
        return False
    agree = agreeing(_patches(work, work.fit), work.ground.scale)
    if agree.sum() < max(MIN_PATCHES, work.ground.stable.sum() / 2):
        return False
    before, work.keep = work.keep, agree[work.patch]
    return not np.array_equal(before, work.keep)


def _patches(work: Work, fit: Fit) -> Patches:
    return make_patches(fit.rows, work.patch, work.patches)


def _choose(work: Work, hypotheses: list[Hypothesis], options: Options) -> Ground:
    return choose_ground(
        hypotheses,
        work.fit.strong,
        work.metric,
        work.fit.rows.place,
        limit=work.reference.width,
        seed=options.seed,
    )


def _regional(work: Work) -> Iterator[Hypothesis]:
    """Fit parts of the surface alone and see what the rest says about each motion."""
    for part in _strips(work):
        try:
            fit = align(
                work.reference,
                work.current,
                work.pose,
                metric=work.metric,
                keep=part,
                **rough(work.reference, 20),
            )
        except OverlapError:
            continue
        yield Hypothesis(motion(fit.T_ref_grid @ inverse(work.pose), work.metric), _patches(work, fit))


def _strips(work: Work) -> Iterator[BoolArray]:
    """Yield quarters of the matched blocks along the longest extents of the surface."""
    centre = work.reference.cells.centre
    matched = centre[work.fit.rows.block]
    _, _, axes = np.linalg.svd(matched - matched.mean(axis=0), full_matrices=False)
    along = centre @ axes.T
    extent = np.ptp(matched @ axes.T, axis=0)
    for axis in range(2):
        if extent[axis] < LONG_ENOUGH * extent[0]:
            continue
        edges = np.quantile(along[work.fit.rows.block, axis], np.linspace(0, 1, STRIPS + 1))
        for low, high in pairwise(edges):
            part = (along[:, axis] >= low) & (along[:, axis] <= high)
            if part[work.fit.rows.block].sum() >= 2 * MIN_MATCHES:
                yield np.asarray(part)


def _check(ground: Ground, seen: Patches) -> None:
    if ground.stable.sum() < MIN_PATCHES or ground.share < MIN_SHARE:
        found = f"{int(ground.stable.sum())} of {int((seen.blocks > 0).sum())} patches, {ground.share:.1%}"
        raise RegistrationError(
            explain(
                "stable ground",
                f"at least {MIN_PATCHES} patches and {MIN_SHARE:.0%} of the matched surface that share one motion",
                found,
                "name stable ground yourself",
            )
        )
