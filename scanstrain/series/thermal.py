# SPDX-License-Identifier: MIT
"""The part of a change that temperature explains, taken off with its uncertainty, and only when asked for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Temperature:
    """Temperatures of the object, and how much a quantity follows them where nothing restrains it.

    Parameters
    ----------
    change : ndarray of shape (m,)
        Temperature of the object at each later epoch less that at the first one [K].
    coefficient : float
        Change of the quantity for one kelvin [unit of the quantity / K]: for a strain the coefficient of expansion,
        for the change of a length that times the length.
    coefficient_sd : float
        Its standard error.
    reading_sd : float
        Standard error of the temperature at one epoch [K].
    """

    change: FloatArray
    coefficient: float
    coefficient_sd: float
    reading_sd: float = 0.0


def without_temperature(
    values: FloatArray, covariance: FloatArray, temperature: Temperature
) -> tuple[FloatArray, FloatArray]:
    """Take `a dT` off the changes, and add its covariance `s_a^2 dT dT' + (a s_T)^2 (I + J)`.

    Generalised least squares with this covariance is the same as a temperature term whose coefficient is known before
    to `a +- s_a` (to first order): where the epochs say more about the coefficient than that, they count.

    Parameters
    ----------
    values : ndarray of shape (m,)
        Changes from the first epoch.
    covariance : ndarray of shape (m, m)
    temperature : Temperature

    Returns
    -------
    values : ndarray of shape (m,)
    covariance : ndarray of shape (m, m)

    Raises
    ------
    OptionError
        Not one temperature for each change, or a number that is not finite.
    """
    change = np.asarray(temperature.change, float)
    known = [temperature.coefficient, temperature.coefficient_sd, temperature.reading_sd]
    if change.shape != values.shape or not (np.isfinite(change).all() and np.isfinite(known).all()):
        got = f"{change.tolist()} for {len(values)} changes"
        remedy = "give the temperature of every epoch less that of the first, and the coefficient"
        raise OptionError(explain("temperature", "a finite number for each change", got, remedy))
    spread = temperature.coefficient_sd**2 * np.outer(change, change)
    reading = (temperature.coefficient * temperature.reading_sd) ** 2 * (np.eye(len(change)) + 1.0)
    return values - temperature.coefficient * change, covariance + spread + reading
