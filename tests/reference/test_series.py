# SPDX-License-Identifier: MIT
"""Fits of series against certified values, tables and closed forms (`series_values.toml`)."""

from __future__ import annotations

import datetime as dt
import tomllib
from pathlib import Path

import numpy as np
import pytest
import scipy.stats

from scanstrain.series import baseline_covariance, fit_series
from scanstrain.series.robust import robust_trend
from scanstrain.series.squares import Solution, least_squares

VALUES = tomllib.loads((Path(__file__).parent / "series_values.toml").read_text())
NORRIS, LINE = VALUES["norris"], VALUES["weighted_line"]
FOUR_YEARS = 1461
"""Days."""


def line(x):
    return np.column_stack([np.ones(len(x)), x])


def test_certified_line():
    x, y = np.array(NORRIS["x"]), np.array(NORRIS["y"])
    found = least_squares(line(x), y, np.eye(len(y)))
    residual_sd = np.sqrt(found.chi_square / found.freedom)
    assert found.x == pytest.approx([NORRIS["intercept"], NORRIS["slope"]], rel=1e-11)
    assert residual_sd == pytest.approx(NORRIS["residual_sd"], rel=1e-9)
    sd = residual_sd * np.sqrt(np.diag(found.covariance))
    assert sd == pytest.approx([NORRIS["intercept_sd"], NORRIS["slope_sd"]], rel=1e-9)


def test_differences_from_one_baseline_give_the_certified_slope_with_no_offset():
    x, y = np.array(NORRIS["x"]), np.array(NORRIS["y"])
    covariance = baseline_covariance(np.ones(len(y) - 1), 1.0)
    found = least_squares((x[1:] - x[0])[:, None], y[1:] - y[0], covariance)
    assert found.x[0] == pytest.approx(NORRIS["slope"], rel=1e-11)
    assert NORRIS["residual_sd"] * found.covariance[0, 0] ** 0.5 == pytest.approx(NORRIS["slope_sd"], rel=1e-9)


def test_weighted_line_and_its_global_test():
    x, y = np.array(LINE["x"]), np.array(LINE["observed"])
    covariance = np.diag(np.square(LINE["sd"]))
    found = least_squares(line(x), y, covariance)
    assert found.x == pytest.approx([LINE["offset"], LINE["slope"]], abs=1e-8)
    assert found.covariance == pytest.approx(np.array(LINE["covariance"]), abs=1e-8)
    assert found.chi_square == pytest.approx(LINE["chi_square"], abs=1e-8)
    assert not found.too_large
    y[1] += LINE["blunder_on_second"]
    blundered = least_squares(line(x), y, covariance)
    assert blundered.chi_square == pytest.approx(LINE["chi_square_with_blunder"], abs=1e-5)
    assert blundered.misfit_p < 0.001


def test_series_is_the_weighted_line_seen_from_its_first_epoch():
    # four years from epoch to epoch are whole days
    dates = [dt.date(2030, 1, 1) + dt.timedelta(days=FOUR_YEARS * x) for x in LINE["x"]]
    y, sd = np.array(LINE["observed"]), LINE["sd"]
    found = fit_series(dates, y[1:] - y[0], baseline_covariance(sd[1:], sd[0]))
    assert found.model == "rate"
    assert found.rate == pytest.approx(LINE["slope"] / 4, abs=1e-8)
    assert found.rate_sd == pytest.approx(LINE["covariance"][1][1] ** 0.5 / 4, abs=1e-6)
    assert found.rate_high - found.rate == pytest.approx(1.959964 * found.rate_sd, rel=1e-6)
    assert found.misfit_p == pytest.approx(scipy.stats.chi2.sf(LINE["chi_square"], 2), abs=1e-7)


def test_residuals_are_judged_by_the_tables():
    table = VALUES["chi_square_95"]
    for freedom, value in zip(table["freedom"], table["value"], strict=True):
        assert Solution(np.zeros(1), np.eye(1), value, freedom).misfit_p == pytest.approx(0.05, abs=1e-6)


def test_where_residuals_are_too_large_the_interval_is_students():
    table = VALUES["f_95"]
    found = Solution(np.ones(1), np.eye(1), 4.0 * table["freedom"], table["freedom"])
    assert found.widening == pytest.approx(2.0)
    assert found.reach**2 == pytest.approx(table["value"], abs=1e-6)
    # and the F test of the unknown is at 5 % where the interval ends at 0
    at_limit = Solution(np.array([2.0 * found.reach]), np.eye(1), 4.0 * table["freedom"], table["freedom"])
    assert at_limit.p_of(0) == pytest.approx(0.05, abs=1e-9)


def test_test_of_a_term_is_the_gain_in_chi_square():
    rng = np.random.default_rng(4)
    t = np.array([0.3, 1.1, 1.9, 2.4, 4.0])
    covariance, y = baseline_covariance([1, 2, 1, 0.5, 1], 0.7), rng.normal(size=5)
    small = least_squares(t[:, None], y, covariance)
    large = least_squares(np.column_stack([t, t**2]), y, covariance)
    assert not large.too_large
    gain = small.chi_square - large.chi_square
    assert large.p_of(1) == pytest.approx(scipy.stats.chi2.sf(gain, 1), rel=1e-9)


def test_ranks_and_slopes_of_the_robust_trend():
    t, y = np.array([1.0, 2, 3, 4]), np.array([0.1, 0.3, 5.0, 50.0])
    slope, p = robust_trend(t, y)
    assert p == pytest.approx(VALUES["ranks"]["p_monotonic_of_five"], abs=1e-9)
    assert robust_trend(t[:2], -y[:2])[1] == pytest.approx(VALUES["ranks"]["p_monotonic_of_three"], abs=1e-9)
    assert slope == pytest.approx(scipy.stats.theilslopes(np.append(0, y), np.append(0, t))[0], rel=1e-12)
    # pairs: 0.1 0.15 1.667 12.5 0.2 2.45 16.63 4.7 24.85 45, of which 2.45 and 4.7 stand in the middle
    assert slope == pytest.approx((2.45 + 4.7) / 2, rel=1e-12)
