# SPDX-License-Identifier: MIT
"""Series of epochs: dates, gaps, the model chosen, significance, season, temperature."""

from __future__ import annotations

import datetime as dt

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.series import Temperature, baseline_covariance, baseline_sd, changes_to_previous, fit_series
from scanstrain.series.thermal import without_temperature

START = dt.date(2031, 3, 4)


def dates(*days):
    return [START + dt.timedelta(days=day) for day in (0, *days)]


def years(given):
    return np.array([(date - START).days / 365.25 for date in given[1:]])


QUARTERLY = dates(91, 183, 274, 365, 457, 548, 639, 731)
T = years(QUARTERLY)
SURE = baseline_covariance(np.full(8, 0.01), 0.01)


@pytest.mark.parametrize(
    ("given", "says"),
    [
        (dates(10), "three epochs or more"),
        (dates(10, 10), "2031-03-14 twice"),
        (dates(20, 10), "2031-03-14 after 2031-03-24"),
    ],
)
def test_dates_that_make_no_series_are_refused(given, says):
    with pytest.raises(OptionError, match=says):
        fit_series(given, np.zeros(len(given) - 1), np.eye(len(given) - 1))


def test_values_that_do_not_fit_the_dates_are_refused():
    with pytest.raises(OptionError, match="2 changes for 3 dates"):
        fit_series(dates(1, 2), np.zeros(3), np.eye(3))


def test_a_covariance_that_is_none_is_refused():
    with pytest.raises(OptionError, match="positive definite"):
        fit_series(dates(1, 2), np.zeros(2), np.ones((2, 2)))
    with pytest.raises(OptionError, match="above 0"):
        baseline_covariance([1.0, np.nan], 1.0)


def test_a_steady_quantity_has_its_rate_per_year_and_no_acceleration():
    fit = fit_series(QUARTERLY, 3.0 * T, SURE)
    assert (fit.model, fit.epochs) == ("rate", 9)
    assert fit.rate == pytest.approx(3.0)
    assert fit.last_rate == pytest.approx(3.0)
    assert fit.acceleration_p == pytest.approx(1.0)
    assert np.isnan(fit.acceleration)


def test_an_acceleration_is_taken_up_and_the_rate_beside_it_is_the_mean_one():
    fit = fit_series(QUARTERLY, 1.0 * T + 0.5 * 4.0 * T**2, SURE)
    assert fit.model == "rate and acceleration"
    assert fit.acceleration == pytest.approx(4.0)
    assert fit.rate == pytest.approx(1.0 + 2.0 * T[-1])
    assert fit.last_rate == pytest.approx(1.0 + 4.0 * T[-1])


def test_three_epochs_are_never_asked_for_an_acceleration():
    fit = fit_series(dates(365, 731), [1.0, 4.0], baseline_covariance([0.01, 0.01], 0.01))
    assert fit.model == "rate"
    assert np.isnan(fit.acceleration_p)
    assert fit.widened


def test_epochs_without_a_value_are_left_out():
    values = 3.0 * T
    values[[1, 4]] = np.nan
    covariance = SURE.copy()
    covariance[[1, 4]] = np.nan
    fit = fit_series(QUARTERLY, values, covariance)
    assert fit.epochs == 7
    assert fit.rate == pytest.approx(3.0)
    values[1:] = np.nan
    fit = fit_series(QUARTERLY, values, covariance)
    assert (fit.model, fit.epochs) == ("not observable", 2)
    assert np.isnan([fit.rate, fit.rate_sd, fit.trend_p]).all()


@pytest.mark.parametrize(
    ("values", "position"),
    [
        ([3, 3, 3, 3], 1),
        ([1, 3, 3, 3], 2),
        ([3, 1, 3, 3], 3),
        ([3, 3, 3, 1], None),
        ([-3, -3, 3, 3], 3),
        ([-3, -3, -3, -3], 1),
        ([3, np.nan, 3, 3], 1),
    ],
)
def test_significance_begins_where_every_later_change_is_beyond_its_limit(values, position):
    given = dates(100, 200, 300, 400)
    # standard error of each change: sqrt(2) = 1.41, limit 2.77
    fit = fit_series(given, values, baseline_covariance(np.ones(4), 1.0))
    assert fit.first_significant == (None if position is None else given[position])


