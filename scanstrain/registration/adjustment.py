# SPDX-License-Identifier: MIT
"""Weighted least squares with the test of every single observation."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

POWER = 0.8
"""Probability with which a bias of the minimal detectable size is found (Baarda 1968)."""
CONTROLLED = 1e-10
"""Redundancy below which an observation is not checked by any other, to rounding."""


@dataclass(frozen=True, slots=True)
class Adjustment:
    """Estimate of a linear model and what its observations say of one another.

    Parameters
    ----------
    estimate : ndarray of shape (k,)
    covariance : ndarray of shape (k, k)
        From the standard deviations as given.
    residuals : ndarray of shape (n,)
        Observed minus fitted.
    redundancy : ndarray of shape (n,)
        Part of an error in the observation that shows in its own residual; they sum up to n - k [1].
    w : ndarray of shape (n,)
        Normalised residual, standard normal without a blunder; NaN where nothing checks the observation [1].
    detectable : ndarray of shape (n,)
        Minimal detectable bias, infinite where nothing checks the observation.
    total : float
        Weighted sum of squared residuals [1].
    """

    estimate: FloatArray
    covariance: FloatArray
    residuals: FloatArray
    redundancy: FloatArray
    w: FloatArray
    detectable: FloatArray
    total: float


def critical_value(alpha: float) -> float:
    """Return the two-sided limit of a standard normal value.

    Examples
    --------
    >>> round(critical_value(0.001), 7)
    3.2905267
    """
    from scipy.stats import norm

    return float(norm.isf(alpha / 2))


def adjust(design: FloatArray, observed: FloatArray, covariance: FloatArray, *, alpha: float = 0.001) -> Adjustment:
    """Minimise v' P v with P the inverse covariance of the observations, and test each of them.

    With Q_v the covariance of the residuals v, the test of observation i is w_i = (P v)_i / sqrt((P Q_v P)_ii), which
    for uncorrelated observations is v_i / (s_i sqrt(r_i)); its minimal detectable bias is
    (z(1 - alpha / 2) + z(power)) / sqrt((P Q_v P)_ii) (Baarda 1968; form for correlated observations from memory).

    Parameters
    ----------
    design : ndarray of shape (n, k)
    observed : ndarray of shape (n,)
    covariance : ndarray of shape (n, n)
        Of the observations.
    alpha : float
        Probability of calling a good observation a blunder [1].

    Returns
    -------
    Adjustment

    Raises
    ------
    OptionError
        The observations do not fix the unknowns.
    """
    from scipy.stats import norm

    P = np.linalg.inv(covariance)
    N = design.T @ P @ design
    scale = 1 / np.sqrt(np.maximum(np.diag(N), 1e-300))
    if np.linalg.eigvalsh(N * np.outer(scale, scale))[0] < 1e-13:
        n, k = design.shape
        raise OptionError(
            explain("adjustment", f"observations that fix {k} unknowns", f"{n} that do not", "add observations")
        )
    Q = np.linalg.inv(N * np.outer(scale, scale)) * np.outer(scale, scale)
    estimate = Q @ (design.T @ (P @ observed))
    residuals = observed - design @ estimate
    R = np.eye(len(observed)) - design @ Q @ design.T @ P
    redundancy = np.diag(R)
    root = np.sqrt(np.where(redundancy > CONTROLLED, np.diag(P @ R), np.nan))
    shortest = critical_value(alpha) + float(norm.ppf(POWER))
    return Adjustment(
        estimate=estimate,
        covariance=(Q + Q.T) / 2,
        residuals=residuals,
        redundancy=redundancy,
        w=(P @ residuals) / root,
        detectable=np.nan_to_num(shortest / root, nan=np.inf),
        total=float(residuals @ P @ residuals),
    )
