# SPDX-License-Identifier: MIT
"""From the changes of a quantity at a place to its rate, with what every change shares counted."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.series.design import (
    acceleration_column,
    check_season,
    season_columns,
    shows_season,
    years_since_first,
)
from scanstrain.series.robust import robust_trend
from scanstrain.series.squares import LEVEL, Solution, least_squares
from scanstrain.series.thermal import Temperature, without_temperature

FloatArray = NDArray[np.float64]

FEWEST = 2
"""Changes below which no rate is given [1]: one change is a comparison, not a series."""
NORMAL_95 = 1.959963984540054
"""Half-width of a 95 % interval in standard errors [1]."""
NOT_OBSERVABLE = "not observable"


@dataclass(frozen=True, slots=True)
class SeriesFit:
    """How a quantity went from the first epoch on. Units: U of the quantity, a = 365.25 d; NaN = not given.

    Parameters
    ----------
    model : str
        Terms of the model, such as "rate and acceleration, less temperature"; "not observable" where there are fewer
        than two changes, or too few for a season that was asked for.
    epochs : int
        Epochs used, the first one included.
    rate, rate_sd : float
        Mean rate from the first to the last epoch used, as the model has it, and its standard error [U/a].
    rate_low, rate_high : float
        Ends of its 95 % interval [U/a].
    acceleration, acceleration_sd : float
        [U/a^2]; NaN where the model has none.
    acceleration_p : float
        P-value of the test that decided on it; NaN where there are too few epochs to ask.
    last_rate, last_rate_sd : float
        Rate at the last epoch used, without the season [U/a].
    season_amplitude : float
        Half the range of the annual wave [U]; NaN where the model has none.
    misfit_p : float
        Probability of residuals this large if model and standard errors are right; NaN without redundancy.
    widened : bool
        Standard errors were multiplied by the root of the variance factor, because `misfit_p` is below 0.05.
    first_significant : date or None
        Date of the first epoch from which on every change lies beyond its 95 % limit.
    median_slope : float
        Median of the slopes between all pairs of epochs (Theil and Sen) [U/a].
    trend_p : float
        P-value of a monotonic trend (Mann and Kendall).
    """

    model: str
    epochs: int
    rate: float = np.nan
    rate_sd: float = np.nan
    rate_low: float = np.nan
    rate_high: float = np.nan
    acceleration: float = np.nan
    acceleration_sd: float = np.nan
    acceleration_p: float = np.nan
    last_rate: float = np.nan
    last_rate_sd: float = np.nan
    season_amplitude: float = np.nan
    misfit_p: float = np.nan
    widened: bool = False
    first_significant: dt.date | None = None
    median_slope: float = np.nan
    trend_p: float = np.nan


def fit_series(
    dates: Sequence[dt.date],
    values: ArrayLike,
    covariance: ArrayLike,
    *,
    season: bool = False,
    temperature: Temperature | None = None,
) -> SeriesFit:
    """Estimate the rate of a quantity from its changes `y_t = x_t - x_0` by generalised least squares.

    The model is zero at the first epoch, where the change is zero by definition. This is no assumption on the first
    epoch: its error stands in the covariance, and the estimate is the one of a line with a free offset through all
    x_t. An acceleration enters if its nested test rejects the model without it at 5 %, and if four epochs or more
    leave something to judge the fit by. With the covariance known the test is chi-square; where the residuals are
    larger than the standard errors explain, it is F, and intervals are widened (Koch 1999, from memory).

    The date of first significance is that of the first epoch from which on every change, to the last, lies beyond
    1.96 of its standard errors, to one side. It hangs on the last epoch: where nothing moves, 5 % of series have one,
    however many epochs there are.

    Parameters
    ----------
    dates : sequence of date, length m + 1
        Of all epochs, the first one included.
    values : array of shape (m,)
        Changes from the first epoch; NaN where there is none.
    covariance : array of shape (m, m)
        See `baseline_covariance`. Rows of epochs without a value are not used.
    season : bool
        Add an annual wave.
    temperature : Temperature, optional
        Taken off first.

    Returns
    -------
    SeriesFit

    Raises
    ------
    OptionError
        Dates out of order, equal or too few; shapes that do not fit; a season that the epochs cannot show; a
        covariance that is none.
    """
    years = years_since_first(dates)
    y, C = np.asarray(values, float), np.asarray(covariance, float)
    if y.shape != years.shape or C.shape != (len(y), len(y)):
        got = f"{y.shape} values and a covariance of {C.shape}"
        remedy = "give the changes from the first epoch"
        raise OptionError(explain("series", f"{len(years)} changes for {len(dates)} dates", got, remedy))
    if season:
        check_season(years)
    if temperature is not None:
        y, C = without_temperature(y, C, temperature)
    seen = np.isfinite(y)
    if seen.sum() < FEWEST or (season and not shows_season(years[seen])):
        return SeriesFit(NOT_OBSERVABLE, int(seen.sum()) + 1)
    t, y, C = years[seen], y[seen], C[np.ix_(seen, seen)]
    solution, model, p = _choose(t, y, C, season=season)
    since = _first_beyond(y, np.sqrt(np.diag(C)))
    slope, trend_p = robust_trend(t, y)
    return SeriesFit(
        model=model + (", less temperature" if temperature is not None else ""),
        epochs=len(y) + 1,
        **_numbers(solution, t, curved="acceleration" in model, season=season),
        acceleration_p=p,
        misfit_p=solution.misfit_p,
        widened=solution.too_large,
        first_significant=None if since is None else np.array(dates[1:], object)[seen][since],
        median_slope=slope,
        trend_p=trend_p,
    )


def _choose(t: FloatArray, y: FloatArray, C: FloatArray, *, season: bool) -> tuple[Solution, str, float]:
    """Fit rate and season, and an acceleration if its test asks for it; unknowns in that order."""
    A = t[:, None]
    name = "rate"
    if season:
        A, name = np.column_stack([A, season_columns(t)]), "rate and season"
    plain = least_squares(A, y, C)
    if len(t) < A.shape[1] + 2:
        return plain, name, np.nan
    curved = least_squares(np.column_stack([A, acceleration_column(t)]), y, C)
    p = curved.p_of(A.shape[1])
    if p < LEVEL:
        return curved, "rate, season and acceleration" if season else "rate and acceleration", p
    return plain, name, p


def _numbers(solution: Solution, t: FloatArray, *, curved: bool, season: bool) -> dict[str, float]:
    k = len(solution.x)
    row = np.eye(k)[0]
    rate, sd = float(solution.x[0]), solution.sd(row)
    found = {
        "rate": rate,
        "rate_sd": sd,
        "rate_low": rate - solution.reach * sd,
        "rate_high": rate + solution.reach * sd,
    }
    if season:
        found["season_amplitude"] = float(np.hypot(*solution.x[1:3]))
    last = row.copy()
    if curved:
        found["acceleration"], found["acceleration_sd"] = float(solution.x[-1]), solution.sd(np.eye(k)[-1])
        # the slope of t (t - T) / 2 at T
        last[-1] = 0.5 * t[-1]
    return found | {"last_rate": float(last @ solution.x), "last_rate_sd": solution.sd(last)}


def _first_beyond(y: FloatArray, sd: FloatArray) -> int | None:
    """Position of the first change from which on all lie beyond their limits, on the side of the last one."""
    beyond = y * np.sign(y[-1]) > NORMAL_95 * sd
    if not beyond[-1]:
        return None
    inside = np.flatnonzero(~beyond)
    return int(inside[-1]) + 1 if inside.size else 0
