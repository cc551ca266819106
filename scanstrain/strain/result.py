# SPDX-License-Identifier: MIT
"""What the strain stage hands on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from dataclasses import field as default

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Certainty:
    """How certain one quantity is at each gauge, in its unit; NaN where it is not observable.

    Parameters
    ----------
    sd : ndarray of shape (g,)
        Root mean square error, registration included where the quantity depends on it.
    datum_sd : ndarray of shape (g,)
        The part of it that comes from the registration, which all gauges share; zero where there is none.
    noise_bias : ndarray of shape (g,)
        What noise adds on average at most, with its sign: for lengths and principal values, which it drives apart.
    """

    sd: FloatArray
    datum_sd: FloatArray
    noise_bias: FloatArray


@dataclass(frozen=True, slots=True)
class MeasureDifference:
    """One measure against the one used; NaN and None where strain is observable at no gauge.

    Parameters
    ----------
    measure : str
    difference : float
        Of the principal strain that differs most among all gauges, this measure less the one used [1].
    strain, sd : float
        That strain in the measure used, and its standard error [1].
    gauge : int or None
        Where, by the number of the gauge.
    """

    measure: str
    difference: float = np.nan
    strain: float = np.nan
    sd: float = np.nan
    gauge: int | None = None


@dataclass(frozen=True, slots=True)
class StrainField:
    """Strain, rotation and their errors, one row per gauge.

    Parameters
    ----------
    position, normal : ndarray of shape (g, 3)
        Gauge places in local coordinates [m] and unit normals towards the free side.
    axes : ndarray of shape (g, 3, 2)
        Unit tangents u and v of the structure at each gauge: hoop and axial, or horizontal and upward.
    values : mapping of str to ndarray of shape (g,)
        Every attribute of `scanstrain.attributes.ATTRIBUTES`, NaN where not observable (codes: 0 or the reason).
    status : ndarray of shape (g,), uint8
        Reason codes of `neighbourhood.result.Status`.
    measure : str
        The strain measure that was used: small, green_lagrange, almansi, hencky or biot.
    measure_reason : str
        Why that one.
    detection_limit : mapping of str to ndarray of shape (g,)
        Smallest value that is significant at 95 % for disp_n, tilt, spin, strain and curvature at each gauge.
    certainty : mapping of str to Certainty
        Errors of every quantity that can be held against a limit.
    detectable_80 : mapping of str to ndarray of shape (g,)
        Smallest true value that such a test finds at 80 % power, for the same quantities.
    bias : mapping of str to ndarray of shape (g,)
        How far they are off because the motion varies within the gauge; part of the errors. NaN where not known.
    rigid_p : ndarray of shape (g,), optional
        p-value of "this gauge moved as a rigid body" [1]; NaN where not observable.
    cluster_p : ndarray of shape (g,), optional
        p-value of the cluster of small p-values that a gauge belongs to [1]; NaN where it belongs to none.
    cluster_found : ndarray of shape (g,), bool, optional
        Whether that cluster survives false-discovery control over all clusters.
    gauge_lengths : ndarray of shape (g,), optional
        Where gauges differ in length, that of each [m].
    details : mapping of str to ndarray of shape (g,)
        What `scanstrain.strain.details.DETAILS` lists: direction of the larger principal strain, bending and membrane
        strain along the axes.
    compared : tuple of MeasureDifference
        How far the other measures lie from the one used, where that was asked for.
    bowing : ndarray of shape (g, 3), optional
        Second derivatives of the normal displacement along (uu, vv, uv) [1/m], zero where not observable: what a
        blend between gauges needs beside the values.
    """

    position: FloatArray
    normal: FloatArray
    axes: FloatArray
    values: Mapping[str, NDArray[np.generic]]
    status: NDArray[np.uint8]
    measure: str
    measure_reason: str
    detection_limit: Mapping[str, FloatArray]
    gauge_length: float
    gauge_spacing: float
    bowing: FloatArray | None = None
    warnings: tuple[str, ...] = ()
    certainty: Mapping[str, Certainty] = default(default_factory=dict)
    detectable_80: Mapping[str, FloatArray] = default(default_factory=dict)
    bias: Mapping[str, FloatArray] = default(default_factory=dict)
    rigid_p: FloatArray | None = None
    cluster_p: FloatArray | None = None
    cluster_found: NDArray[np.bool_] | None = None
    gauge_lengths: FloatArray | None = None
    details: Mapping[str, FloatArray] = default(default_factory=dict)
    compared: tuple[MeasureDifference, ...] = ()

    def __len__(self) -> int:
        return len(self.position)
