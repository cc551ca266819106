# SPDX-License-Identifier: MIT
"""Cutting space, drawing points, work stores and values on disk."""

import numpy as np
import pytest
from scipy.spatial import cKDTree

from scanstrain.cells import median_spacing
from scanstrain.columns import Columns
from scanstrain.epoch import Epoch
from scanstrain.mapped import is_mapped, make_mapped, release, slices
from scanstrain.neighbourhood.piece import Box
from scanstrain.stores import make_store
from scanstrain.tiles import THINNED, cut_space, thinned

WALL = (8.0, 3.0)
HALO, MOST = 0.4, 4000


@pytest.fixture(scope="module")
def wall():
    """An uneven wall, dense on the left; with two strays and a tenth of its points twice."""
    rng = np.random.default_rng(5)
    places = rng.uniform(0, 1, (12_000, 2)) ** [1.5, 1.0] * WALL
    points = np.c_[places[:, 0], rng.normal(0, 1e-3, len(places)), places[:, 1]]
    points = np.concatenate([points, points[:1200], [[30.0, 0, 0], [0, 0, -40.0]]])
    points = points[rng.permutation(len(points))]
    return Epoch(
        points=points, origin=np.zeros(3), intensity=rng.uniform(0, 9, len(points)).astype(np.float32),
        setup=rng.integers(1, 3, len(points)).astype(np.uint16),
    )  # fmt: skip


@pytest.fixture(scope="module")
def tree(wall):
    return cut_space(wall.points, 1, HALO, MOST)


@pytest.fixture(scope="module")
def store(wall, tree, tmp_path_factory):
    return make_store(wall, tree, tmp_path_factory.mktemp("work") / "wall.store")


def test_tiles_cover_space_once_and_hold_no_more_than_asked(wall, tree):
    inside = np.stack([tree.boxes[tile].holds(wall.points) for tile in tree.tiles])
    assert (inside.sum(axis=0) == 1).all()
    assert len(tree.tiles) > 4
    assert max(tree.boxes[tile].grown(HALO).holds(wall.points).sum() for tile in tree.tiles) <= MOST


def test_every_point_lies_in_the_part_that_is_named(wall, tree):
    part = tree.part_of(wall.points)
    assert (tree.axis[part] == -1).all()
    for number in np.unique(part):
        assert tree.boxes[number].holds(wall.points[part == number]).all()


def test_a_store_gives_back_a_box_in_the_first_order(wall, store):
    box = Box(np.array([1.0, -1.0, 0.5]), np.array([3.0, 1.0, 2.0]))
    found, chosen = store.within(box), box.holds(wall.points)
    np.testing.assert_array_equal(found.points, wall.points[chosen])
    np.testing.assert_array_equal(found.intensity, wall.intensity[chosen])
    np.testing.assert_array_equal(found.setup, wall.setup[chosen])
    assert len(store.within(Box(np.full(3, 50.0), np.full(3, 51.0)))) == 0


def test_a_store_moves_points_as_the_epoch_does(wall, tree, tmp_path):
    T = np.eye(4)
    T[:3, :3] = [[0.6, -0.8, 0], [0.8, 0.6, 0], [0, 0, 1]]
    T[:3, 3] = 0.1, -0.2, 0.3
    moved = make_store(wall, tree, tmp_path / "moved", T).within(Box())
    np.testing.assert_array_equal(moved.points, wall.moved(T).points)
    np.testing.assert_allclose(moved.points, wall.points @ T[:3, :3].T + T[:3, 3], atol=1e-12)


def test_spacing_from_a_store_is_that_of_the_cloud(wall, store):
    """And of scipy's tree, with every point judged: the two draw the same points."""
    assert store.spacing() == pytest.approx(median_spacing(wall.points), rel=1e-12)
    distance = cKDTree(np.unique(wall.points, axis=0)).query(wall.points, k=9)[0][:, 8]
    assert store.spacing() == pytest.approx(np.median(distance) * np.sqrt(np.pi / 8), rel=0.02)


def test_few_points_stand_for_many_whatever_their_order(monkeypatch):
    rng = np.random.default_rng(1)
    points = rng.uniform(0, 9, (50_000, 3))
    epoch = Epoch(points=points, origin=np.zeros(3), intensity=np.arange(len(points), dtype=np.float32))
    assert thinned(epoch) is epoch
    assert len(points) <= THINNED
    monkeypatch.setattr("scanstrain.tiles.THINNED", 5000)
    few, turned = thinned(epoch), thinned(Epoch(points=points[::-1], origin=np.zeros(3)))
    assert len(few) == pytest.approx(5000, rel=0.1)
    np.testing.assert_array_equal(few.points, points[few.intensity.astype(int)])
    np.testing.assert_array_equal(turned.points[::-1], few.points)


def test_arrays_in_files_keep_what_was_let_go(tmp_path):
    array = make_mapped(tmp_path / "a", (1000, 3), np.float64)
    for rows in slices(len(array), 300):
        array[rows] = np.arange(rows.start, rows.stop)[:, None]
    part = np.asarray(array)[10:20]
    release(array, part, None, np.zeros(3))
    np.testing.assert_array_equal(part[:, 1], np.arange(10, 20))
    assert is_mapped(part)
    assert not is_mapped(np.zeros(3))


def test_columns_are_read_as_they_were_appended(tmp_path):
    columns = Columns(tmp_path / "values")
    for start in (0, 5):
        columns.append({"x": np.arange(start, start + 5, dtype=np.float32), "code": np.full(5, start, np.uint8)})
    assert list(columns) == ["x", "code"]
    np.testing.assert_array_equal(columns["x"], np.arange(10))
    np.testing.assert_array_equal(columns["code"], np.repeat([0, 5], 5))
    assert columns["code"].dtype == np.uint8
    assert columns.get("nothing") is None
