# SPDX-License-Identifier: MIT
"""Epochs drawn on a scene: density, noise, and that no point is drawn twice."""

import numpy as np
import pytest
from scipy.spatial import cKDTree

from scanstrain.synthetic import (
    Lining,
    Ovalisation,
    RandomField,
    Rigid,
    Scene,
    Wall,
    jittered_grid,
    pose_about,
    sample_epoch,
)

WALL = Scene(Wall(3.0, 2.0, bearing=0.3), origin=(482310.0, 5391270.0, 86.0))


def heights(epoch, scene):
    return scene.surface.project(epoch.points)[1]


def test_density_is_that_of_the_spacing():
    epoch = sample_epoch(WALL, deformed=False, spacing=0.01, seed=1)
    assert len(epoch) == 300 * 200
    assert epoch.origin.tolist() == [482310.0, 5391270.0, 86.0]


def test_noise_along_the_normal_has_the_stated_spread_and_no_other():
    epoch = sample_epoch(WALL, deformed=False, spacing=0.01, noise=7e-4, intensity_noise=12.0, seed=1)
    h = heights(epoch, WALL)
    # 60 000 values: their spread is known to 0.3 %
    assert h.std() == pytest.approx(7e-4, rel=0.012)
    assert abs(h.mean()) < 4 * 7e-4 / 60000**0.5
    assert epoch.intensity.std() == pytest.approx(12.0, rel=0.012)
    assert epoch.intensity.mean() == pytest.approx(1500.0, abs=0.2)
    neighbour = cKDTree(WALL.surface.project(epoch.points)[0]).query(WALL.surface.project(epoch.points)[0], k=2)[1][
        :, 1
    ]
    assert abs((h * h[neighbour]).mean() / h.var()) < 0.02


def test_isotropic_noise_also_moves_points_across_the_surface():
    def across(direction):
        epoch = sample_epoch(WALL, deformed=False, noise=7e-4, seed=1, noise_direction=direction)
        a, b = WALL.surface.project(epoch.points)[0], jittered_grid(WALL.surface, 0.01, np.random.default_rng(1))
        return (a - b).std()

    assert across("normal") < 1e-12
    assert across("isotropic") == pytest.approx(7e-4, rel=0.012)


def test_correlated_noise_keeps_the_variance_and_correlates_neighbours():
    epoch = sample_epoch(WALL, deformed=False, noise=1e-3, seed=1, correlated_share=0.3, correlation_length=0.1)
    h, q = heights(epoch, WALL), WALL.surface.project(epoch.points)[0]
    neighbour = cKDTree(q).query(q, k=2)[1][:, 1]
    assert h.std() == pytest.approx(1e-3, rel=0.02)
    assert (h * h[neighbour]).mean() / h.var() == pytest.approx(0.3, abs=0.03)


def test_outliers_stand_in_front_and_holes_are_empty():
    epoch = sample_epoch(WALL, deformed=False, noise=5e-4, seed=1, outliers=0.05, holes=((1.0, 1.0, 0.3),))
    h, q = heights(epoch, WALL), WALL.surface.project(epoch.points)[0]
    assert (h > 0.02).mean() == pytest.approx(0.05, abs=0.004)
    assert h.min() > -0.005
    assert np.hypot(*(q - 1.0).T).min() >= 0.3 - 1e-12


def test_epochs_share_no_point_and_seeds_repeat():
    a, b, again = (sample_epoch(WALL, deformed=False, noise=0.0, seed=seed) for seed in (1, 2, 1))
    assert a.points.tobytes() == again.points.tobytes()
    assert a.intensity.tobytes() == again.intensity.tobytes()
    distance = cKDTree(a.points).query(b.points)[0]
    # independent points at 10 mm: nearest ones are about 5 mm apart, and in 60 000 none coincides
    assert np.median(distance) > 0.003
    assert distance.min() > 1e-6


def test_noise_free_points_lie_on_the_moved_skin_and_the_pose_comes_last():
    lining = Lining(2.0, 3.0)
    relief = RandomField((4 * np.pi, 3.0), rms=1e-3, correlation_length=0.05, seed=3)
    scene = Scene(lining, Ovalisation(0.01), relief=relief)
    pose = pose_about(np.array([1.0, 0.0, 0.0]), (0.5, 0.2, -0.3), (0.01, 0.02, 0.03))
    plain = sample_epoch(scene, deformed=True, spacing=0.05, noise=0.0, seed=5)
    moved = sample_epoch(scene, deformed=True, spacing=0.05, noise=0.0, seed=5, pose=pose)
    np.testing.assert_allclose(moved.points, plain.points @ pose[:3, :3].T + pose[:3, 3], atol=1e-14)
    q = jittered_grid(lining, 0.05, np.random.default_rng(5))
    radius = np.hypot(plain.points[:, 1], plain.points[:, 2])
    expected = 2.0 + 0.01 * np.cos(2 * q[:, 0] / 2.0) - relief(q)
    # second order: tangential motion 5 mm shifts the radius by 5 mm^2 / 2R, the tilted relief by less
    np.testing.assert_allclose(radius, expected, atol=2e-5)
    assert np.abs(radius - expected).max() > 1e-6


def test_the_skin_follows_a_rigid_motion_rigidly():
    relief = RandomField((3.0, 2.0), rms=2e-3, correlation_length=0.05, seed=3)
    scene = Scene(WALL.surface, Rigid((0.2, 0.3, -0.1), (1.0, 2.0, 3.0)), relief=relief)
    q = jittered_grid(scene.surface, 0.05, np.random.default_rng(5))
    before, after = scene.points(q, deformed=False), scene.points(q, deformed=True)
    spans = [np.linalg.norm(p[1:] - p[:-1], axis=1) for p in (before, after)]
    np.testing.assert_allclose(spans[0], spans[1], atol=1e-14)
