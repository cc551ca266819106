# SPDX-License-Identifier: MIT
"""Does a rigid motion suffice: the test of the affine map of a gauge against a rigid one.

Forcing a gauge to move as a body takes away six unknowns: three components of strain and three of the change of
curvature. The weighted residuals then grow by d' S^-1 d, d being what the affine fit gave for those six and S its
covariance (the test of a linear hypothesis, Koch 1999, 3.4), so no second fit is needed. Over the number of
components it follows F where nothing but a rigid motion happened.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.result import PARAMETERS, Observed
from scanstrain.strain.gauges import Gauges
from scanstrain.strain.kinematics import Kinematics
from scanstrain.strain.significance import wald_statistic

FloatArray = NDArray[np.float64]


def rigid_p(gauges: Gauges, moved: Kinematics, freedom: FloatArray) -> FloatArray:
    """p-value of "this gauge moved as a rigid body", from strain and change of curvature where observable.

    Parameters
    ----------
    gauges : Gauges
    moved : Kinematics
        With covariances from observations; strain and curvature do not depend on the datum.
    freedom : ndarray of shape (g,)
        Degrees of freedom of the residuals behind the covariance [1].

    Returns
    -------
    ndarray of shape (g,)
        NaN where neither strain nor change of curvature is observable.
    """
    from scipy.special import fdtrc

    values = np.concatenate([moved.strain, moved.curvature], axis=1)
    covariance = np.zeros((len(gauges), 6, 6))
    # Tangential and normal rows hardly share unknowns: their correlation is left out.
    covariance[:, :3, :3], covariance[:, 3:, 3:] = moved.strain_covariance, moved.curvature_covariance
    seen = np.repeat(np.stack([gauges.has(Observed.STRAIN), gauges.has(Observed.CURVATURE)], axis=1), 3, axis=1)
    statistic, rank = wald_statistic(values, covariance, seen)
    some = rank > 0
    safe = np.where(some, rank, 1)
    return np.where(some, fdtrc(safe, np.maximum(freedom, 1.0), statistic / safe), np.nan)


def effective_freedom(points: NDArray[np.int64], factor: tuple[float, ...] | None) -> FloatArray:
    """Degrees of freedom of a gauge's residuals: independent points less unknowns.

    Noise that neighbours share leaves fewer independent ones: as many as the factor on the standard error of the
    normal displacement says.

    Parameters
    ----------
    points : ndarray of shape (g,)
        Reference points behind each fit.
    factor : tuple of float or None
        As of `neighbourhood.result.Correlation`.
    """
    growth = 1.0 if factor is None else max(factor[PARAMETERS.index("un")], 1.0)
    return np.maximum(np.asarray(points, np.float64) / growth**2 - len(PARAMETERS), 1.0)
