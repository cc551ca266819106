# SPDX-License-Identifier: MIT
"""Dates as years, and the columns of the models: rate, acceleration, season; all zero at the first epoch."""

from __future__ import annotations

import datetime as dt
import itertools
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

YEAR = 365.25
"""Length of a year [d], of rates and of the season."""
FEWEST_FOR_SEASON = 6
"""Epochs below which a season is not fitted: rate and the two terms of a wave, with two changes left to judge them."""
SHORTEST_FOR_SEASON = 1.0
"""Span [a] below which a season is not fitted: less than one whole wave passes for a rate."""
SMALLEST_WAVE = 0.5
"""Largest absolute value that a column of the season must reach [1]; scans of one season only do not show it."""
WORST_CONDITION = 30.0
"""Condition number of the columns, each at unit length, from which terms count as not separable (Belsley, Kuh and
Welsch 1980, from memory)."""


def years_since_first(dates: Sequence[dt.date]) -> FloatArray:
    """Return the time from the first epoch to each later one [a].

    Raises
    ------
    OptionError
        Fewer than three epochs, equal dates, or dates out of order.
    """
    if len(dates) < 3:
        raise OptionError(explain("series", "three epochs or more", f"{len(dates)}", "add epochs, or compare in pairs"))
    for earlier, later in itertools.pairwise(dates):
        if later == earlier:
            got = f"{later:%Y-%m-%d} twice"
            raise OptionError(explain("series", "a different date for each epoch", got, "leave one of the two out"))
        if later < earlier:
            got = f"{later:%Y-%m-%d} after {earlier:%Y-%m-%d}"
            raise OptionError(explain("series", "epochs in order of date", got, "put the older epoch first"))
    return np.array([(date - dates[0]).total_seconds() / 86400.0 / YEAR for date in dates[1:]])


def acceleration_column(years: FloatArray) -> FloatArray:
    """Acceleration `t (t - T) / 2`: zero at both ends of the series, so that the rate beside it is the mean one."""
    return 0.5 * years * (years - years[-1])


def season_columns(years: FloatArray) -> FloatArray:
    """An annual wave of free height and phase, less its value at the first epoch; shape (m, 2)."""
    angle = 2 * np.pi * years
    return np.stack([np.cos(angle) - 1.0, np.sin(angle)], axis=1)


def shows_season(years: FloatArray) -> bool:
    """Say whether epochs can tell an annual wave from a rate."""
    if len(years) + 1 < FEWEST_FOR_SEASON or years[-1] < SHORTEST_FOR_SEASON:
        return False
    wave = season_columns(years)
    if (np.abs(wave).max(axis=0) < SMALLEST_WAVE).any():
        return False
    columns = np.column_stack([years, wave])
    return bool(np.linalg.cond(columns / np.linalg.norm(columns, axis=0)) <= WORST_CONDITION)


def check_dates(dates: Sequence[dt.date], *, season: bool = False) -> None:
    """Refuse dates that make no series, or none that shows a season.

    Raises
    ------
    OptionError
        Fewer than three epochs, equal dates, dates out of order, or a season that they cannot show.
    """
    years = years_since_first(dates)
    if season:
        check_season(years)


def check_season(years: FloatArray) -> None:
    """Refuse a season that the dates of the epochs cannot show.

    Raises
    ------
    OptionError
        Too few epochs, too short a span, or scans of one season only.
    """
    if not shows_season(years):
        required = f"{FEWEST_FOR_SEASON} epochs or more, over a year or more, that show different seasons"
        got = f"{len(years) + 1} epochs over {years[-1]:.2f} years"
        raise OptionError(explain("season of a series", required, got, "leave the season out"))
