# SPDX-License-Identifier: MIT
"""The regions of a result that changed, for `summary.json` and for the report."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.words import STANDARD_ERROR
from scanstrain.result import Result
from scanstrain.strain.regions import NONE, Region, find_regions

FloatArray = NDArray[np.float64]

MAIN = "disp_n"
"""Quantity that names the change of a region, if the region shows it."""
SOUGHT = (MAIN, *(name for name in STANDARD_ERROR if name != MAIN))
"""Quantities with a standard error at every gauge, in the order in which a region is described."""


@dataclass(frozen=True, slots=True)
class Changed:
    """What changed, region by region.

    Parameters
    ----------
    regions : tuple of Region
        The strongest first.
    isolated : ndarray of shape (i,), intp
        Gauges that changed and belong to none.
    values, errors : ndarray of shape (g, k)
        The quantities of `SOUGHT` at the gauges, stored units.
    """

    regions: tuple[Region, ...]
    isolated: NDArray[np.intp]
    values: FloatArray
    errors: FloatArray


def changed_of(result: Result) -> Changed:
    """Group the gauges of a result that changed."""
    strain = result.strain
    values, errors = (
        np.stack([np.asarray(strain.values[name], np.float64) for name in names], axis=1)
        for names in (SOUGHT, [STANDARD_ERROR[name] for name in SOUGHT])
    )
    discovery = np.asarray(strain.values["discovery"]) == 1
    regions, isolated = find_regions(strain.position, discovery, values, errors, spacing=strain.gauge_spacing)
    return Changed(regions, isolated, values, errors)


def region_data(result: Result) -> dict[str, Any]:
    """Describe the regions; SI units, places in file coordinates.

    Returns
    -------
    dict
        `found`, one row a region with its area [m^2], the p-value of its cluster and, for every quantity that stands
        out there, the largest value above and below zero; and `isolated`, the number of gauges that changed outside
        of them.
    """
    changed = changed_of(result)
    return {
        "found": [
            {
                "gauges": len(region.gauges),
                "area": region.area,
                **_cluster(result, region),
                "quantities": _quantities(result, changed, region),
            }
            for region in changed.regions
        ],
        "isolated": len(changed.isolated),
    }


def _cluster(result: Result, region: Region) -> dict[str, Any]:
    """p-value of the cluster that a region lies in, and whether it survives false-discovery control over clusters."""
    p, found = result.strain.cluster_p, result.strain.cluster_found
    if p is None or found is None:
        return {"p": None, "confirmed": None}
    known = p[region.gauges][np.isfinite(p[region.gauges])]
    return {"p": float(known.min()) if len(known) else None, "confirmed": bool(found[region.gauges].any())}


def _quantities(result: Result, changed: Changed, region: Region) -> dict[str, list[dict[str, Any]]]:
    found: dict[str, list[dict[str, Any]]] = {}
    for column, name in enumerate(SOUGHT):
        for gauge in (int(region.highest[column]), int(region.lowest[column])):
            if gauge != NONE:
                value, sd = changed.values[gauge, column], changed.errors[gauge, column]
                place = result.gauge_positions[gauge]
                found.setdefault(name, []).append({"value": value, "sd": sd, "gauge": gauge, "at": place})
    return found
