# SPDX-License-Identifier: MIT
"""Rates of five epochs that share one baseline: intervals hold what they promise, and tests keep their level."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pytest

from scanstrain.series import baseline_covariance, fit_series
from scanstrain.series.squares import least_squares

DRAWS = 2000
DATES = [dt.date(2031, 3, 4) + dt.timedelta(days=days) for days in (0, 170, 365, 560, 730)]
YEARS = np.array([(date - DATES[0]).days / 365.25 for date in DATES[1:]])
SD, SD_BASELINE, RATE = np.array([1.0, 0.8, 1.5, 1.0]), 1.2, 0.7


@pytest.fixture(scope="module")
def noise():
    """Errors of all changes, (DRAWS, 4): each epoch's own, and the baseline's in every one of them."""
    rng = np.random.default_rng(20)
    return SD * rng.normal(size=(DRAWS, 4)) - SD_BASELINE * rng.normal(size=(DRAWS, 1))


@pytest.fixture(scope="module")
def fits(noise):
    covariance = baseline_covariance(SD, SD_BASELINE)
    return [fit_series(DATES, RATE * YEARS + errors, covariance) for errors in noise]


def share(flags):
    return np.mean(list(flags))


def test_intervals_of_rates_cover_the_truth(fits):
    assert 0.93 <= share(fit.rate_low <= RATE <= fit.rate_high for fit in fits) <= 0.97


def test_without_the_shared_baseline_they_would_not(noise):
    covariance = np.diag(SD**2 + SD_BASELINE**2)
    alone = [least_squares(YEARS[:, None], RATE * YEARS + errors, covariance) for errors in noise]
    assert share(abs(fit.x[0] - RATE) <= 1.96 * fit.covariance[0, 0] ** 0.5 for fit in alone) < 0.88


def test_an_acceleration_is_found_in_5_percent_of_straight_lines(fits):
    # binomial standard error 0.5 %; the F test of misfitting draws is a little cautious
    assert 0.035 <= share("acceleration" in fit.model for fit in fits) <= 0.065


def test_standard_errors_are_widened_in_at_most_5_percent_of_straight_lines(fits):
    assert share(fit.widened for fit in fits) <= 0.05


def test_where_nothing_moves_5_percent_of_series_have_a_date_of_significance(noise):
    covariance = baseline_covariance(SD, SD_BASELINE)
    still = [fit_series(DATES, errors, covariance) for errors in noise]
    assert 0.035 <= share(fit.first_significant is not None for fit in still) <= 0.065
    assert share(not fit.rate_low <= 0 <= fit.rate_high for fit in still) <= 0.07


def test_intervals_of_mean_and_last_rate_cover_an_accelerating_truth(noise):
    # v = 2 U/a at the start, a = 12 U/a^2: some six standard errors, so it is missed only where residuals that happen
    # to be large (5 %) bring the F test of two degrees of freedom, which asks for more
    covariance = baseline_covariance(SD, SD_BASELINE)
    last = YEARS[-1]
    fits = [fit_series(DATES, 2 * YEARS + 6 * YEARS**2 + errors, covariance) for errors in noise[:600]]
    found = [fit for fit in fits if "acceleration" in fit.model]
    assert len(found) > 0.93 * len(fits)
    assert 0.92 <= share(fit.rate_low <= 2 + 6 * last <= fit.rate_high for fit in found) <= 0.98
    assert 0.92 <= share(abs(fit.last_rate - 2 - 12 * last) <= 1.96 * fit.last_rate_sd for fit in found) <= 0.98
    assert 0.92 <= share(abs(fit.acceleration - 12) <= 1.96 * fit.acceleration_sd for fit in found) <= 0.98
