# SPDX-License-Identifier: MIT
"""Stable ground: patches that moved as one are told from those that stood still."""

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.registration.match import Metric
from scanstrain.registration.patches import Patches, patch_of_blocks
from scanstrain.registration.stable import Hypothesis
from scanstrain.registration.stable import choose_ground as choose
from scanstrain.registration.surfaces import make_surface

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
METRIC = Metric(np.zeros(3), 4.0)
SD = 1e-4


def choose_ground(seen, strong, metric, places, seed):
    return choose([Hypothesis(np.zeros(6), seen)], strong, metric, places, limit=np.inf, seed=seed)


def patches(rng, moved_share, sigmas, count=120):
    """Patches of a closed box 6 x 4 x 3 m, the ones with the lowest x moved by a shift along their normals."""
    half = np.array([3.0, 2.0, 1.5])
    face = rng.integers(0, 3, count)
    side = rng.choice([-1.0, 1.0], count)
    x = rng.uniform(-1, 1, (count, 3)) * half
    x[np.arange(count), face] = side * half[face]
    n = np.eye(3)[face]
    moved = x[:, 0] < np.quantile(x[:, 0], moved_share)
    row = np.c_[np.cross(x / METRIC.arm, n), n]
    shift = sigmas * SD * moved * np.where(face == 0, 0.0, side)
    return Patches(row, rng.normal(0, SD, count) + shift, np.full(count, SD), np.full(count, 10.0)), moved, x


@pytest.mark.parametrize("share", [0.3, 0.4])
@pytest.mark.parametrize("sigmas", [8, 20, 100])
def test_moved_patches_do_not_leak_into_the_datum(share, sigmas):
    worst = []
    for seed in range(8):
        seen, moved, x = patches(np.random.default_rng(seed), share, sigmas)
        ground = choose_ground(seen, np.eye(6), METRIC, x, 0)
        worst.append(np.linalg.norm(ground.motion) / SD)
        face_moved = moved & (np.abs(x[:, 0]) < 2.99)
        assert ground.stable[face_moved].mean() < 0.1
        assert ground.stable[~face_moved].mean() > 0.9
    # A plain fit is off by 3 sd and more at 8 sd of movement; the best possible one by about 0.5.
    assert np.median(worst) < 1.0


def test_nothing_moved_keeps_everything():
    seen, _, x = patches(np.random.default_rng(3), 0.3, 0.0)
    ground = choose_ground(seen, np.eye(6), METRIC, x, 0)
    assert ground.share > 0.95
    assert ground.second_share < 0.05


def test_a_second_group_is_reported_with_its_effect():
    rng = np.random.default_rng(4)
    seen, _, x = patches(rng, 0.0, 0.0)
    half = x[:, 0] < np.quantile(x[:, 0], 0.45)
    shift = 50 * SD * np.array([0.0, 0.6, 0.8])
    seen = Patches(seen.row, seen.residual + half * (seen.row[:, 3:] @ shift), seen.sd, seen.blocks)
    ground = choose_ground(seen, np.eye(6), METRIC, x, 0)
    assert ground.second_share > 0.3
    assert ground.second_shift == pytest.approx(50 * SD, rel=0.2)


def test_the_choice_is_repeatable():
    seen, _, x = patches(np.random.default_rng(5), 0.4, 10)
    first, second = (choose_ground(seen, np.eye(6), METRIC, x, 7) for _ in range(2))
    np.testing.assert_array_equal(first.motion, second.motion)
    np.testing.assert_array_equal(first.stable, second.stable)


def test_patches_are_not_cut_by_the_sign_of_the_noise():
    """A wall in the very plane of a patch boundary: both signs of the block heights share their patches."""
    surface = make_surface(SCENES["wall"](np.random.default_rng(6)), 0.085)
    index, count = patch_of_blocks(surface)
    positive = surface.cells.centre[:, 1] > 0
    both = [len(set(positive[index == k])) == 2 for k in range(count) if (index == k).sum() > 8]
    assert np.mean(both) > 0.9
    assert index.min() == 0
    assert count == index.max() + 1


def test_ground_on_both_ends_wins_over_a_larger_part_between_them_and_says_so():
    """A plane wall 12 m long: its middle 55 % moved; the two ends fix tilt and shift 2-3 times better."""
    rng = np.random.default_rng(7)
    x = np.c_[rng.uniform(-6, 6, 240), np.zeros(240), rng.uniform(-1, 1, 240)]
    row = np.c_[np.cross(x / METRIC.arm, [0, 1, 0]), np.tile([0.0, 1.0, 0.0], (240, 1))]
    middle = np.abs(x[:, 0]) < 3.3
    seen = Patches(row, rng.normal(0, SD, 240) + 30 * SD * middle, np.full(240, SD), np.full(240, 10.0))
    strong = np.eye(6)[:, [0, 2, 4]]
    ground = choose_ground(seen, strong, METRIC, x, 0)
    assert ground.by_strength
    assert ground.stable[~middle].mean() > 0.95
    assert ground.stable[middle].mean() < 0.05
    assert ground.second_share > ground.share
    assert ground.second_shift == pytest.approx(30 * SD, rel=0.3)
