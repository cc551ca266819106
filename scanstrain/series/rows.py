# SPDX-License-Identifier: MIT
"""A quantity at a place followed through the epochs, and the rows of the table that say so."""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.series.baseline import baseline_covariance, baseline_sd, changes_to_previous
from scanstrain.series.fit import NORMAL_95, SeriesFit, fit_series
from scanstrain.series.thermal import Temperature

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Track:
    """A quantity at a named place, as its changes from the first epoch.

    Parameters
    ----------
    place : str
        Name of a zone, a section or a gauge.
    quantity : str
    unit : str
        Of the quantity as stored: "m", "1", "rad" or "1/m".
    epochs : tuple of str, length m + 1
        Labels of the epochs, the first one included.
    dates : tuple of date, length m + 1
    values, sd : ndarray of shape (m,)
        Changes from the first epoch and their standard errors; NaN where there is none.
    """

    place: str
    quantity: str
    unit: str
    epochs: tuple[str, ...]
    dates: tuple[dt.date, ...]
    values: FloatArray
    sd: FloatArray


@dataclass(frozen=True, slots=True)
class Followed:
    """A track and its fit; `covariance` is that of the changes, with NaN where there is none; shape (m, m)."""

    track: Track
    covariance: FloatArray
    fit: SeriesFit


@dataclass(frozen=True, slots=True)
class ChangeRow:
    """The change of a quantity at a place at one epoch, against the "first" epoch or the "previous" one."""

    place: str
    quantity: str
    unit: str
    epoch: str
    date: dt.date
    against: str
    value: float
    sd: float
    low: float
    high: float
    grade: str = ""


@dataclass(frozen=True, slots=True)
class RateRow:
    """The fit of a quantity at a place through all epochs; `unit` is that of the quantity, rates are per year."""

    place: str
    quantity: str
    unit: str
    fit: SeriesFit


def follow(track: Track, *, season: bool = False, temperature: Temperature | None = None) -> Followed:
    """Fit a track; what the first epoch contributes to all standard errors is estimated by `baseline_sd`.

    Parameters
    ----------
    track : Track
    season : bool
        Add an annual wave.
    temperature : Temperature, optional
        Taken off first.

    Returns
    -------
    Followed

    Raises
    ------
    OptionError
        As `fit_series`, and a value without a standard error above 0; the message names place and quantity.
    """
    where = f"{track.quantity} at {track.place!r}"
    values = np.asarray(track.values, float)
    sd = np.where(np.isfinite(values), np.asarray(track.sd, float), np.nan)
    seen = np.isfinite(values)
    if not (sd[seen] > 0).all():
        got = f"{sd[seen].tolist()}"
        raise OptionError(explain(where, "a standard error above 0 for each change", got, "leave such epochs out"))
    covariance = np.full((len(sd), len(sd)), np.nan)
    if seen.any():
        shared = baseline_sd(sd)
        covariance[np.ix_(seen, seen)] = baseline_covariance(np.sqrt(sd[seen] ** 2 - shared**2), shared)
    fit = fit_series(track.dates, values, covariance, season=season, temperature=temperature)
    return Followed(track, covariance, fit)


def rows_of(followed: Followed, *, grades: Sequence[str] = ()) -> list[ChangeRow | RateRow]:
    """Return the rows of a followed quantity: against the first epoch, against the previous one, and the rate.

    Parameters
    ----------
    followed : Followed
    grades : sequence of str, optional
        Of the changes from the first epoch, as the caller's limits grade them.

    Returns
    -------
    list of ChangeRow or RateRow
    """
    track = followed.track
    words = tuple(grades) or ("",) * len(track.values)
    steps, steps_sd = changes_to_previous(track.values, followed.covariance)
    both = (("first", track.values, track.sd, words), ("previous", steps, steps_sd, ("",) * len(steps)))
    rows: list[ChangeRow | RateRow] = []
    for against, values, sds, given in both:
        for epoch, date, value, sd, grade in zip(track.epochs[1:], track.dates[1:], values, sds, given, strict=True):
            half = NORMAL_95 * sd
            row = ChangeRow(track.place, track.quantity, track.unit, epoch, date, against,
                            float(value), float(sd), float(value - half), float(value + half), grade)  # fmt: skip
            rows.append(row)
    return [*rows, RateRow(track.place, track.quantity, track.unit, followed.fit)]
