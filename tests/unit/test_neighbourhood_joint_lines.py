# SPDX-License-Identifier: MIT
"""Lines of joints: laid on the surface, sides of points, and what of a patch lies beyond them."""

import numpy as np
import pytest

from scanstrain.cells import make_cells
from scanstrain.errors import OptionError
from scanstrain.neighbourhood.joint_cuts import beyond, cuts_at, no_cuts
from scanstrain.neighbourhood.joint_lines import Joint, lay_on_surface, pieces_of
from scanstrain.synthetic import Lining, Scene, Wall, sample_epoch

RADIUS = 0.3
PIECE = np.array([[0.1, -0.1, 0.1, 0.1, 0.0]])
"""A joint 0.1 m to the right of a gauge, 0.2 m long."""


def cells_of(surface, **options):
    epoch = sample_epoch(Scene(surface), deformed=False, spacing=0.02, seed=1, **options)
    return make_cells(epoch.points, 0.02)


@pytest.fixture(scope="module")
def wall():
    return cells_of(Wall(2.0, 2.0), noise=1e-3)


@pytest.fixture(scope="module")
def lining():
    return cells_of(Lining(1.5, 1.0), noise=1e-3)


def hidden(places, pieces, *, strip=False):
    return np.array([beyond(x, y, pieces, strip) for x, y in places])


def test_a_joint_hides_what_lies_in_its_shadow():
    """Similar triangles: the ray to (x, y) meets the plane of the joint at 0.1 y / x."""
    places = np.random.default_rng(1).uniform(-0.3, 0.3, (2000, 2))
    x, y = places.T
    shadow = (x > 0.1) & (np.abs(0.1 * y) < 0.1 * np.abs(x))
    np.testing.assert_array_equal(hidden(places, PIECE), shadow)


def test_the_strip_belongs_to_neither_side():
    places = np.random.default_rng(2).uniform(-0.3, 0.3, (2000, 2))
    wide = PIECE + np.array([0.0, 0.0, 0.0, 0.0, 0.02])
    x, y = places.T
    near = np.hypot(x - 0.1, y - np.clip(y, -0.1, 0.1)) < 0.02
    np.testing.assert_array_equal(hidden(places, wide, strip=True), near | hidden(places, PIECE))
    assert not beyond(-0.2, 0.0, PIECE, True)


def test_no_gap_opens_where_two_pieces_meet():
    pieces = np.array([[0.1, -0.3, 0.1, 0.0, 0.0], [0.1, 0.0, 0.1, 0.3, 0.0]])
    assert beyond(0.25, 0.0, pieces, False)


def test_cuts_are_in_the_frame_of_the_gauge_and_on_its_sheet():
    frame = np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 0.0], [0.0, 1.0, 0.0]])[None]
    origin = np.array([[5.0, 6.0, 7.0]])
    ends = np.array([[[5.0, 6.1, 6.9], [5.0, 6.1, 7.1]], [[4.6, 6.1, 6.9], [4.6, 6.1, 7.1]]])
    cuts = cuts_at(origin, frame, np.zeros((1, 3)), RADIUS, ends, np.array([0.01, 0.02]))
    np.testing.assert_allclose(cuts.pieces, [[0.1, -0.1, 0.1, 0.1, 0.01]], atol=1e-12)
    np.testing.assert_array_equal(cuts.start, [0, 1])
    assert len(cuts_at(origin + 9.0, frame, np.zeros((1, 3)), RADIUS, ends, np.ones(2)).pieces) == 0
    assert no_cuts(3).start.tolist() == [0, 0, 0, 0]


def test_right_is_right_as_seen_from_the_free_side(wall):
    """A vertical line, seen from where y is negative: x grows to the right."""
    trace = lay_on_surface(Joint("a", np.array([[1.0, 0.01, 0.2], [1.0, 0.01, 1.7]]), 0.0), wall, RADIUS)
    if trace.normal[0, 1] > 0:
        trace = type(trace)(trace.along, trace.node, -trace.normal)
    places, frames = trace.frames(trace.places(RADIUS))
    assert len(places) == 5
    np.testing.assert_allclose(frames[:, :, 0], np.tile([1.0, 0, 0], (5, 1)), atol=0.01)
    np.testing.assert_allclose(frames[:, :, 1], np.tile([0.0, 0, 1], (5, 1)), atol=0.01)
    np.testing.assert_allclose(places[:, 1], 0.0, atol=1e-3)  # on the surface, not where it was given
    points = np.array([[1.2, 0.0, 1.0], [0.9, 0.02, 1.0], [1.1, 0.0, 1.9], [0.9, 0.0, 0.0], [1.9, 0.0, 1.0]])
    np.testing.assert_allclose(trace.offsets(points, RADIUS, 0.5), [0.2, -0.1, np.nan, np.nan, np.nan], atol=2e-3)


def test_sides_hold_along_a_broken_line(wall):
    line = np.array([[0.0, 0.0, 1.0], [1.0, 0.0, 1.0], [2.0, 0.0, 0.0]])
    trace = lay_on_surface(Joint("a", line, 0.0), wall, RADIUS)
    x, z = np.random.default_rng(3).uniform(0.2, 1.8, (2, 3000))
    above = z > np.interp(x, line[:, 0], line[:, 2])
    offset = trace.offsets(np.column_stack([x, np.zeros_like(x), z]), RADIUS, 0.5)
    judged = np.abs(offset) > 0.005
    side = np.sign(offset[judged]) == np.sign(offset[judged][0])
    assert (side == (above[judged] == above[judged][0])).all()


def test_a_ring_joint_is_pulled_onto_the_lining(lining):
    """Corners a sixth of a circle apart: the chords stand 0.2 m off the wall, the laid line does not."""
    surface = Lining(1.5, 1.0)
    arc = surface.points(np.column_stack([np.linspace(0.5, 4.2, 3), np.full(3, 0.5)]))
    trace = lay_on_surface(Joint("ring", arc, 0.0), lining, RADIUS)
    _, height = surface.project(trace.node)
    assert np.abs(height).max() < 2e-3
    _, frames = trace.frames(trace.places(RADIUS))
    axis = frames[:, :, 0] @ surface.frames(np.zeros((1, 2)))[0][:, 1]
    assert np.abs(np.abs(axis) - 1).max() < 1e-3


def test_a_line_off_the_surface_is_refused(wall):
    with pytest.raises(OptionError, match=r"joint 'far'.*within 0\.30 m"):
        lay_on_surface(Joint("far", np.array([[0.0, 3.0, 0.0], [1.0, 3.0, 0.0]]), 0.0), wall, RADIUS)


def test_only_the_part_on_the_surface_is_kept(wall):
    line = np.array([[1.0, 0.0, 1.0], [9.0, 0.0, 1.0]])
    trace = lay_on_surface(Joint("a", line, 0.0), wall, RADIUS)
    assert 1.9 < trace.node[-1, 0] < 2.0 + RADIUS


def test_strips_are_as_wide_as_given_and_at_least_the_guard(wall):
    lines = [Joint(n, np.array([[x, 0.0, 0.5], [x, 0.0, 1.5]]), w) for n, x, w in (("a", 0.5, 0.1), ("b", 1.5, 0.0))]
    traces = [lay_on_surface(joint, wall, RADIUS) for joint in lines]
    ends, half = pieces_of(lines, traces, 0.006, RADIUS)
    np.testing.assert_allclose(half, np.where(ends[:, 0, 0] < 1.0, 0.05, 0.018))
