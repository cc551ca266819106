# SPDX-License-Identifier: MIT
"""Three or more epochs: rate, acceleration and date of first significance of a quantity at a place."""

from __future__ import annotations

from scanstrain.series.baseline import baseline_covariance, baseline_sd, changes_to_previous
from scanstrain.series.design import check_dates
from scanstrain.series.fit import SeriesFit, fit_series
from scanstrain.series.rows import ChangeRow, Followed, RateRow, Track, follow, rows_of
from scanstrain.series.thermal import Temperature

__all__ = [
    "ChangeRow",
    "Followed",
    "RateRow",
    "SeriesFit",
    "Temperature",
    "Track",
    "baseline_covariance",
    "baseline_sd",
    "changes_to_previous",
    "check_dates",
    "fit_series",
    "follow",
    "rows_of",
]
