# SPDX-License-Identifier: MIT
"""A smooth curve through evenly spaced values, as smooth as the values themselves ask for."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

ORDER = 3
"""Third differences are held small: a circular arc costs next to nothing, at the ends too."""

LONGEST = 60
"""Half-power wavelength of the stiffest curve tried, in steps."""


def smooth(values: FloatArray, weight: FloatArray) -> FloatArray:
    """Smooth evenly spaced places by penalised third differences (Whittaker 1923; Eilers 2003).

    Minimises `sum w (y - z)^2 + stiffness sum (third differences of z)^2`. The stiffness is the one with the least
    generalised cross-validation score (Craven & Wahba 1979), the same for all columns. Values of weight 0 are bridged
    or carried on by the curve itself.

    Parameters
    ----------
    values : ndarray of shape (m, d)
    weight : ndarray of shape (m,)

    Returns
    -------
    ndarray of shape (m, d)
    """
    used = int((weight > 0).sum())
    if used <= ORDER + 1:
        return _straight(values, weight)
    best, found = np.inf, values
    for wavelength in np.geomspace(3.0, LONGEST, 14):
        stiffness = (2.0 * np.sin(np.pi / wavelength)) ** (-2 * ORDER)
        z = _solve(values, weight, stiffness)
        freedom = used - _degrees(len(values), used, stiffness)
        if freedom <= 0:
            continue
        score = float((weight[:, None] * (values - z) ** 2).sum()) / freedom**2
        if score < best:
            best, found = score, z
    return found


def _solve(values: FloatArray, weight: FloatArray, stiffness: float) -> FloatArray:
    from scipy.linalg import solveh_banded

    m = len(values)
    differences = np.array([-1.0, 3.0, -3.0, 1.0])
    band = np.zeros((ORDER + 1, m))
    for first in range(ORDER + 1):
        for second in range(first, ORDER + 1):
            lag = second - first
            band[ORDER - lag, second : second + m - ORDER] += stiffness * differences[first] * differences[second]
    band[ORDER] += weight
    return np.asarray(solveh_banded(band, weight[:, None] * values))


def _degrees(m: int, used: int, stiffness: float) -> float:
    """Degrees of freedom of the curve: the trace of the smoother, by its response to waves (Eilers 2003)."""
    response = (2.0 * np.sin(0.5 * np.pi * np.arange(m) / m)) ** (2 * ORDER)
    response[:ORDER] = 0.0
    return float((1.0 / (1.0 + stiffness * response * m / used)).sum() * used / m)


def _straight(values: FloatArray, weight: FloatArray) -> FloatArray:
    """Straight line through few values, by least squares; one value alone is left where it is."""
    A = np.stack([np.ones(len(values)), np.arange(len(values)) - len(values) / 2], axis=1)
    root = np.sqrt(weight)[:, None]
    if (weight > 0).sum() < 2:
        return values
    return np.asarray(A @ np.linalg.lstsq(root * A, root * values, rcond=None)[0])
