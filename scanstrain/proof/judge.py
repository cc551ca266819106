# SPDX-License-Identifier: MIT
"""What came back of a known change, and what was found where nothing had changed."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.proof.change import Change, expected

if TYPE_CHECKING:  # the stages compile when they are loaded
    from scanstrain.result import Result

FloatArray = NDArray[np.float64]

LEVEL = 0.05
"""Level of the test whose false alarms are counted."""
NORMAL_95 = 1.96
"""Half width of a 95 % interval in standard errors of a normal distribution."""
SEEN = 2.8
"""Standard errors that a change must have to be found in 80 of 100 cases at one place (geodetic common practice)."""
NEXT_TO_NOTHING = 0.28
"""Standard errors below which a change cannot be told from none."""
VAGUE = 0.5
"""Standard error of what came back over what was put in beyond which the ratio tells nothing."""

COMPONENTS: dict[str, tuple[tuple[float, ...], ...]] = {
    "disp_n": ((0, 0, 1, 0, 0, 0, 0, 0, 0, 0, 0, 0),),
    "tilt": ((0, 0, 0, 0, 0, 0, 0, 1, 0, 0, 0, 0), (0, 0, 0, 0, 0, 0, 0, 0, 1, 0, 0, 0)),
    "curv_1": tuple(tuple(float(k == j) for k in range(12)) for j in (9, 10, 11)),
    "strain_u": (
        (0, 0, 0, 1, 0, 0, 0, 0, 0, 0, 0, 0),
        (0, 0, 0, 0, 0, 0, 1, 0, 0, 0, 0, 0),
        (0, 0, 0, 0, 0.5, 0.5, 0, 0, 0, 0, 0, 0),
    ),
    "spin": ((0, 0, 0, 0, -0.5, 0.5, 0, 0, 0, 0, 0, 0),),
}
"""Components of each quantity, by the attribute with its unit, as combinations of the unknowns of the local fit."""


@dataclass(frozen=True, slots=True)
class Alarms:
    """What a pair without change made the program say.

    Parameters
    ----------
    gauges : int
        That could be evaluated.
    share : float
        Of them with a p-value under 5 %, which is 5 % where all is well [1].
    share_sd : float
        Its standard error, gauges that cover one another counted once [1].
    discoveries : int
        Gauges that survived false-discovery control.
    scatter : dict of str to float
        Mean square of values over their standard errors, by attribute; 1 where standard errors are right. Quantities
        that are not observable are left out.
    """

    gauges: int
    share: float
    share_sd: float
    discoveries: int
    scatter: dict[str, float]


@dataclass(frozen=True, slots=True)
class Recovered:
    """How one quantity of the change that was put in came back.

    Parameters
    ----------
    name : str
        Attribute with the unit.
    largest : float
        Largest component that was put in, averaged over a gauge as the fit does.
    ratio, ratio_sd : float
        What came back over what was put in, and its standard error [1]; NaN where too little was put in to tell.
    coverage : float
        Share of components inside their 95 % intervals [1].
    values : int
        Number of components that were observable.
    """

    name: str
    largest: float
    ratio: float
    ratio_sd: float
    coverage: float
    values: int


def _standardised(result: Result, name: str, truth: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Errors, standard errors and true values of the components of a quantity, (g, c) each; NaN where not observed."""
    from scanstrain.strain.uncertainty import registration_covariance

    field = result.field
    values = np.concatenate([field.displacement, field.gradient.reshape(-1, 6), field.hessian], axis=1)
    covariance = field.covariance + registration_covariance(field.position, field.frame, result.registration)
    rows = np.array(COMPONENTS[name], np.float64)
    used = np.flatnonzero(rows.any(axis=0))
    rows = rows[:, used]
    error = (values - truth)[:, used] @ rows.T
    sd = np.sqrt(np.einsum("ci,gij,cj->gc", rows, covariance[:, used][:, :, used], rows))
    return error, np.where(np.isfinite(error), sd, np.nan), truth[:, used] @ rows.T


def count_alarms(still: Result) -> Alarms:
    """Count what a comparison without change claims to have found.

    Parameters
    ----------
    still : Result
        That comparison.

    Returns
    -------
    Alarms
    """
    p = np.asarray(still.strain.values["significance"], np.float64)
    given = np.isfinite(p)
    rest = np.zeros((len(p), 12))
    scatter = {}
    for name in COMPONENTS:
        error, sd, _ = _standardised(still, name, rest)
        z = (error / sd)[np.isfinite(error)]
        if len(z):
            scatter[name] = float(np.mean(z**2))
    found = int(np.asarray(still.strain.values["discovery"]).sum())
    share = float(np.mean(p[given] < LEVEL)) if given.any() else float("nan")
    independent = max(given.sum() / _together(still), 1.0)
    return Alarms(int(given.sum()), share, float(np.sqrt(LEVEL * (1 - LEVEL) / independent)), found, scatter)


def _together(result: Result) -> float:
    """Gauges that see the same points: as many of them as cover one another."""
    return max(np.pi / 4 * (result.field.gauge_length / result.field.gauge_spacing) ** 2, 1.0)


def judge(altered: Result, change: Change) -> tuple[tuple[Recovered, ...], float, float]:
    """Hold what a comparison gave against the change that was put into its second scan.

    Parameters
    ----------
    altered : Result
        That comparison.
    change : Change
        What was put in.

    Returns
    -------
    recovered : tuple of Recovered
        Each quantity.
    found : float
        Share of gauges found among those where a component was put in that is seen in 80 of 100 cases; NaN if none.
    false : float
        Share of discoveries at gauges where next to nothing was put in; NaN without discoveries.
    """
    truth = expected(altered.field, change)
    rows, strongest = [], np.zeros(len(truth))
    for name in COMPONENTS:
        error, sd, true = _standardised(altered, name, truth)
        largest = float(np.abs(true).max())
        given = np.isfinite(error)
        with np.errstate(invalid="ignore"):
            strongest = np.fmax(strongest, np.nanmax(np.where(given, np.abs(true) / sd, 0.0), axis=1))
        if not given.any():
            rows.append(Recovered(name, largest, float("nan"), float("nan"), float("nan"), 0))
            continue
        e, s, t = error[given], sd[given], true[given]
        weight = float(np.sum(t**2 / s**2))
        spread = float(np.sqrt(_together(altered) / weight)) if weight > 0 else float("inf")
        told = spread < VAGUE
        ratio = 1 + float(np.sum(t * e / s**2)) / weight if told else float("nan")
        inside = float(np.mean(np.abs(e) <= NORMAL_95 * s))
        rows.append(Recovered(name, largest, ratio, spread if told else float("nan"), inside, int(given.sum())))
    found = np.asarray(altered.strain.values["discovery"]) == 1
    clear, empty = strongest > SEEN, strongest < NEXT_TO_NOTHING
    share = float(np.mean(found[clear])) if clear.any() else float("nan")
    return tuple(rows), share, float(np.mean(empty[found])) if found.any() else float("nan")
