# SPDX-License-Identifier: MIT
"""A trend without any assumption on errors: median of slopes, and a test of ranks."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def robust_trend(years: FloatArray, values: FloatArray) -> tuple[float, float]:
    """Median of the slopes between all pairs of epochs, and the p-value of a monotonic trend.

    The first epoch takes part as a change of 0: slopes and ranks of `x_t - x_0` are those of `x_t`, so its error, which
    all changes share, does no harm. With n epochs the p-value cannot fall below 2 / n!: 0.33 for three, 0.083 for
    four, 0.017 for five. Sources: Theil 1950, Sen 1968; Mann 1945, Kendall 1938.

    Parameters
    ----------
    years : ndarray of shape (m,)
        Time from the first epoch [a].
    values : ndarray of shape (m,)
        Changes from the first epoch.

    Returns
    -------
    slope : float
        [unit of the values / a]
    p : float
        NaN where all values are equal.
    """
    from scipy.stats import kendalltau

    t, y = np.append(0.0, years), np.append(0.0, values)
    p = float(kendalltau(t, y).pvalue) if np.ptp(y) > 0 else np.nan
    later, earlier = np.tril_indices(len(t), k=-1)
    return float(np.median((y[later] - y[earlier]) / (t[later] - t[earlier]))), p
