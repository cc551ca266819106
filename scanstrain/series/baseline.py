# SPDX-License-Identifier: MIT
"""What changes share because all of them are measured from one first epoch."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

EQUAL_SHARE = 0.5
"""Share of the baseline in the variance of the surest change [1]: two epochs of equal quality."""


def baseline_covariance(sd_epochs: ArrayLike, sd_baseline: float) -> FloatArray:
    """Covariance of changes `x_t - x_0` of epochs with independent errors: `diag(s_t^2) + s_0^2 J`.

    Parameters
    ----------
    sd_epochs : array of shape (m,)
        Standard error of each later epoch by itself, in the unit of the quantity.
    sd_baseline : float
        Standard error of the first epoch by itself.

    Returns
    -------
    ndarray of shape (m, m)

    Raises
    ------
    OptionError
        A standard error that is no finite number of at least 0, or an epoch without any error.
    """
    sd = np.asarray(sd_epochs, float)
    if not (np.isfinite(sd).all() and (sd > 0).all() and np.isfinite(sd_baseline) and sd_baseline >= 0):
        got = f"{sd.tolist()} with {sd_baseline:g} for the baseline"
        remedy = "leave out epochs that have no standard error"
        raise OptionError(explain("standard errors of a series", "finite numbers above 0", got, remedy))
    return np.diag(sd**2) + sd_baseline**2


def baseline_sd(sd_changes: ArrayLike) -> float:
    """Estimate the standard error of the first epoch where only those of the changes are known.

    `sd_change_t^2 = s_t^2 + s_0^2` leaves s_0 open between 0 and the smallest `sd_change`. Assumed is a first epoch as
    good as the best later one: half of the smallest variance is shared. With five epochs at even distances, 95 %
    intervals of a rate then cover 94 % where the first epoch is twice as good as that, and 96 % where it is twice as
    bad; with twelve epochs 91 % and 98 %. Without any shared part it would be 89 % to 75 %, and 78 % to 54 %.

    Parameters
    ----------
    sd_changes : array of shape (m,)
        Standard errors of the changes from the first epoch; NaN where there is none.

    Returns
    -------
    float
        NaN where no change has a standard error.
    """
    sd = np.asarray(sd_changes, float)
    sd = sd[np.isfinite(sd)]
    return float(np.sqrt(EQUAL_SHARE) * sd.min()) if sd.size else np.nan


def changes_to_previous(values: FloatArray, covariance: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Changes from epoch to epoch, from changes to the first one; the error of the first cancels from the second on.

    Parameters
    ----------
    values : ndarray of shape (m,)
        Changes from the first epoch; NaN where there is none.
    covariance : ndarray of shape (m, m)

    Returns
    -------
    values, sd : ndarray of shape (m,)
        NaN where either of the two epochs has no value.
    """
    changes = np.diff(values, prepend=0.0)
    variance = np.diag(covariance).copy()
    variance[1:] += variance[:-1] - 2.0 * np.diag(covariance, k=-1)
    return changes, np.where(np.isfinite(changes), np.sqrt(variance), np.nan)
