# SPDX-License-Identifier: MIT
"""Generalised least squares, and what its residuals say of the standard errors that went in."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

LEVEL = 0.05
"""Of every test of a series [1]; intervals are of 95 %."""


@dataclass(frozen=True, slots=True)
class Solution:
    """An estimate by generalised least squares.

    Parameters
    ----------
    x : ndarray of shape (k,)
    covariance : ndarray of shape (k, k)
        From the covariance of the observations as given, not scaled by the residuals.
    chi_square : float
        `v' C^-1 v` of the residuals v.
    freedom : int
        Observations less unknowns.
    """

    x: FloatArray
    covariance: FloatArray
    chi_square: float
    freedom: int

    @property
    def misfit_p(self) -> float:
        """Probability of residuals this large if model and standard errors are right; NaN without redundancy."""
        from scipy.special import chdtrc

        return float(chdtrc(self.freedom, self.chi_square)) if self.freedom > 0 else np.nan

    @property
    def too_large(self) -> bool:
        """Whether the residuals are larger than the standard errors explain, at 5 %."""
        return bool(self.misfit_p < LEVEL)

    @property
    def widening(self) -> float:
        """Factor on standard errors: 1, or the root of the variance factor where residuals are too large."""
        return float(np.sqrt(self.chi_square / self.freedom)) if self.too_large else 1.0

    @property
    def reach(self) -> float:
        """Half-width of a 95 % interval in (widened) standard errors: normal, or Student's t where widened."""
        from scipy.special import stdtrit

        return float(stdtrit(self.freedom if self.too_large else np.inf, 1 - LEVEL / 2))

    def sd(self, row: FloatArray) -> float:
        """Standard error of `row . x`, widened where need be."""
        return float(np.sqrt(row @ self.covariance @ row)) * self.widening

    def p_of(self, k: int) -> float:
        """P-value of unknown k being zero: the nested test of the model without it.

        The chi-square test of the gain in `v' C^-1 v` with one degree of freedom, which equals `(x / sd)^2`; where the
        residuals of the larger model are too large, the F test with their variance factor.
        """
        from scipy.special import stdtr

        ratio = abs(self.x[k]) / self.sd(np.eye(len(self.x))[k])
        return 2.0 * float(stdtr(self.freedom if self.too_large else np.inf, -ratio))


def least_squares(A: FloatArray, y: FloatArray, covariance: FloatArray) -> Solution:
    """Minimise `(y - A x)' C^-1 (y - A x)`, by whitening with the Cholesky factor of C.

    Parameters
    ----------
    A : ndarray of shape (m, k)
        Columns that are independent.
    y : ndarray of shape (m,)
    covariance : ndarray of shape (m, m)

    Returns
    -------
    Solution

    Raises
    ------
    OptionError
        The covariance is not positive definite.
    """
    try:
        root = np.linalg.cholesky(covariance)
    except np.linalg.LinAlgError:
        got = "one that is not positive definite"
        remedy = "give every epoch a standard error above 0"
        raise OptionError(explain("covariance of a series", "a covariance", got, remedy)) from None
    white = np.linalg.solve(root, np.column_stack([A, y]))
    Q, R = np.linalg.qr(white[:, :-1])
    x = np.linalg.solve(R, Q.T @ white[:, -1])
    inverse = np.linalg.inv(R)
    residual = white[:, -1] - white[:, :-1] @ x
    return Solution(x, inverse @ inverse.T, float(residual @ residual), len(y) - A.shape[1])
