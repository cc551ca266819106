# SPDX-License-Identifier: MIT
"""The axis found in a cloud: within 2 mm, in spite of services, floors and end walls, and not where there is none."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.structures import fit_axis
from scanstrain.structures.smoothing import smooth

TUNNELS = runpy.run_path(str(Path(__file__).parents[1] / "structures_tunnels.py"))
centre_line, ring_points, box = TUNNELS["centre_line"], TUNNELS["ring_points"], TUNNELS["box"]

DENSITY = 250
"""Points a square metre: 6 cm spacing, far sparser than a survey, so that tests are quick."""

AXIS_WITHIN = 0.002
"""Demand on the axis of a bent tunnel [m]."""


@pytest.fixture
def rng():
    return np.random.default_rng(17)


def tunnel(rng, length, *, radius=3.0, share=1.0, clutter=0.0, floor=None, ends=False, **line):
    parts = [ring_points(rng, (0, length), radius=radius, density=DENSITY, share=share, clutter=clutter, **line)]
    if floor is not None:
        parts.append(TUNNELS["flat_floor"](rng, length, radius=radius, depth=floor, density=DENSITY, **line))
    if ends:
        parts.append(TUNNELS["end_walls"](rng, length, radius=radius, density=DENSITY, **line))
    return np.concatenate(parts)


@pytest.mark.parametrize(
    ("length", "scene", "line"),
    [
        (12.0, {}, {"bearing": 0.3}),
        (3.0, {"share": 0.75, "clutter": 0.05}, {"bearing": 0.3}),
        (12.0, {"share": 0.65, "clutter": 0.05, "floor": 1.36, "ends": True}, {"bearing": 1.2}),
        (20.0, {"share": 0.6, "clutter": 0.05}, {"bend": 50.0}),
        (20.0, {"share": 0.6, "clutter": 0.05, "floor": 0.93, "ends": True}, {"bend": 50.0}),
        (20.0, {"share": 0.6, "clutter": 0.05}, {"bend": 60.0, "slope": 0.15}),
        (15.0, {"share": 0.7, "clutter": 0.05}, {"slope": 0.5}),
        (110.0, {"share": 0.75, "clutter": 0.05}, {"bend": 50.0}),
    ],
    ids=["full", "short", "floor and ends", "bent", "bent, floor and ends", "bent ramp", "incline", "hairpin"],
)
def test_the_axis_is_found_within_two_millimetres(length, scene, line, rng):
    axis = fit_axis(tunnel(rng, length, **scene, **line))
    along = np.linspace(0, length, 100)
    place, forward = centre_line(along, **line)
    if forward.mean(axis=0)[np.argmax(np.abs(forward.mean(axis=0)))] < 0:
        along, forward = length - along, -forward
    s, offset = axis.project(place)
    assert np.linalg.norm(offset, axis=1).max() < AXIS_WITHIN
    # a cell at the very end is a few centimetres long
    np.testing.assert_allclose(s, along, atol=0.05)
    np.testing.assert_allclose(axis.directions(place), forward, atol=3e-3)
    assert axis.radius == pytest.approx(3.0, abs=5e-4)


def test_chainage_rises_along_the_largest_component_or_the_guide(rng):
    points = tunnel(rng, 10.0, share=0.7, bearing=2.0)
    axis = fit_axis(points)
    assert axis.tangents[0] @ [np.cos(2.0), np.sin(2.0), 0] == pytest.approx(1.0, abs=1e-4)
    back = fit_axis(points, guide=-axis.tangents[0])
    np.testing.assert_allclose(back.tangents[0], -axis.tangents[0], atol=1e-3)
    westward = fit_axis(tunnel(rng, 10.0, share=0.7, bearing=3.0))
    assert westward.tangents[0, 0] == pytest.approx(-np.cos(3.0), abs=1e-3)


def test_a_gap_in_a_bend_is_bridged(rng):
    points = tunnel(rng, 24.0, share=0.7, bend=50.0)
    axis = fit_axis(points[(points[:, 0] < 5) | (points[:, 0] > 10)])
    assert axis.length == pytest.approx(24.0, abs=0.05)
    assert np.linalg.norm(axis.project(centre_line([2.0, 20.0], bend=50.0)[0])[1], axis=1).max() < AXIS_WITHIN


def test_strays_before_the_portal_do_not_lengthen_the_axis(rng):
    strays = ring_points(rng, (12, 25), radius=3.0, density=0.3)
    axis = fit_axis(np.concatenate([tunnel(rng, 12.0, share=0.7), strays]))
    assert axis.length == pytest.approx(12.0, abs=0.2)


def test_a_rough_lining_has_an_axis_too(rng):
    def relief(clock, s):
        return 0.08 * np.sin(3 * clock + 5 * s) + 0.05 * np.sin(17 * clock - 3 * s) + 0.04 * np.sin(9 * s)

    axis = fit_axis(ring_points(rng, (0, 15), radius=3.0, density=DENSITY, share=0.65, radial=relief))
    assert np.abs(axis.nodes[:, 1:]).max() < 0.02


def test_a_shaft_has_its_axis_upwards(rng):
    level = ring_points(rng, (0, 10), radius=4.0, density=300)
    axis = fit_axis(level[:, [2, 1, 0]])
    np.testing.assert_allclose(axis.tangents[0], [0, 0, 1], atol=1e-3)
    np.testing.assert_array_equal(axis.overhead, [0, 1, 0])


def wall(rng):
    points = rng.uniform([0, 0, 0], [10, 0, 4], (24000, 3))
    points[:, 1] = 0.002 * rng.normal(size=24000) + 0.05 * np.sin(2 * points[:, 0]) * np.sin(3 * points[:, 2])
    return points


def sphere(rng):
    points = rng.normal(size=(30000, 3))
    return 3.0 * points / np.linalg.norm(points, axis=1, keepdims=True)


@pytest.mark.parametrize(
    "cloud",
    [
        wall,
        lambda rng: wall(rng)[:, [0, 2, 1]],
        lambda rng: box(rng, (5, 4, 3), density=DENSITY),
        lambda rng: np.concatenate([box(rng, (5, 4, 3), density=DENSITY), rng.uniform(0, (5, 4, 3), (1500, 3))]),
        lambda rng: box(rng, (12, 3, 3), density=DENSITY, faces=(1, 2, 4, 5)),
        lambda rng: box(rng, (12, 3, 3), density=DENSITY, faces=(1, 4)),
        lambda rng: ring_points(rng, (0, 10), radius=5.0, density=300, share=0.22),
        sphere,
        lambda rng: rng.normal(size=(20000, 3)),
        lambda rng: rng.normal(size=(5, 3)),
        lambda rng: np.outer(np.linspace(0, 10, 2000), [1.0, 0, 0]),
        lambda rng: np.ones((2000, 3)),
    ],
    ids=["wall", "floor", "room", "full room", "box", "two walls", "vault", "sphere", "cloud", "few", "line", "point"],
)
def test_what_is_no_tunnel_is_refused_in_one_sentence(cloud, rng):
    with pytest.raises(OptionError, match=r"^structure: required a tunnel or shaft .*; got [^;\n]*; [^;\n]*\.$"):
        fit_axis(cloud(rng))


def test_a_guide_square_to_the_tunnel_finds_none_and_a_guide_must_be_a_direction(rng):
    points = tunnel(rng, 10.0, share=0.7)
    with pytest.raises(OptionError, match="required a tunnel"):
        fit_axis(points, guide=[0, 1, 0])
    with pytest.raises(OptionError, match="three numbers"):
        fit_axis(points, guide=[0, 0, 0])


def test_smoothing_leaves_a_parabola_alone_and_carries_it_on():
    t = np.arange(60.0)
    exact = np.stack([0.02 * t**2 - t, 3 - 0.5 * t], axis=1)
    weight = np.ones(60)
    weight[[0, 59]] = 0
    weight[20:27] = 0
    given = np.where(weight[:, None] > 0, exact, 1e3)
    np.testing.assert_allclose(smooth(given, weight), exact, atol=1e-5)


def test_smoothing_takes_noise_out_and_keeps_the_shape(rng):
    t = np.arange(200.0)
    shape = np.stack([np.sin(2 * np.pi * t / 80), np.cos(2 * np.pi * t / 90)], axis=1)
    noisy = shape + 0.05 * rng.normal(size=shape.shape)
    left = smooth(noisy, np.ones(200)) - shape
    assert np.sqrt((left**2).mean()) < 0.02
