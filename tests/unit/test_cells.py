# SPDX-License-Identifier: MIT
"""The surface model against plain NumPy: hashing, moments, planes, cell means, spacing."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.cells import BLOCK_WIDTH, find_block, group, make_cells, median_spacing, tangents, voxel_keys

TILTED = np.linalg.qr(np.array([[0.8, 0.1, 0.3], [-0.2, 0.9, 0.2], [0.1, -0.3, 0.9]]))[0]
"""An orthonormal frame; its last column is the normal of the test plane."""


def plane(n, noise=0.0, seed=0, size=2.0):
    """Points of a tilted plane with noise along its normal."""
    rng = np.random.default_rng(seed)
    local = np.column_stack([rng.uniform(-size / 2, size / 2, (n, 2)), noise * rng.standard_normal(n)])
    return local @ TILTED.T


def test_keys_order_voxels_and_tell_them_apart():
    points = np.random.default_rng(1).uniform(-50, 50, (5000, 3))
    keys = voxel_keys(points, 0.7)
    index = np.floor(points / 0.7).astype(int)
    np.testing.assert_array_equal(np.argsort(keys, kind="stable"), np.lexsort(index.T[::-1]))
    assert len(np.unique(keys)) == len(np.unique(index, axis=0))


def test_group_finds_the_runs_of_equal_keys():
    keys = np.array([5, 3, 5, 9, 3, 3])
    order, unique, start = group(keys)
    assert order.tolist() == [1, 4, 5, 0, 2, 3]
    assert unique.tolist() == [3, 5, 9]
    assert start.tolist() == [0, 3, 5, 6]


def test_tangents_make_a_right_handed_frame_for_every_normal():
    rng = np.random.default_rng(2)
    normals = rng.standard_normal((200, 3))
    normals = np.concatenate([normals / np.linalg.norm(normals, axis=1, keepdims=True), np.eye(3), -np.eye(3)])
    for n in normals:
        a, b = np.array(tangents(*n)).reshape(2, 3)
        frame = np.stack([a, b, n], axis=1)
        np.testing.assert_allclose(frame.T @ frame, np.eye(3), atol=1e-12)
        assert np.linalg.det(frame) == pytest.approx(1.0)


def test_every_point_is_counted_once_in_a_cell_and_in_a_block():
    points = plane(4000, noise=1e-3)
    values = np.random.default_rng(3).uniform(0, 100, len(points))
    cells = make_cells(points, 0.05, intensity=values)
    assert cells.count.sum() == cells.weight.sum() == len(points)
    assert cells.start[0] == 0
    assert cells.start[-1] == len(cells) == len(cells.count)
    np.testing.assert_array_equal(np.repeat(np.arange(len(cells.key)), np.diff(cells.start)), cells.block)
    assert (np.diff(cells.key) > 0).all()
    # Sums over cells and over blocks are sums over points.
    np.testing.assert_allclose(cells.count @ cells.position, points.sum(axis=0), atol=1e-9)
    np.testing.assert_allclose(cells.weight @ cells.centre, points.sum(axis=0), atol=1e-9)
    assert cells.count @ cells.intensity == pytest.approx(values.sum())


def test_blocks_are_found_by_the_place_of_their_points():
    points = plane(4000)
    cells = make_cells(points, 0.05)
    for b, centre in enumerate(cells.centre):
        found = find_block(cells.key, cells.block_size, *centre)
        # The mean of a block's points may lie in the next voxel only by rounding, never by a block.
        assert found == b
    assert find_block(cells.key, cells.block_size, 50.0, 0.0, 0.0) == -1


def test_planes_and_roughness_of_a_noisy_plane():
    noise = 2e-3
    cells = make_cells(plane(60_000, noise=noise, size=3.0), 0.02)
    inside = np.linalg.norm(cells.centre, axis=1) < 1.2
    cosine = np.abs(cells.normal @ TILTED[:, 2])
    slope_sd = noise / np.sqrt(9 * cells.weight[inside].mean() * (3 * cells.block_size) ** 2 / 12)
    assert np.degrees(np.arccos(np.clip(cosine[inside], 0, 1))).max() < np.degrees(6 * slope_sd)
    assert np.median(cells.roughness[inside]) == pytest.approx(noise, rel=0.03)
    assert cells.planarity[inside].max() < 0.02


def test_an_edge_is_not_planar():
    rng = np.random.default_rng(5)
    u, v = rng.uniform(0, 1, (2, 8000))
    roof = np.stack([u - 0.5, v, -np.abs(u - 0.5)], axis=1)
    cells = make_cells(roof, 0.03)
    at_edge = np.abs(cells.centre[:, 0]) < 0.06
    away = np.abs(cells.centre[:, 0]) > 0.3
    assert cells.planarity[at_edge].min() > 10 * np.median(cells.planarity[away])


def test_cells_do_not_select_by_the_sign_of_the_noise():
    """Cell means of a plane that touches a voxel face have no bias along the normal, whatever the noise."""
    rng = np.random.default_rng(6)
    n, noise = 200_000, 4e-3
    points = np.column_stack([rng.uniform(0, 4, (n, 2)), noise * rng.standard_normal(n)])
    cells = make_cells(points, 0.02)
    standardised = cells.position[:, 2] * np.sqrt(cells.count) / noise
    assert standardised.std() == pytest.approx(1.0, abs=0.02)
    assert abs(standardised.mean()) < 4 / np.sqrt(len(cells))


def test_a_cell_holds_the_plain_mean_of_its_points():
    base = np.array([[0.011, 0.012, 0.0], [0.111, 0.012, 0.0], [0.011, 0.112, 0.0], [0.111, 0.112, 0.0]])
    offsets = np.random.default_rng(7).uniform(-2e-3, 2e-3, (5, 4, 3)) * [1, 1, 0]
    points = (base + offsets).reshape(-1, 3)
    grey = np.arange(20.0)
    cells = make_cells(points, 0.08, intensity=grey)
    assert len(cells) == 4
    order = np.lexsort(np.round(cells.position, 1).T)
    np.testing.assert_allclose(cells.position[order], base + offsets.mean(axis=0), atol=1e-12)
    np.testing.assert_allclose(cells.intensity[order], grey.reshape(5, 4).mean(axis=0))
    assert (cells.count == 5).all()


def test_order_of_points_does_not_matter():
    points = plane(3000, noise=1e-3)
    mixed = np.random.default_rng(8).permutation(len(points))
    one, other = make_cells(points, 0.05), make_cells(points[mixed], 0.05)
    np.testing.assert_array_equal(one.key, other.key)
    np.testing.assert_array_equal(one.count, other.count)
    np.testing.assert_allclose(one.position, other.position, atol=1e-12)


@pytest.mark.parametrize("spacing", [0.005, 0.02])
def test_spacing_is_the_side_of_the_square_that_holds_a_point(spacing):
    n = round(1.0 / spacing) ** 2 * 4
    assert median_spacing(plane(n, size=2.0)) == pytest.approx(spacing, rel=0.03)


def test_spacing_counts_duplicates_once():
    points = plane(10_000)
    assert median_spacing(np.repeat(points, 3, axis=0)) == pytest.approx(median_spacing(points), rel=0.03)
    assert median_spacing(np.zeros((200, 3))) == 0.0


def test_cells_carry_intensity_where_there_is_one():
    points = plane(500)
    cells = make_cells(points, 0.1, intensity=np.full(500, 7.0, np.float32))
    assert cells.block_size == pytest.approx(BLOCK_WIDTH * 0.1)
    np.testing.assert_allclose(cells.intensity, 7.0)
    assert make_cells(points, 0.1).intensity is None


def test_survey_coordinates_are_refused_as_local_ones():
    with pytest.raises(ValueError, match="too wide"):
        make_cells(plane(500) + np.array([482310.0, 5391270.0, 0.0]), 0.01)