def test_a_season_is_told_from_a_rate():
    wave = 0.8 * np.cos(2 * np.pi * (T - 0.2)) - 0.8 * np.cos(2 * np.pi * -0.2)
    fit = fit_series(QUARTERLY, 3.0 * T + wave, SURE, season=True)
    assert fit.model == "rate and season"
    assert fit.rate == pytest.approx(3.0)
    assert fit.season_amplitude == pytest.approx(0.8)
    assert fit_series(QUARTERLY, 3.0 * T + wave, SURE).widened


@pytest.mark.parametrize(
    "given",
    [
        dates(100, 200, 300, 400),
        dates(30, 60, 90, 120, 150, 180),
        dates(365, 731, 1096, 1461, 1826, 2192),
        dates(182, 365, 548, 731, 913, 1096),
        dates(91, 365, 456, 731, 822),
    ],
)
def test_a_season_that_the_dates_cannot_show_is_refused(given):
    with pytest.raises(OptionError, match="different seasons"):
        fit_series(given, np.zeros(len(given) - 1), np.eye(len(given) - 1), season=True)


def test_a_place_with_too_few_values_for_the_season_asked_for_has_no_rate():
    values = np.where(np.arange(8) < 4, 3.0 * T, np.nan)
    assert fit_series(QUARTERLY, values, SURE, season=True).model == "not observable"


def test_temperature_is_taken_off_with_its_uncertainty():
    warmer = np.array([0, 10, 0, -10, 0, 10, 0, -10.0])
    values = 20e-6 * T + 10e-6 * warmer
    sure = 1e-14 * (np.eye(8) + 1)
    exact = fit_series(QUARTERLY, values, sure, temperature=Temperature(warmer, 10e-6, 0.0))
    assert exact.model == "rate, less temperature"
    assert exact.rate == pytest.approx(20e-6)
    # a coefficient of which hardly anything is known is fitted, as a term of its own would be
    vague = fit_series(QUARTERLY, values, sure, temperature=Temperature(warmer, 0.0, 1e-3))
    assert vague.rate == pytest.approx(20e-6, rel=1e-4)
    assert vague.rate_sd > exact.rate_sd
    assert fit_series(QUARTERLY, values, sure).widened


def test_covariance_of_the_temperature_part_is_that_of_repeated_draws():
    rng = np.random.default_rng(1)
    change = np.array([5.0, -8.0])
    n = 40_000
    coefficient = 10e-6 + 2e-6 * rng.normal(size=(n, 1))
    reading = change + 0.5 * (rng.normal(size=(n, 2)) - rng.normal(size=(n, 1)))
    # what is left after taking off the part that is thought to be there
    left = coefficient * change - 10e-6 * reading
    _, found = without_temperature(np.zeros(2), np.zeros((2, 2)), Temperature(change, 10e-6, 2e-6, 0.5))
    assert found == pytest.approx(np.cov(left.T), rel=0.03)


def test_temperatures_that_are_missing_are_refused():
    with pytest.raises(OptionError, match="for each change"):
        fit_series(QUARTERLY, T, SURE, temperature=Temperature(np.array([1.0, np.nan]), 1e-5, 1e-6))


def test_the_baseline_is_taken_as_good_as_the_best_other_epoch():
    # epochs of 1, 1, 2 and a baseline of 1
    assert baseline_sd(np.sqrt([2.0, 2.0, 5.0])) == pytest.approx(1.0)
    assert baseline_sd([np.nan, 2.0]) == pytest.approx(np.sqrt(2.0))
    assert np.isnan(baseline_sd([np.nan]))


def test_the_baseline_cancels_in_changes_from_the_previous_epoch():
    changes, sd = changes_to_previous(np.array([1.0, 3.0, 2.0]), baseline_covariance([1.0, 2.0, 3.0], 50.0))
    assert changes.tolist() == [1.0, 2.0, -1.0]
    assert sd == pytest.approx([np.sqrt(2501.0), np.sqrt(5.0), np.sqrt(13.0)])
    changes, sd = changes_to_previous(np.array([1.0, np.nan, 2.0]), baseline_covariance([1.0, 2.0, 3.0], 50.0))
    assert np.isnan(changes).tolist() == np.isnan(sd).tolist() == [False, True, True]
