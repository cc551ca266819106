# SPDX-License-Identifier: MIT
"""The plane of a wall found in a cloud in spite of what stands before it, and not where there is none."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.structures import fit_wall
from scanstrain.structures.wall_plane import lean_error

TESTS = Path(__file__).parents[1]
WALLS = runpy.run_path(str(TESTS / "structures_walls.py"))
TUNNELS = runpy.run_path(str(TESTS / "structures_tunnels.py"))
axes, yard, patch, box = WALLS["axes"], WALLS["yard"], WALLS["patch"], TUNNELS["box"]


@pytest.fixture
def rng():
    return np.random.default_rng(23)


@pytest.mark.parametrize(("bearing", "lean"), [(0.0, 0.0), (2.4, -0.08), (4.0, 0.01)], ids=["plumb", "battered", "out"])
def test_the_face_is_found_among_floor_returns_buttress_pipe_and_opening(bearing, lean, rng):
    wall = fit_wall(yard(rng, bearing=bearing, lean=lean))
    right, up, normal = axes(bearing, lean)
    np.testing.assert_allclose(wall.normal, normal, atol=3e-4)
    np.testing.assert_allclose(np.stack([wall.right, wall.up]), np.stack([right, up]), atol=3e-4)
    assert abs(wall.lean - lean) < 4 * wall.lean_sd < 4e-4
    np.testing.assert_allclose(wall.origin, [5.0, 3.0, 1.0], atol=0.06)
    assert (wall.length, wall.height) == pytest.approx((8.0, 4.0), abs=0.12)
    assert wall.warnings == ()


def test_distances_run_from_the_lower_left_corner_and_offsets_to_the_free_side(rng):
    wall = fit_wall(yard(rng, bearing=0.7))
    right, up, normal = axes(0.7)
    flat = wall.unroll((wall.origin + 2.0 * right + 1.5 * up + 0.02 * normal)[None])
    assert (flat.along[0], flat.across[0]) == pytest.approx((2.0, 1.5), abs=1e-3)
    assert np.isnan(flat.clock).all()
    places = wall.origin + np.outer([2.0, 2.0, -0.5, 9.0, 2.0], right) + 1.5 * up
    places += np.outer([0.02, 0.3, 0.0, 0.0, -0.02], normal)
    np.testing.assert_allclose(wall.offsets(places), [0.02, 0.3, 0.0, 0.0, -0.02], atol=3e-3)
    np.testing.assert_array_equal(wall.members(places), [True, False, False, False, True])
    facing = np.stack([normal, normal, normal, normal, right])
    np.testing.assert_array_equal(wall.members(places, facing), [True, False, False, False, False])


def test_what_bulges_already_belongs_to_the_face_and_does_not_tilt_it(rng):
    face = patch(rng, [0, 0, 0], [8, 0, 0], [0, 0, 4], density=400)
    away = np.hypot(face[:, 0] - 2, face[:, 2] - 3) / 0.9
    bulged = away < 1
    face[bulged, 1] -= 0.06 * (1 - away[bulged] ** 2) ** 2
    wall = fit_wall(face, free_side=[4, -5, 1])
    assert abs(wall.lean) < 3e-4
    assert wall.members(face).mean() > 0.98


def test_the_free_side_is_that_of_the_user_or_is_doubtful_on_a_bare_wall(rng):
    face = patch(rng, [0, 0, 0], [6, 0, 0], [0, 0, 3], density=400)
    for side in (-4.0, 4.0):
        wall = fit_wall(face, free_side=[3, side, 1])
        assert wall.normal[1] * side > 0.99 * abs(side)
        assert wall.right[0] * side < 0
        assert wall.warnings == ()
    bare = fit_wall(face)
    assert bare.normal[1] > 0.99
    assert "free_side" in bare.warnings[0]


def test_the_standard_error_of_the_lean_is_that_of_many_uneven_walls():
    rng = np.random.default_rng(5)
    x, y = np.meshgrid(np.arange(0.05, 6, 0.1), np.arange(0.05, 3, 0.1))
    stone = (x // 0.3).astype(int) * 10 + (y // 0.3).astype(int)
    leans, errors = [], []
    for _ in range(150):
        off = 0.005 * rng.normal(size=stone.max() + 1)[stone] + 0.001 * rng.normal(size=x.shape)
        points = np.stack([x.ravel(), -off.ravel(), y.ravel()], axis=1)
        slope = np.polynomial.polynomial.polyfit(y.ravel(), off.ravel(), 1)[1]
        leans.append(slope)
        errors.append(lean_error(points, points.mean(axis=0), np.array([0.0, -1.0, 0.0]), 0.1))
    assert np.std(leans) == pytest.approx(np.sqrt(np.mean(np.square(errors))), rel=0.2)


def tunnel(rng):
    return TUNNELS["ring_points"](rng, (0, 10), radius=2.5, density=250, share=0.7)


def floor(rng):
    return patch(rng, [0, 0, 0], [8, 0, 0], [0, 6, 0], density=300)


def room(rng):
    return box(rng, [8, 4, 3], density=150)


def blob(rng):
    return rng.normal(size=(15_000, 3))


def ball(rng):
    places = rng.normal(size=(20_000, 3))
    return 3 * places / np.linalg.norm(places, axis=1)[:, None]


@pytest.mark.parametrize("scene", [tunnel, floor, room, blob, ball, lambda rng: rng.random((8, 3))])
def test_a_wall_that_is_no_wall_is_refused_in_one_sentence(scene, rng):
    with pytest.raises(OptionError, match=r"^structure: required a wall .*; got .*; give two places") as caught:
        fit_wall(scene(rng))
    assert "\n" not in str(caught.value)


def test_a_wall_that_is_given_is_taken_as_it_is(rng):
    points = yard(rng, lean=0.02)
    right, up, _ = axes()
    upright = fit_wall(points, given=[[5.0, 3.0, 1.0], [13.0, 3.0, 1.0]])
    assert (upright.lean, upright.lean_sd, upright.length) == (0.0, 0.0, 8.0)
    np.testing.assert_allclose(np.stack([upright.right, upright.up]), np.stack([right, up]), atol=1e-12)
    top = 4 * axes(0.0, 0.02)[1]
    leaning = fit_wall(points, given=[[5.0, 3.0, 1.0], [13.0, 3.0, 1.0], np.array([6.0, 3.0, 1.0]) + top])
    assert leaning.lean == pytest.approx(0.02, abs=1e-12)
    assert leaning.height == pytest.approx(4.0, abs=0.05)


@pytest.mark.parametrize(
    ("given", "said"),
    [
        ([[5, 3, 1]], "two or three places"),
        ([[5, 3, 1], [5, 3, 1]], "upright plane"),
        ([[5, 3, 1], [13, 3, 1], [9, 9, 1.1]], "upright plane"),
        ([[5, 3, 3], [13, 3, 3], [9, 3, 1]], "upright plane"),
        ([[5, 43, 1], [13, 43, 1]], "scanned surface"),
    ],
)
def test_places_that_give_no_wall_are_refused(given, said, rng):
    with pytest.raises(OptionError, match=said):
        fit_wall(yard(rng, density=100), given=given)


def test_a_free_side_that_is_no_place_is_refused(rng):
    with pytest.raises(OptionError, match="a place x, y, z"):
        fit_wall(yard(rng), free_side=[1.0, np.nan, 2.0])
