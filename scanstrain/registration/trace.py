# SPDX-License-Identifier: MIT
"""Where a weak motion really goes: the reference surface slid along itself and fitted to where it came from."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OverlapError
from scanstrain.registration.fit import align, motion, step_of
from scanstrain.registration.weak import complement, reach
from scanstrain.registration.work import Work

FloatArray = NDArray[np.float64]

LONGEST, TRIALS = 3.0, 4
"""How far the surface is slid at first [m], and how often that is halved until most of it still meets itself."""
MEETING = 0.6
"""Part of the used surface that must meet itself after the slide."""


def follow(work: Work) -> FloatArray:
    """Refine weak directions so that motion along them leaves the surface in itself.

    Eigenvectors come from noisy normals and are good to some 0.1 mrad. Times the large uncertainty along a weak
    direction that would be a false uncertainty across the surface. Here the reference is moved along each direction
    both ways, the other motions are fitted, and the chord of the two ends is the direction: it rests on block centres
    and a long baseline.

    Parameters
    ----------
    work : Work
        With weak directions from `weak.split`.

    Returns
    -------
    ndarray of shape (6, k)
        Orthonormal basis of the refined weak motions; those that cannot be followed are left as they were.
    """
    strong, places = complement(work.weak), work.fit.rows.place[work.fit.weight > 0]
    far = reach(work.weak, places, work.metric)
    refined = [_chord(work, vector / f, strong) * f for vector, f in zip(work.weak.T, far, strict=True)]
    return np.ascontiguousarray(np.linalg.qr(np.stack(refined, axis=1))[0])


def _chord(work: Work, unit: FloatArray, strong: FloatArray) -> FloatArray:
    """Refine one motion that moves the farthest place by one metre, shape (6,)."""
    length = min(LONGEST, work.metric.arm / 4)
    for _ in range(TRIALS):
        ends = [_slide(work, unit * length * sign, strong) for sign in (1, -1)]
        if ends[0] is not None and ends[1] is not None:
            return np.asarray((ends[0] - ends[1]) / (2 * length))
        length /= 2
    return unit


def _slide(work: Work, vector: FloatArray, strong: FloatArray) -> FloatArray | None:
    """Move the reference along itself and fit the strong motions: where it ends, or None where it left itself."""
    width = work.reference.width
    try:
        fit = align(
            work.reference,
            work.reference,
            step_of(vector, work.metric),
            metric=work.metric,
            budget=np.inf,
            tolerance=1e-6 * width,
            limit=20,
            strong=(strong, work.weak),
            keep=work.keep,
        )
    except OverlapError:
        return None
    if (fit.weight > 0).sum() < MEETING * (work.fit.weight > 0).sum():
        return None
    return _twist(motion(fit.T_ref_grid, work.metric), work.metric.arm)


def _twist(vector: FloatArray, arm: float) -> FloatArray:
    """Velocity of the screw motion that a finite motion follows for one unit of time, metric unknowns (6,).

    A turn by t about a distant axis moves the pivot on an arc; the half-way form of `motion` holds its chord.
    """
    angle = float(np.linalg.norm(vector[:3])) / arm
    if angle == 0.0:
        return vector
    axis: FloatArray = vector[:3] / (arm * angle)
    along = axis * (axis @ vector[3:])
    longer = 1.0 / float(np.sinc(angle / (2 * np.pi)))
    return np.r_[vector[:3], along + (vector[3:] - along) * longer]
