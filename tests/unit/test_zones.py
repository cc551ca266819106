# SPDX-License-Identifier: MIT
"""Zones: which points belong to a named part of the object."""

import numpy as np
import pytest
from matplotlib.path import Path as Outline

from scanstrain.epoch import make_epoch
from scanstrain.errors import OptionError
from scanstrain.zones import Unrolled, Zone, in_polygon, in_zone, mask_of, on_clock

ORIGIN = np.array([500_000.0, 4_000_000.0, 300.0])


@pytest.fixture
def points(global_random_seed=5):
    return np.random.default_rng(global_random_seed).uniform(-2, 2, (2000, 3))


def inside(zone, points, **options):
    return in_zone(zone, points, origin=ORIGIN, **options)


def test_a_box_and_a_height_are_in_file_coordinates(points):
    box = (tuple(ORIGIN - [1, 1, 1]), tuple(ORIGIN + np.array([1.5, 0.5, 1])))
    expected = ((points >= -1) & (points <= [1.5, 0.5, 1])).all(axis=1)
    np.testing.assert_array_equal(inside(Zone("a", box=box), points), expected)
    both = inside(Zone("a", box=box, height=(300.2, 400.0)), points)
    np.testing.assert_array_equal(both, expected & (points[:, 2] >= 0.2))


def test_polygons_agree_with_a_reference_library(points):
    """matplotlib.path.Path.contains_points, a reference from the registries."""
    corners = np.array([[-1.5, -1], [1, -1.7], [0.2, 0], [1.8, 1.5], [-1, 1.2]])
    np.testing.assert_array_equal(in_polygon(points[:, :2], corners), Outline(corners).contains_points(points[:, :2]))
    np.testing.assert_array_equal(in_polygon(points[:, :2], corners[::-1]), in_polygon(points[:, :2], corners))
    zone = Zone("a", polygon=tuple(map(tuple, corners + ORIGIN[:2])))
    assert inside(zone, points).mean() == Outline(corners).contains_points(points[:, :2]).mean()


@pytest.mark.parametrize(
    ("hours", "inside_at"), [((2, 4), [90]), ((10, 2), [-45, 0, 45]), ((12, 3), [0, 45, 90]), ((4, 8), [180, -150])]
)
def test_clock_ranges_pass_the_crown(hours, inside_at):
    degrees = np.array([-150, -90, -45, 0, 45, 90, 180])
    found = degrees[on_clock(np.radians(degrees), hours)]
    assert sorted(found) == sorted(inside_at)


def test_structure_coordinates_and_classes(points):
    flat = Unrolled(along=points[:, 0] + 10, across=points[:, 1], clock=points[:, 1] / 3)
    codes = (np.arange(len(points)) % 3).astype(np.uint8)
    zone = Zone("a", chainage=(9.0, 11.0), clock=(12, 2), surface_polygon=((9.5, -3), (12, -3), (12, 3), (9.5, 3)),
                classes=(1, 2))  # fmt: skip
    found = inside(zone, points, classification=codes, unrolled=flat)
    x, y = points[:, 0], points[:, 1]
    expected = (x >= -0.5) & (x <= 1) & (y >= 0) & (y <= np.pi) & (codes > 0)
    np.testing.assert_array_equal(found, expected)


@pytest.mark.parametrize(
    ("zone", "options", "says"),
    [
        (Zone("a", classes=(2,)), {}, "classification"),
        (Zone("a", chainage=(0, 1)), {}, "structure"),
        (Zone("a", clock=(0, 1)), {"unrolled": "wall"}, "tunnel"),
    ],
)
def test_what_cannot_be_judged_is_refused(points, zone, options, says):
    if options:
        options = {"unrolled": Unrolled(points[:, 0], points[:, 2], np.full(len(points), np.nan))}
    with pytest.raises(OptionError, match=says):
        inside(zone, points, **options)


def test_zones_are_joined_and_an_empty_one_is_named(points):
    epoch = make_epoch(points + ORIGIN, origin=ORIGIN)
    low, high = Zone("low", height=(298.0, 299.0)), Zone("high", height=(301.0, 302.0))
    np.testing.assert_array_equal(mask_of((low, high), epoch), np.abs(points[:, 2]) >= 1)
    with pytest.raises(OptionError, match=r"zone 'sky'.*none"):
        mask_of((low, Zone("sky", height=(400.0, 500.0))), epoch)
