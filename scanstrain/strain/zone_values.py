# SPDX-License-Identifier: MIT
"""What a part of the object did on the whole: mean and extreme of each quantity, with 95 % intervals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.result import Registration
from scanstrain.strain.body_fit import apart
from scanstrain.strain.result import Certainty, StrainField
from scanstrain.strain.significance import NORMAL_95

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class ZoneValue:
    """One quantity over the gauges of a part; NaN where none observes it.

    Parameters
    ----------
    observable, independent : int
        Gauges that observe it, and those among them that share no points.
    mean, mean_sd : float
        Mean over the gauges, which stand evenly on the surface, and its standard error.
    mean_low, mean_high : float
        Ends of the 95 % interval of the true mean, widened by `noise_bias`.
    noise_bias : float
        What noise adds to the mean on average at most, with its sign; zero for quantities that noise does not drive.
    extreme : float
        The value that is largest in size.
    extreme_sd, extreme_low, extreme_high : float
        Its standard error, and an interval that holds for all gauges of the part together in 95 % of cases.
    gauge : int or None
        Where, by the number of the gauge.
    """

    observable: int
    independent: int
    mean: float = np.nan
    mean_sd: float = np.nan
    mean_low: float = np.nan
    mean_high: float = np.nan
    noise_bias: float = np.nan
    extreme: float = np.nan
    extreme_sd: float = np.nan
    extreme_low: float = np.nan
    extreme_high: float = np.nan
    gauge: int | None = None


def area_of(strain: StrainField, gauges: BoolArray) -> float:
    """Surface that gauges stand for [m^2]: a square of one gauge spacing each."""
    return float(np.count_nonzero(gauges)) * strain.gauge_spacing**2


def zone_values(
    strain: StrainField, gauges: BoolArray, *, registration: Registration | None = None
) -> dict[str, ZoneValue]:
    """Mean and extreme of every quantity over the gauges of a part.

    The error of the mean has two parts. Noise of single gauges averages out over gauges that share no points; those
    between them repeat it. The error of the registration does not average out: it is a rigid motion, the same for
    all gauges. For the normal displacement it is carried through exactly; for the others it counts in full, as if it
    had one sign everywhere. Errors of a scan that are alike over more than a gauge length average out less than is
    assumed here, and gauges that a corner or clutter misleads are not allowed for.

    Parameters
    ----------
    strain : StrainField
        With its `certainty`.
    gauges : ndarray of shape (g,), bool
        Those of the part.
    registration : Registration, optional
        Without it the registration counts as exact.

    Returns
    -------
    dict of str to ZoneValue
        For every quantity of `strain.certainty`.
    """
    spread: dict[bytes, int] = {}
    found = {}
    for name, certain in strain.certainty.items():
        values = np.asarray(strain.values[name], dtype=np.float64)
        seen = np.asarray(gauges & np.isfinite(values) & np.isfinite(certain.sd))
        # most quantities are observable at the same gauges, and thinning is what takes time here
        key = seen.tobytes()
        if key not in spread:
            spread[key] = len(apart(strain.position[seen], strain.gauge_length))
        shared = _shared_variance(strain, name, certain, seen, registration)
        found[name] = _summed_up(values, certain, seen, spread[key], shared)
    return found


def _summed_up(values: FloatArray, certain: Certainty, seen: BoolArray, independent: int, shared: float) -> ZoneValue:
    from scipy.special import ndtri

    count = int(seen.sum())
    if not count:
        return ZoneValue(0, 0)
    own = np.maximum(certain.sd[seen] ** 2 - certain.datum_sd[seen] ** 2, 0.0)
    sd = float(np.sqrt(own.mean() / independent + shared))
    mean, bias = float(values[seen].mean()), float(certain.noise_bias[seen].mean())
    gauge = int(np.flatnonzero(seen)[np.argmax(np.abs(values[seen]))])
    extreme, error = float(values[gauge]), float(certain.sd[gauge])
    # overlapping gauges pass as independent ones: their extremes are nearly as wide as that (Sidak 1967; simulated)
    reach = float(ndtri(0.5 + 0.5 * 0.95 ** (1.0 / count)))
    return ZoneValue(
        observable=count,
        independent=independent,
        mean=mean,
        mean_sd=sd,
        mean_low=mean - NORMAL_95 * sd - max(bias, 0.0),
        mean_high=mean + NORMAL_95 * sd - min(bias, 0.0),
        noise_bias=bias,
        extreme=extreme,
        extreme_sd=error,
        extreme_low=extreme - reach * error,
        extreme_high=extreme + reach * error,
        gauge=gauge,
    )


def _shared_variance(
    strain: StrainField, name: str, certain: Certainty, seen: BoolArray, registration: Registration | None
) -> float:
    """Variance of a mean from the registration."""
    if not seen.any():
        return 0.0
    if name != "disp_n" or registration is None:
        return float(certain.datum_sd[seen].mean() ** 2)
    # a rotation w and a translation t move a gauge along its normal by n . (w x arm + t)
    arm, normal = strain.position[seen] - registration.pivot, strain.normal[seen]
    row = np.concatenate([np.cross(arm, normal), normal], axis=1).mean(axis=0)
    return max(float(row @ registration.covariance @ row), 0.0)
