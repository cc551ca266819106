# SPDX-License-Identifier: MIT
"""The axis as a curve: chainage, clock angle, directions, and axes given by the user."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.structures import given_axis
from scanstrain.structures.axis import curve_through

TUNNELS = runpy.run_path(str(Path(__file__).parents[1] / "structures_tunnels.py"))
centre_line, placed, ring_points = TUNNELS["centre_line"], TUNNELS["placed"], TUNNELS["ring_points"]


@pytest.fixture
def rng():
    return np.random.default_rng(41)


def line_to(end, start=(0, 0, 0), radius=2.0):
    return curve_through(np.array([start, end], float), radius)


def test_somebody_who_looks_north_has_east_at_three_o_clock():
    axis = line_to([0, 10, 0])
    places = np.array([[0, 4, 2], [2, 4, 0], [0, 4, -2], [-2, 4, 0]], float)
    unrolled = axis.unroll(places)
    np.testing.assert_allclose(unrolled.along, 4.0, atol=1e-12)
    np.testing.assert_allclose(np.abs(unrolled.clock), np.array([0, 1, 2, 1]) * np.pi / 2, atol=1e-12)
    assert unrolled.clock[1] > 0 > unrolled.clock[3]
    np.testing.assert_allclose(unrolled.across, unrolled.clock * 2.0)
    np.testing.assert_allclose(axis.unroll(places, 3.0).across, unrolled.clock * 3.0)


def test_looking_back_turns_the_clock_round():
    there, back = line_to([0, 10, 0]), line_to([0, 0, 0], start=[0, 10, 0])
    place = np.array([[2.0, 4, 0.5]])
    np.testing.assert_allclose(back.unroll(place).clock, -there.unroll(place).clock)
    np.testing.assert_allclose(back.unroll(place).along, 6.0)


@pytest.mark.parametrize(("bend", "slope"), [(50.0, 0.0), (60.0, 0.15), (12.0, 0.0)])
def test_chainage_offset_and_clock_of_a_bend_are_those_of_its_closed_form(bend, slope, rng):
    line = {"bend": bend, "slope": slope, "bearing": 0.4}
    axis = curve_through(centre_line(np.linspace(0, 20, 60), **line)[0], 3.0)
    s, clock, rho = rng.uniform(0, 20, 500), rng.uniform(-np.pi, np.pi, 500), rng.uniform(1, 3.2, 500)
    found, distance, angle = axis.polar(placed(s, rho * np.sin(clock), rho * np.cos(clock), **line))
    assert axis.length == pytest.approx(20.0, abs=1e-5)
    np.testing.assert_allclose(found, s, atol=2e-4)
    np.testing.assert_allclose(distance, rho, atol=2e-4)
    np.testing.assert_allclose(np.angle(np.exp(1j * (angle - clock))), 0.0, atol=2e-4)


def test_axial_directions_follow_the_bend(rng):
    line = {"bend": 50.0, "bearing": 0.4}
    axis = curve_through(centre_line(np.linspace(0, 20, 60), **line)[0], 3.0)
    s = rng.uniform(0, 20, 100)
    points = placed(s, np.full(100, 2.9), np.full(100, 0.7), **line)
    np.testing.assert_allclose(axis.directions(points), centre_line(s, **line)[1], atol=1e-4)


def test_beyond_its_ends_the_axis_goes_straight_on():
    axis = curve_through(centre_line(np.linspace(0, 20, 60), bend=50.0)[0], 3.0)
    tip = axis.at([20.0])[0] + 2.5 * axis.at([20.0])[1] + np.array([[0, 0, 1.5]])
    s, offset = axis.project(tip)
    assert s[0] == pytest.approx(22.5, abs=1e-6)
    np.testing.assert_allclose(offset, [[0, 0, 1.5]], atol=1e-6)


def test_twelve_o_clock_in_a_shaft_is_north():
    axis = line_to([0.1, 0, 10])
    unrolled = axis.unroll(np.array([[0.05, 2, 5], [-2, 0, 5]], float))
    np.testing.assert_allclose(unrolled.clock, [0, np.pi / 2], atol=0.02)


def test_a_given_axis_keeps_its_direction_and_takes_its_radius_from_the_scan(rng):
    points = ring_points(rng, (0, 10), radius=3.0, density=400, share=0.7)
    axis = given_axis([[10, 0, 0], [5, 0, 0], [0, 0, 0]], points)
    assert axis.length == pytest.approx(10.0)
    assert axis.radius == pytest.approx(3.0, abs=1e-3)
    np.testing.assert_allclose(axis.tangents[0], [-1, 0, 0], atol=1e-12)


@pytest.mark.parametrize(
    ("places", "words"),
    [
        ([[0, 0, 0], [10, 0, 7]], "no lining around it"),
        ([[0, 0, 0], [20, 0, 0]], "no lining around it on 5"),
        ([[0, 0, 90], [10, 0, 90]], "no lining around it on 100 %"),
        ([[0, 0, 0]], "two or more places"),
        ([[0, 0], [10, 0]], "two or more places"),
        ([[0, 0, 0], [np.nan, 0, 0]], "two or more places"),
        ([[0, 0, 0], [0, 0, 0], [10, 0, 0]], "places that differ"),
    ],
)
def test_an_axis_that_leaves_the_cloud_or_is_none_is_refused(places, words, rng):
    points = ring_points(rng, (0, 10), radius=3.0, density=100, share=0.7)
    with pytest.raises(OptionError, match=words):
        given_axis(places, points)
