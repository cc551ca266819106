# SPDX-License-Identifier: MIT
"""A ladder of gauge lengths: every gauge takes the longest one at which its values still agree with all shorter ones.

A longer gauge is surer and blurs more. Lepski's rule (Lepski 1991; Goldenshluger & Nemirovski 1997) climbs while the
95 % interval of every unknown still overlaps that of each shorter gauge, and stops before the blur shows.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.result import AffineField, Status

FloatArray = NDArray[np.float64]

RATIO = float(np.sqrt(2.0))
"""Of neighbouring gauge lengths: the best length changes little with the noise, so finer steps gain nothing."""
NORMAL_95 = 1.96
"""Half width of a 95 % interval in standard errors."""
_OF_GAUGES = (
    "position", "frame", "displacement", "gradient", "hessian", "covariance", "shape", "observable", "status",
    "points", "residual_normal", "residual_intensity", "bias",
)  # fmt: skip
"""Arrays of a field that have one row a gauge."""


def rungs(shortest: float, longest: float) -> list[float]:
    """Gauge lengths from the shortest one up, by factors of the square root of two, none above the longest [m].

    Raises
    ------
    OptionError
        The longest one is not longer than the shortest.
    """
    if not longest > shortest:
        got = f"{longest:g} m"
        raise OptionError(
            explain("gauge_ladder", f"a length above the gauge_length, {shortest:g} m", got, "make it longer")
        )
    steps = int(np.floor(np.log(longest / shortest) / np.log(RATIO) + 1e-9))
    return [shortest * RATIO**k for k in range(steps + 1)]


def fit_on_ladder(fit: Callable[[float], AffineField], lengths: list[float]) -> AffineField:
    """Fit every gauge at every length, and keep for each the longest that agrees with all shorter ones.

    Parameters
    ----------
    fit : callable
        Fits the same gauges at a given length [m]: one spacing and one width of cells for all lengths.
    lengths : list of float
        From short to long [m].

    Returns
    -------
    AffineField
        `gauge_length` is the shortest one, `gauge_lengths` that of every gauge. Correlation and warnings are those of
        the shortest, at which most is resolved.

    Raises
    ------
    OptionError
        `fit` gave other gauges at another length.
    """
    found = [fit(length) for length in lengths]
    if len({len(field) for field in found}) > 1:
        counts = ", ".join(str(len(field)) for field in found)
        raise OptionError(explain("gauge_ladder", "the same gauges at every length", counts, "fix gauge_spacing"))
    rung = choose_rungs(found)
    merged: dict[str, Any] = {name: _picked(found, name, rung) for name in _OF_GAUGES}
    return replace(found[0], **merged, gauge_lengths=np.asarray(lengths)[rung])


def choose_rungs(found: list[AffineField]) -> NDArray[np.intp]:
    """Number of the field that each gauge takes, (g,): the longest whose intervals overlap those of all shorter ones.

    Lengths at which a gauge has no fit are passed over below the first fit, and end the climb above it.
    """
    rung = np.zeros(len(found[0]), np.intp)
    started = np.zeros(len(rung), np.bool_)
    climbing = np.ones(len(rung), np.bool_)
    for k, field in enumerate(found):
        fine = np.asarray(field.status) == Status.FINE
        agrees = np.ones(len(rung), np.bool_)
        for lower in range(k):
            judged = started & (np.asarray(found[lower].status) == Status.FINE)
            agrees &= ~judged | _overlap(found[lower], field)
        climbing &= ~started | (fine & agrees)
        take = fine & climbing
        rung[take] = k
        started |= take
    return rung


def _overlap(short: AffineField, long: AffineField) -> NDArray[np.bool_]:
    """Whether the intervals of every unknown that both observe overlap, in the frame of the shorter gauge."""
    P = np.einsum("gia,gib->gab", short.frame, long.frame)
    G = np.where(np.isfinite(long.gradient), long.gradient, 0.0)
    u = np.where(np.isfinite(long.displacement), long.displacement, 0.0)
    turned = P @ G @ np.swapaxes(P[:, :2, :2], 1, 2)
    # The places differ by what the smooth surface does over the longer patch.
    step = np.einsum("gia,gi->ga", short.frame, short.position - long.position)[:, :2]
    moved = np.einsum("gab,gb->ga", P, u) + np.einsum("gka,ga->gk", turned, step)
    theirs = np.concatenate([moved, turned.reshape(-1, 6), long.hessian], axis=1)
    ours = np.concatenate([short.displacement, short.gradient.reshape(-1, 6), short.hessian], axis=1)
    sd = [np.sqrt(np.maximum(np.einsum("gii->gi", field.covariance), 0.0)) for field in (short, long)]
    both = short.observable & long.observable
    apart = both & (np.abs(theirs - ours) > NORMAL_95 * (sd[0] + sd[1]))
    return ~apart.any(axis=1)


def _picked(found: list[AffineField], name: str, rung: NDArray[np.intp]) -> NDArray[np.generic] | None:
    """One array of the merged field."""
    arrays = [getattr(field, name) for field in found]
    if any(each is None for each in arrays):
        return None
    return np.asarray(np.stack(arrays)[rung, np.arange(len(rung))])
