# SPDX-License-Identifier: MIT
"""The test of congruence: are differences between two epochs more than their errors."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.strain.significance import RANK_TOLERANCE

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Congruence:
    """Outcome of one test.

    Parameters
    ----------
    statistic : float
        Weighted mean square of the differences over the variance of unit weight [1]; near 1 where they are noise.
    rank : int
        Independent differences.
    p : float
        Probability of so large a statistic by noise alone; NaN where nothing could be tested.
    """

    statistic: float
    rank: int
    p: float


def congruence_test(d: FloatArray, Q: FloatArray, *, variance: float = 1.0, dof: float = np.inf) -> Congruence:
    """Test that differences are zero: `T = d' Q^+ d / (h s0^2)` against F(h, f), h the rank of Q.

    Pelzer 1971; Niemeier 2008; Caspary 2000 (from memory). The variance of unit weight must come from outside of the
    hypothesis. Rank is judged on correlations, so that units do not matter.

    Parameters
    ----------
    d : ndarray of shape (k,)
        Differences.
    Q : ndarray of shape (k, k)
        Their cofactors, or their covariance with `variance` 1; may be singular.
    variance : float
        Variance of unit weight s0^2.
    dof : float
        Degrees of freedom f behind that variance; infinite where it counts as known.

    Returns
    -------
    Congruence

    Examples
    --------
    >>> congruence_test(np.array([3.0, 0.0]), np.diag([1.0, 4.0]))
    Congruence(statistic=4.5, rank=2, p=0.0111...)
    """
    if not len(d):
        return judge(0.0, 0)
    diagonal = np.diagonal(Q)
    unit = np.where(diagonal > 0, 1.0 / np.sqrt(np.where(diagonal > 0, diagonal, 1.0)), 0.0)
    roots, vectors = np.linalg.eigh(Q * unit[:, None] * unit[None, :])
    keep = roots > RANK_TOLERANCE * max(float(roots[-1]), 1e-300)
    squares = (vectors.T @ (d * unit))[keep] ** 2 / roots[keep]
    return judge(float(squares.sum()) / variance, int(keep.sum()), dof=dof)


def judge(square_sum: float, rank: int, *, dof: float = np.inf) -> Congruence:
    """Compare a sum of squares of standardised differences with what noise gives.

    Parameters
    ----------
    square_sum : float
        Of `rank` independent values with unit variance under the hypothesis [1].
    rank : int
    dof : float
        Degrees of freedom behind the variance that standardised them.

    Returns
    -------
    Congruence
    """
    from scipy.special import chdtrc, fdtrc

    if rank < 1:
        return Congruence(np.nan, 0, np.nan)
    statistic = square_sum / rank
    p = fdtrc(rank, dof, statistic) if np.isfinite(dof) else chdtrc(rank, square_sum)
    return Congruence(statistic, rank, float(p))
