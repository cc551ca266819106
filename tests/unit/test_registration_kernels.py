# SPDX-License-Identifier: MIT
"""The compiled kernels of the registration against plain NumPy or brute force."""

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.registration.fit import sums
from scanstrain.registration.match import Metric, nearest, observe, pair
from scanstrain.registration.surfaces import BORDER, UNUSABLE, USABLE, make_surface

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))


@pytest.fixture(scope="module")
def surfaces():
    rng = np.random.default_rng(2)
    return [make_surface(SCENES["room"](rng, 30_000, noise=0.002), 0.2) for _ in range(2)]


def test_sums_per_group():
    rng = np.random.default_rng(0)
    row, half = rng.normal(size=(2, 200, 7))
    r, w, g = rng.normal(size=200), rng.uniform(0, 1, 200) * (rng.random(200) > 0.2), rng.integers(0, 5, 200)
    full, shared, right = sums(row, half, r, w, g, 5)
    for k in range(5):
        a, b, u = row[g == k], half[g == k], w[g == k]
        np.testing.assert_allclose(full[k], (a * u[:, None]).T @ a, rtol=1e-12, atol=1e-14)
        np.testing.assert_allclose(shared[k], (a * u[:, None]).T @ a - (b * u[:, None]).T @ b, rtol=1e-12, atol=1e-13)
        np.testing.assert_allclose(right[k], (a * u[:, None]).T @ r[g == k], rtol=1e-12, atol=1e-14)


def test_nearest_block_is_that_of_brute_force(surfaces):
    """Among the 27 voxels around, with like normals and usable on both sides."""
    a, b = surfaces
    T = SCENES["motion"](2.0, 0.05)
    found = nearest(a, b, T)
    back = np.linalg.inv(T)
    centre, normal = SCENES["apply"](back, a.cells.centre), a.cells.normal @ back[:3, :3].T
    gap = np.linalg.norm(centre[:, None] - b.cells.centre[None], axis=2)
    # Blocks hold points as projected, so a centre may lie outside its own voxel: go by the voxel's key.
    bits = (1 << 20) - 1
    voxel = np.stack([(b.cells.key >> s) & bits for s in (40, 20, 0)], axis=1) - (1 << 19)
    around = np.abs(np.floor(centre / b.width)[:, None] - voxel[None]).max(axis=2) <= 1
    alike = np.abs(normal @ b.cells.normal.T) >= 0.94
    gap[~(around & alike) | (b.state == UNUSABLE)[None] | (a.state == UNUSABLE)[:, None]] = np.inf
    expected = np.where(np.isfinite(gap).any(axis=1), gap.argmin(axis=1), -1)
    np.testing.assert_array_equal(found, expected)
    assert (found >= 0).mean() > 0.3


def test_rows_are_the_derivatives_of_the_residual(surfaces):
    """Of a turn, a shift and a larger current cloud, by their formulas in plain NumPy."""
    a, b = surfaces
    metric = Metric(np.array([0.2, -0.1, 0.3]), 2.5)
    pairs = pair(a, b, np.eye(4))
    rows = observe(a, b, pairs, np.eye(4), metric)
    p, q = pairs.T
    n = a.cells.normal[p] * np.sign(np.einsum("ij,ij->i", a.cells.normal[p], b.cells.normal[q]))[:, None]
    n = n + b.cells.normal[q]
    n /= np.linalg.norm(n, axis=1, keepdims=True)
    facing = np.abs(a.cells.normal[p]).argmax(axis=1)
    n *= np.sign(n[np.arange(len(n)), facing])[:, None]
    x, y = b.cells.centre[q], a.cells.centre[p]
    np.testing.assert_allclose(rows.residual, ((y - x) * n).sum(axis=1), atol=1e-15)
    arm = ((x + y) / 2 - metric.pivot) / metric.arm
    for k, axis in enumerate(np.eye(3)):
        np.testing.assert_allclose(rows.row[:, k], (np.cross(axis, arm) * n).sum(axis=1), atol=1e-14)
        np.testing.assert_allclose(rows.row[:, 3 + k], n @ axis, atol=1e-14)
    np.testing.assert_allclose(rows.row[:, 6], -(arm * n).sum(axis=1), atol=1e-14)


def test_two_places_on_one_circle_leave_no_residual():
    """The symmetric form: curvature gives no bias at any tangential distance."""
    t = np.linspace(-0.3, 0.4, 8)
    p = 3 * np.c_[np.cos(t), np.sin(t)]
    chord, mean = p[1:] - p[:-1], p[1:] / 3 + p[:-1] / 3
    np.testing.assert_allclose((chord * mean).sum(axis=1), 0, atol=1e-15)
    rng = np.random.default_rng(1)
    a, b = (
        make_surface(SCENES["lining"](rng, noise=0.0), 0.1, T_grid_epoch=T) for T in (None, SCENES["motion"](40, 0))
    )
    T = np.linalg.inv(SCENES["motion"](40, 0))
    rows = observe(a, b, pair(a, b, T), T, Metric(np.zeros(3), 1.0))
    inwards = np.sign((rows.place * [0, 1, 1] * rows.row[:, 3:6]).sum(axis=1))
    # One-sided point-to-plane would see half of offset^2 / radius: 0.5 mm for an offset of 30 mm.
    assert abs((rows.residual * inwards).mean()) < 5e-5


def test_edges_of_a_wall_are_borders_and_its_middle_is_not():
    surface = make_surface(SCENES["wall"](np.random.default_rng(3)), 0.085)
    half = np.abs(surface.cells.centre[:, [0, 2]]).max(axis=0)
    inside = (np.abs(surface.cells.centre[:, [0, 2]]) < half - 0.2).all(axis=1)
    dense = surface.cells.weight > 60
    assert (surface.state[inside & dense] == USABLE).mean() > 0.98
    outermost = (np.abs(surface.cells.centre[:, [0, 2]]) > half - 0.03).any(axis=1)
    assert (surface.state[outermost & dense] == BORDER).mean() > 0.9


def test_a_clump_is_no_surface():
    surface = make_surface(np.random.default_rng(4).uniform(0, 1, (40_000, 3)), 0.1)
    assert (surface.state == UNUSABLE).mean() > 0.95
