# SPDX-License-Identifier: MIT
"""Values against the user's own limits, and published classes for those who ask."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.damage import BOSCARDIN_CORDING, CAUTIONS, CLASSES, tensile_class
from scanstrain.limits import by_severity, grade, grade_zone, worst_level

GRADES = ["below", "possible", "exceeded"]


@pytest.mark.parametrize(
    ("direction", "limit", "values", "expected"),
    [
        ("above", 10.0, [8.0, 8.1, 11.9, 12.0], ["below", "possible", "possible", "exceeded"]),
        ("above", -10.0, [-12.0, -10.0, -8.0], GRADES),
        ("below", -10.0, [-8.0, -8.1, -11.9, -12.0], ["below", "possible", "possible", "exceeded"]),
        ("beyond", 10.0, [-12.0, -11.9, -8.1, 0, 8.0, 8.1, 12.0],
         ["exceeded", "possible", "possible", "below", "below", "possible", "exceeded"]),
    ],
)  # fmt: skip
def test_grades_by_the_95_percent_interval(direction, limit, values, expected):
    # 1.96 standard errors of 1: two away is clear, 1.9 is not
    assert grade(values, 1.0, limit, direction=direction).tolist() == expected


def test_an_interval_that_spans_both_limits_or_touches_one_is_possible():
    assert grade(0.0, 20.0, 10.0, direction="beyond") == "possible"
    assert grade(10.0, 0.0, 10.0, direction="above") == "possible"


def test_what_is_not_observable_is_not_graded():
    assert grade([np.nan, 1.0], [1.0, np.nan], 10.0, direction="above").tolist() == ["not observable"] * 2


def test_a_value_at_the_limit_is_called_past_it_in_two_and_a_half_percent():
    values = 10.0 + np.random.default_rng(2).normal(size=20_000)
    share = np.mean(grade(values, 1.0, 10.0, direction="above") == "exceeded")
    assert share == pytest.approx(0.025, abs=0.004)


def test_a_zone_has_its_areas_by_grade_and_the_gauge_that_goes_furthest():
    values = np.array([1.0, -30.0, 10.0, np.nan])
    found = grade_zone(values, np.ones(4), np.array([0.5, 0.25, 1.0, 2.0]), 10.0, direction="beyond")
    assert found.areas == {"exceeded": 0.25, "possible": 1.0, "below": 0.5, "not observable": 2.0}
    assert (found.grade, found.furthest) == ("exceeded", 1)
    assert grade_zone(values, np.ones(4), np.ones(4), -20.0, direction="below").furthest == 1
    assert grade_zone(values[3:], np.ones(1), np.ones(1), 1.0, direction="above").grade == "not observable"


def test_many_gauges_at_a_limit_do_not_make_a_zone_exceed_it():
    rng = np.random.default_rng(3)
    called, singly = [], []
    for _ in range(400):
        found = grade_zone(10.0 + rng.normal(size=100), np.ones(100), np.ones(100), 10.0, direction="above")
        called.append(found.grade == "exceeded")
        singly.append(found.areas["exceeded"] > 0)
    # 2.5 % to one side, binomial standard error 0.8 %
    assert np.mean(called) < 0.05
    assert np.mean(singly) > 0.8


def test_fewer_independent_gauges_need_less_to_be_clear():
    values, sd, areas = np.full(100, 12.5), np.ones(100), np.ones(100)
    assert grade_zone(values, sd, areas, 10.0, direction="above").grade == "possible"
    assert grade_zone(values, sd, areas, 10.0, direction="above", independent=3).grade == "exceeded"


def test_levels_stand_by_severity_and_the_worst_is_named():
    assert list(by_severity({"red": 20.0, "amber": 10.0}, direction="above")) == ["amber", "red"]
    assert list(by_severity({"red": -20.0, "amber": -10.0}, direction="below")) == ["amber", "red"]
    worst = worst_level({"amber": "exceeded", "red": "exceeded", "black": "possible"})
    assert (worst.exceeded, worst.possible) == ("red", "black")
    assert worst_level({"amber": "below"}).exceeded is None


@pytest.mark.parametrize(
    ("microstrain", "number"),
    [(-5000, 0), (0, 0), (499.9, 0), (500, 1), (749.9, 1), (750, 2), (1499.9, 2), (1500.1, 3), (3000, 4), (3000.1, 4)],
)
def test_classes_of_tensile_strain_hold_their_lower_end(microstrain, number):
    # Boscardin and Cording 1989: 0.05, 0.075, 0.15 and 0.3 %
    assert tensile_class(microstrain * 1e-6) == number


def test_classes_rise_come_by_name_and_bring_their_cautions():
    ends = list(BOSCARDIN_CORDING.values())
    assert ends == sorted(set(ends)) == [0.0005, 0.00075, 0.0015, 0.003]
    assert set(CLASSES) == set(CAUTIONS) == {"boscardin_cording_1989"}
    assert "tunnel linings" in " ".join(CAUTIONS["boscardin_cording_1989"])
    assert tensile_class(np.nan) == -1
