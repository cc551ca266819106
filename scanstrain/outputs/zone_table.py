# SPDX-License-Identifier: MIT
"""What each zone and the whole object did, in numbers for `summary.json`."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME
from scanstrain.neighbourhood.result import Status
from scanstrain.result import WHOLE, Result
from scanstrain.strain.zone_values import ZoneValue, area_of, zone_values

BoolArray = NDArray[np.bool_]


def parts_of(result: Result) -> dict[str, BoolArray]:
    """Return the gauges of the whole object and of each zone by its name."""
    return {WHOLE: np.ones(len(result.strain), bool), **result.zones}


def values_of_parts(result: Result) -> dict[str, dict[str, ZoneValue]]:
    """Mean and extreme of every quantity in the whole object and in each zone."""
    return {
        name: zone_values(result.strain, gauges, registration=result.registration)
        for name, gauges in parts_of(result).items()
    }


def zone_data(result: Result, values: Mapping[str, Mapping[str, ZoneValue]]) -> dict[str, dict[str, Any]]:
    """Describe the whole object and each zone; SI units, places in file coordinates.

    Parameters
    ----------
    result : Result
    values : mapping
        From `values_of_parts`.

    Returns
    -------
    dict
        By name: gauges, areas [m^2], and for every quantity its mean and extreme. How the zone moved as a body stands
        under the same name in `rigid_motion`.
    """
    strain, fine = result.strain, result.strain.status == Status.FINE
    discovered = np.asarray(strain.values["discovery"]) == 1
    return {
        name: {
            "gauges": int(gauges.sum()),
            "fine": int((gauges & fine).sum()),
            "area": area_of(strain, gauges),
            "area_fine": area_of(strain, gauges & fine),
            "area_discovered": area_of(strain, gauges & discovered),
            "quantities": {quantity: _numbers(result, quantity, value) for quantity, value in values[name].items()},
        }
        for name, gauges in parts_of(result).items()
    }


def _numbers(result: Result, quantity: str, value: ZoneValue) -> dict[str, Any]:
    extreme = None
    if value.gauge is not None:
        extreme = {
            "value": value.extreme,
            "sd": value.extreme_sd,
            "low": value.extreme_low,
            "high": value.extreme_high,
            "gauge": value.gauge,
            "at": result.gauge_positions[value.gauge],
        }
    names = ("observable", "independent", "mean", "mean_sd", "mean_low", "mean_high", "noise_bias")
    return {"unit": BY_NAME[quantity].unit, **{name: getattr(value, name) for name in names}, "extreme": extreme}
