# SPDX-License-Identifier: MIT
"""Surfaces, random skins and fixtures: geometry and statistics."""

import numpy as np
import pytest

from scanstrain.synthetic import Box, Lining, RandomField, Rod, Wall

SURFACES = {
    "wall": Wall(8.0, 3.5, corner=(2.0, 1.0, 0.5), bearing=0.4),
    "arch": Lining(1.9, 8.0, arc=(-np.pi / 6, 7 * np.pi / 6), start=(1.0, 2.0, 1.4), bearing=0.6),
    "ring": Lining(3.0, 2.0, start=(1.0, 2.0, 1.4), bearing=-2.0),
}


@pytest.fixture(params=SURFACES)
def surface(request):
    return SURFACES[request.param]


@pytest.fixture
def places(surface):
    a0, a1, b0, b1 = surface.bounds
    return np.random.default_rng(1).uniform((a0, b0), (a1, b1), (500, 2))


def test_projection_undoes_the_map(surface, places):
    height = np.linspace(-0.01, 0.3, len(places))
    points = surface.points(places) + height[:, None] * surface.frames(places)[:, :, 2]
    q, h = surface.project(points)
    np.testing.assert_allclose(q, places, atol=1e-13)
    np.testing.assert_allclose(h, height, atol=1e-13)


def test_frames_are_right_handed_and_follow_the_coordinates(surface, places):
    F, h = surface.frames(places), 1e-6
    np.testing.assert_allclose(F.transpose(0, 2, 1) @ F, np.broadcast_to(np.eye(3), F.shape), atol=1e-14)
    np.testing.assert_allclose(np.linalg.det(F), 1.0)
    for j in (0, 1):
        e = h * np.eye(2)[j]
        numeric = (surface.points(places + e) - surface.points(places - e)) / (2 * h)
        np.testing.assert_allclose(F[:, :, j], numeric, atol=1e-9)
    turn = (surface.frames(places + np.array([h, 0]))[:, :, 0] - surface.frames(places - np.array([h, 0]))[:, :, 0]) / (
        2 * h
    )
    np.testing.assert_allclose(turn, surface.curvature * F[:, :, 2], atol=1e-9)


def test_the_crown_is_up_and_the_right_springline_right():
    lining = Lining(2.0, 5.0)
    places = lining.points(np.array([[0.0, 1.0], [np.pi, 1.0]]))
    # forward is +x, so right is -y
    np.testing.assert_allclose(places, [[1.0, -2.0, 0.0], [1.0, 0.0, 2.0]], atol=1e-15)


def test_beams_end_on_the_surface(surface, places):
    start = surface.points(np.array([[1.0, 1.0]]))[0] + 1.2 * surface.frames(np.array([[1.0, 1.0]]))[0, :, 2]
    d = surface.points(places) - start
    far = np.linalg.norm(d, axis=1)
    np.testing.assert_allclose(surface.ranges(start, d / far[:, None]), far, rtol=1e-12)


def test_beams_away_from_a_wall_never_end():
    wall = Wall(8.0, 3.5)
    assert wall.ranges(np.array([1.0, -2.0, 1.0]), np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0]])).tolist() == [
        np.inf,
        np.inf,
    ]


def test_a_random_field_has_the_stated_spread_and_correlation():
    field = RandomField((8.0, 8.0), rms=0.003, correlation_length=0.05, seed=1)
    q = np.random.default_rng(2).uniform(0, 8, (60000, 2))
    values = field(q)
    # some 25 000 independent patches: mean and spread are known to 1 %
    assert abs(values.mean()) < 0.003 * 0.02
    assert values.std() == pytest.approx(0.003, rel=0.02)
    for lag, expected in ((0.025, np.exp(-0.25)), (0.05, np.exp(-1)), (0.1, np.exp(-4))):
        for shift in ([lag, 0], [0, lag], [lag * 0.6, lag * 0.8]):
            assert (values * field(q + shift)).mean() / values.var() == pytest.approx(expected, abs=0.025)


def test_a_random_field_knows_its_gradient_and_closes():
    field = RandomField((2.0, 3.0), rms=1.0, correlation_length=0.05, seed=1)
    q = np.random.default_rng(2).uniform(-1, 3, (500, 2))
    for j in (0, 1):
        e = 1e-6 * np.eye(2)[j]
        np.testing.assert_allclose(field.gradient(q)[:, j], (field(q + e) - field(q - e)) / 2e-6, atol=1e-6)
    np.testing.assert_allclose(field(q), field(q + np.array([2.0, -3.0])), atol=1e-11)


def test_a_random_field_is_the_same_at_every_call_and_another_for_another_seed():
    q = np.random.default_rng(2).uniform(0, 2, (500, 2))
    make = {"rms": 1.0, "correlation_length": 0.05}
    first = RandomField((2.0, 2.0), seed=1, **make)(q)
    assert first.tobytes() == RandomField((2.0, 2.0), seed=1, **make)(q).tobytes()
    assert abs(np.corrcoef(first, RandomField((2.0, 2.0), seed=2, **make)(q))[0, 1]) < 0.3


def test_a_rod_is_hit_on_its_near_side_within_its_length():
    rod = Rod((2.0, 0.0, 0.0), (2.0, 0.0, 1.0), 0.1)
    d = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 0.0], [1.0, 0.0, 1.0]]) / np.array([[1], [1], [2**0.5]])
    distance, normal = rod.hit(np.array([0.0, 0.0, 0.5]), d)
    assert distance.tolist() == [pytest.approx(1.9), np.inf, np.inf]
    np.testing.assert_allclose(normal[0], [-1.0, 0.0, 0.0], atol=1e-12)


def test_a_box_is_hit_on_the_face_that_looks_at_the_beam():
    box = Box((3.0, 0.0, 0.0), (1.0, 2.0, 4.0), bearing=0.0)
    d = np.array([[1.0, 0.0, 0.0], [-1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    distance, normal = box.hit(np.zeros(3), d)
    assert distance.tolist() == [2.5, np.inf, np.inf]
    np.testing.assert_array_equal(normal[0], [-1.0, 0.0, 0.0])
    turned = Box((3.0, 0.0, 0.0), (1.0, 2.0, 4.0), bearing=np.pi / 2)
    assert turned.hit(np.zeros(3), d)[0][0] == pytest.approx(2.0)
