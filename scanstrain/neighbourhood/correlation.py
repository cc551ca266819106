# SPDX-License-Identifier: MIT
"""Noise that neighbouring points share, measured on the scans themselves and counted in the standard errors.

The difference of both epochs in small squares, motion taken out, holds the noise of both and nothing else. A model of
noise of its own for every point plus nested correlations of several lengths (as of a nested variogram) is fitted to
it over many patches of the whole scan: a robust mean, so that a place that deforms does not excuse itself.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.differences import PATCH, difference_forms, unit_noise
from scanstrain.neighbourhood.fit import SCALE_GREY, SCALE_NORMAL, VALID, VARIANCE
from scanstrain.neighbourhood.result import SharedNoise
from scanstrain.neighbourhood.sandwich import correlated_covariance

if TYPE_CHECKING:
    from scanstrain.neighbourhood.level import Estimate, Level

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LADDER = (1 / 14, 1 / 8.5, 1 / 5, 1 / 3, 1 / 2)
"""Correlation lengths of the model in gauge lengths: shorter ones act like noise of single points, longer ones move a
gauge as a whole, which no residual shows."""
SQUARES = 20
"""Squares across a gauge: narrower than the shortest of these lengths."""
PATCHES = 120
"""About so many patches are judged."""
FEWEST_PATCHES = 10
"""Fewer say nothing about the noise of a scan."""
SIGNIFICANT = 2.5
"""Shared noise counts where some form exceeds what noise of single points explains by this many standard errors."""
SPARING = 1.0
"""A longer correlation must lower the squared misfit, in standard errors, by more than this."""
DEVIANT = 3.5
"""Patches beyond this many robust standard deviations in the logarithm of a form deform, or are clutter."""
ROUNDS = 4
"""Fits of the model, each with weights and patches judged by the one before."""


@dataclass(frozen=True, slots=True)
class Components:
    """Variance components of one kind of observation, over the noise variance of a single reference point.

    Parameters
    ----------
    own : float
        Noise of single points in either epoch; 1 where the noise is as assumed.
    shared : ndarray of shape (c,)
        One for each correlation length; all 0 where no shared noise shows.
    """

    own: float
    shared: FloatArray


def fit_components(q: FloatArray, T: FloatArray, *, overlap: float = 1.0) -> Components:
    """Fit non-negative variance components to the quadratic forms of many patches.

    Parameters
    ----------
    q, T : ndarray of shape (p, c + 1), (p, c + 1, c + 1)
        As of `squares.quadratic_forms`.
    overlap : float
        How many patches cover a place [1]: so much larger is the variance of their mean than if they were apart.

    Returns
    -------
    Components
    """
    none = Components(1.0, np.zeros(q.shape[1] - 1))
    seen = (T[:, 0, 0] > 0) & np.isfinite(q).all(axis=1) & (q > 0).all(axis=1)
    if seen.sum() < FEWEST_PATCHES:
        return none
    q, T = q[seen], T[seen]
    keep = np.ones(len(q), np.bool_)
    theta = np.r_[q[:, 0].sum() / T[:, 0, 0].sum(), none.shared]
    for _ in range(ROUNDS):
        forms, expected = q[keep].mean(axis=0), T[keep].mean(axis=0)
        error = np.std(q[keep] - T[keep] @ theta, axis=0, ddof=1) * np.sqrt(max(overlap, 1.0) / keep.sum())
        theta = _sparing(expected / error[:, None], forms / error)
        ratio = np.log(q / np.maximum(T @ theta, 1e-300))
        away = np.abs(ratio - np.median(ratio, axis=0))
        keep = (ratio - np.median(ratio, axis=0) < DEVIANT * 1.4826 * np.median(away, axis=0)).all(axis=1)
        if keep.sum() < FEWEST_PATCHES:
            return none
    alone = forms[0] / expected[0, 0]
    if ((forms - expected[:, 0] * alone) / error).max() < SIGNIFICANT:
        return Components(float(alone), none.shared)
    return Components(float(theta[0]), theta[1:])


def _sparing(expected: FloatArray, forms: FloatArray) -> FloatArray:
    """Non-negative components with no longer correlations than the forms, in units of their errors, ask for.

    What a fit leaves of the longest is little, and a chance part of them would weigh heavily in a standard error.
    """
    from scipy.optimize import nnls

    count = len(forms)
    fits = [nnls(expected[:, : k + 1], forms) for k in range(count)]
    enough = min(misfit for _, misfit in fits) ** 2 + SPARING
    first = next(k for k, (_, misfit) in enumerate(fits) if misfit**2 <= enough)
    return np.r_[fits[first][0], np.zeros(count - 1 - first)]


def _described(part: Components, lengths: FloatArray) -> SharedNoise:
    """Share of the variance, and the lag at which the correlation of the shared part is 1/e."""
    total = float(part.shared.sum())
    if not total > 0:
        return SharedNoise(0.0, 0.0)
    lag = np.linspace(0.0, 2.0 * lengths[-1], 2001)
    correlation = np.exp(-((lag[:, None] / lengths) ** 2)) @ part.shared / total
    # The difference of two epochs holds the noise of single points twice. What that is the scan's own variogram knows
    # better: in squares that hold many points little of it is left.
    return SharedNoise(total / (total + 2.0), float(lag[np.argmax(correlation < np.exp(-1.0))]))


def _own_part(scale: float, part: Components, ratio: float) -> float:
    """Part of the variance factor `scale` that is noise of single points.

    Residuals of predictions hold the shared noise, too, and the fit took all of it for independent. No more is taken
    off than the shared noise can have added, `ratio` being the unit over the expected variance of a residual.
    """
    return max(min(scale, 1.0), scale - ratio * float(part.shared.sum())) / scale


@dataclass(frozen=True, slots=True)
class Shared:
    """Noise that neighbouring points share, as measured on a sample of a scan.

    Parameters
    ----------
    described : tuple of SharedNoise
        Of height and, on textured surfaces, of intensity.
    lengths : ndarray of shape (c,)
        Correlation lengths [m].
    shares : ndarray of shape (2, c)
        Variance of each component over that of a single point, for both kinds of rows.
    own : ndarray of shape (2,)
        Part of the variance factor that is noise of its own for every point.
    """

    described: tuple[SharedNoise, ...]
    lengths: FloatArray
    shares: FloatArray
    own: FloatArray


def measure_shared(
    levels: Sequence[Level], states: Sequence[Estimate], tables: Sequence[FloatArray], fine: Sequence[IntArray]
) -> Shared | None:
    """Measure the noise that neighbours share.

    Parameters
    ----------
    levels : sequence of Level
        The finest one of every piece of the sample.
    states : sequence of Estimate
        After the last fit.
    tables : sequence of ndarray of shape (c, 24)
        Observations of that fit, one row a reference cell.
    fine : sequence of ndarray of shape (g,)
        Numbers of the gauges with a sound fit.

    Returns
    -------
    Shared or None
        None where too few gauges tell.
    """
    first, count = levels[0], sum(map(len, fine))
    lengths = 2.0 * first.radius * np.array(LADDER)
    step = max(1, count // PATCHES)
    judged = [
        (level, state, some[::step]) for level, state, some in zip(levels, states, fine, strict=True) if len(some)
    ]
    chosen = sum(len(some) for _, _, some in judged)
    if chosen < FEWEST_PATCHES:
        return None
    forms = [difference_forms(level, state, some, lengths, SQUARES) for level, state, some in judged]
    q, T = (np.concatenate(each) for each in zip(*forms, strict=True))
    area = count * first.spacing**2
    overlap = chosen * np.pi * (PATCH * first.radius) ** 2 / area
    parts = [fit_components(q[:, kind], T[:, kind], overlap=overlap) for kind in range(q.shape[1])]
    own, shares = np.ones(2), np.zeros((2, len(lengths)))
    for kind, part in enumerate(parts):
        ratio = [
            (unit_noise(level)[:, kind] / table[:, VARIANCE + 2 + kind])[table[:, VALID] > 0]
            for level, table in zip(levels, tables, strict=True)
        ]
        scales = np.concatenate([state.info[:, (SCALE_NORMAL, SCALE_GREY)[kind]] for state in states])
        own[kind] = _own_part(float(np.nanmedian(scales)), part, float(np.median(np.concatenate(ratio))))
        shares[kind] = part.shared
    return Shared(tuple(_described(part, lengths) for part in parts), lengths, shares, own)


def count_shared(level: Level, state: Estimate, table: FloatArray, shared: Shared) -> None:
    """Replace the covariances of `state` where there is shared noise; its values stay.

    Parameters
    ----------
    level : Level
        The finest one of a piece.
    state, table : Estimate, ndarray of shape (c, 24)
        As of `measure_shared`.
    shared : Shared
    """
    if not shared.shares.any():
        return
    g, unit = level.gauges, unit_noise(level)
    scales = np.ascontiguousarray(state.info[:, [SCALE_NORMAL, SCALE_GREY]])
    order, key, start = level.hash
    correlated_covariance(
        g.origin, g.frame, g.curvature, level.radius, level.sheet_gate, level.weak, state.required, level.nuisance,
        level.capacity, level.textured, key, start, table[order], unit[order], state.gains, state.held, scales,
        shared.own, shared.lengths, shared.shares, SQUARES, level.cuts.pieces, level.cuts.start, state.covariance,
        state.data_sd,
    )  # fmt: skip
