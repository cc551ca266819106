# SPDX-License-Identifier: MIT
"""How far strains in the other measures lie from those in the one that was used."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import tensor_2d
from scanstrain.neighbourhood.result import AffineField, Observed
from scanstrain.registration.result import Registration
from scanstrain.strain.gauges import fitted_gauges
from scanstrain.strain.kinematics import kinematics
from scanstrain.strain.measures import MEASURES
from scanstrain.strain.result import MeasureDifference
from scanstrain.strain.surface import principal
from scanstrain.strain.uncertainty import principal_sd

FloatArray = NDArray[np.float64]


def compare_measures(
    field: AffineField, *, used: str, registration: Registration | None = None
) -> tuple[MeasureDifference, ...]:
    """Form every measure at every gauge, and find where each lies farthest from the one used.

    All are formed after the local rotation is removed, so "small" and "biot" agree exactly.

    Parameters
    ----------
    field : AffineField
    used : str
        The measure of the result.
    registration : Registration, optional

    Returns
    -------
    tuple of MeasureDifference
        One for each measure but the one used.
    """
    gauges = fitted_gauges(field, registration)
    seen = gauges.has(Observed.STRAIN)
    others = [name for name in MEASURES if name != used]
    if not seen.any():
        return tuple(MeasureDifference(name) for name in others)
    moved = kinematics(gauges, used)
    own = _principal(moved.strain)
    errors = np.stack(principal_sd(moved.strain, moved.strain_covariance), axis=1)
    numbers = np.flatnonzero(gauges.fine)
    found = []
    for name in others:
        off = np.where(seen[:, None], _principal(kinematics(gauges, name).strain) - own, 0.0)
        at = np.unravel_index(np.argmax(np.abs(off)), off.shape)
        row = MeasureDifference(name, float(off[at]), float(own[at]), float(errors[at]), int(numbers[at[0]]))
        found.append(row)
    return tuple(found)


def _principal(components: FloatArray) -> FloatArray:
    return np.stack(principal(tensor_2d(components)), axis=1)
