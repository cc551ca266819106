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
    p = np.full(len(values), np.nan)
    patterns, members = np.unique(observable, axis=0, return_inverse=True)
    for number, pattern in enumerate(patterns):
        use = np.flatnonzero(pattern)
        rows = np.flatnonzero(members.reshape(-1) == number)
        if len(use):
            p[rows] = _wald_full(values[np.ix_(rows, use)], covariance[np.ix_(rows, use, use)])
    return p


def _wald_full(values: FloatArray, covariance: FloatArray) -> FloatArray:
    from scipy.special import chdtrc

    variance = np.diagonal(covariance, axis1=1, axis2=2)
    usable = variance > 0
    unit = np.where(usable, 1.0 / np.sqrt(np.where(usable, variance, 1.0)), 0.0)
    roots, vectors = np.linalg.eigh(covariance * unit[:, :, None] * unit[:, None, :])
    keep = roots > RANK_TOLERANCE * np.maximum(roots[:, -1:], 1e-300)
    scores = np.einsum("nij,ni->nj", vectors, values * unit)
    statistic = np.where(keep, scores**2 / np.where(keep, roots, 1.0), 0.0).sum(axis=1)
    rank = keep.sum(axis=1)
    return np.where(rank > 0, chdtrc(np.maximum(rank, 1), statistic), np.nan)


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
