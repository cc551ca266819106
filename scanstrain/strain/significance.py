# SPDX-License-Identifier: MIT
"""Is it more than noise: Wald tests per gauge and false-discovery control over the map."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

RANK_TOLERANCE = 1e-10
"""Eigenvalues of a correlation matrix below this share of the largest count as zero."""

NORMAL_95 = 1.959963984540054
"""Two-sided 95 % point of the normal distribution, for one component."""

VECTOR_95 = 2.447746830680816
"""95 % point of the length of two independent unit normal components, sqrt of chi-square 0.95 with 2 degrees."""


NORMAL_80 = NORMAL_95 + 0.8416212335729143
"""Size, in standard errors, that a two-sided 95 % test of one component finds at 80 % power (the non-centrality of
2.8 of geodetic reliability theory, Baarda 1968)."""

VECTOR_80 = 3.1040
"""The same for the length of two components: root of the non-centrality 9.635 of chi-square with 2 degrees."""


def wald(values: FloatArray, covariance: FloatArray, observable: BoolArray) -> FloatArray:
    """p-value of "all observable values are zero": d' S^-1 d against chi-square with as many degrees as S has rank.

    Structure after Winiwarter et al. 2021: the degrees of freedom are the components that the data support. Units
    are taken out first, so rank is judged on correlations.

    Parameters
    ----------
    values : ndarray of shape (g, k)
    covariance : ndarray of shape (g, k, k)
    observable : ndarray of shape (g, k), bool
        Components to use; the others may hold anything.

    Returns
    -------
    ndarray of shape (g,)
        NaN where no component is observable or none has a variance.
    """
    from scipy.special import chdtrc

    statistic, rank = wald_statistic(values, covariance, observable)
    return np.where(rank > 0, chdtrc(np.maximum(rank, 1), statistic), np.nan)


def wald_statistic(
    values: FloatArray, covariance: FloatArray, observable: BoolArray
) -> tuple[FloatArray, NDArray[np.int64]]:
    """Statistic d' S^-1 d of the observable components and the rank of S; arguments as of `wald`.

    Returns
    -------
    statistic, rank : ndarray of shape (g,)
        Both 0 where no component is observable or none has a variance.
    """
    statistic, rank = np.zeros(len(values)), np.zeros(len(values), np.int64)
    patterns, members = np.unique(observable, axis=0, return_inverse=True)
    for number, pattern in enumerate(patterns):
        use = np.flatnonzero(pattern)
        rows = np.flatnonzero(members.reshape(-1) == number)
        if len(use):
            statistic[rows], rank[rows] = _full(values[np.ix_(rows, use)], covariance[np.ix_(rows, use, use)])
    return statistic, rank


def _full(values: FloatArray, covariance: FloatArray) -> tuple[FloatArray, NDArray[np.int64]]:
    variance = np.diagonal(covariance, axis1=1, axis2=2)
    usable = variance > 0
    unit = np.where(usable, 1.0 / np.sqrt(np.where(usable, variance, 1.0)), 0.0)
    roots, vectors = np.linalg.eigh(covariance * unit[:, :, None] * unit[:, None, :])
    keep = roots > RANK_TOLERANCE * np.maximum(roots[:, -1:], 1e-300)
    scores = np.einsum("nij,ni->nj", vectors, values * unit)
    statistic = np.where(keep, scores**2 / np.where(keep, roots, 1.0), 0.0).sum(axis=1)
    return statistic, keep.sum(axis=1)


def benjamini_hochberg(p: FloatArray, rate: float) -> BoolArray:
    """Which tests survive at false-discovery rate `rate`: p up to the largest p_(k) <= k rate / m.

    Benjamini & Hochberg 1995; holds for independent and positively dependent tests.

    Parameters
    ----------
    p : ndarray of shape (g,)
        p-values; NaN is no test and never a discovery.
    rate : float
        Accepted share of false ones among the discoveries.

    Returns
    -------
    ndarray of shape (g,), bool
    """
    tested = np.isfinite(p)
    ordered = np.sort(p[tested])
    below = np.flatnonzero(ordered <= rate * np.arange(1, len(ordered) + 1) / max(len(ordered), 1))
    if not len(below):
        return np.zeros(len(p), dtype=np.bool_)
    return np.asarray(tested & (np.where(tested, p, np.inf) <= ordered[below[-1]]))
