# SPDX-License-Identifier: MIT
"""The registration stage as callers see it: exactness, accuracy, weak motions, moved ground, starts, refusals."""

import re
import runpy
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.errors import MissingDependencyError, OptionError, OverlapError, RegistrationError
from scanstrain.registration import register

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, epoch, lining, motion, room, wall = (
    SCENES[name] for name in ("apply", "epoch", "lining", "motion", "room", "wall")
)


def pair(make, seed, T=None, **options):
    """Two clouds of one surface and the second as a scanner sees it whose frame `T` takes to the first's."""
    rng = np.random.default_rng(seed)
    a, b = make(rng, **options), make(rng, **options)
    return a, b, b if T is None else apply(np.linalg.inv(T), b)


@pytest.mark.parametrize(("degrees", "metres", "start"), [(0.5, 0.03, "auto"), (10, 1.0, "auto"), (30, 10.0, "near")])
def test_identical_points_come_back_exactly(degrees, metres, start):
    T = motion(degrees, metres)
    points = room(np.random.default_rng(1))
    start = motion(0.3, 0.05) @ T if start == "near" else start
    result = register(epoch(points), epoch(apply(np.linalg.inv(T), points)), start=start)
    error = apply(result.T_ref_cur, apply(np.linalg.inv(T), points)) - points
    assert np.abs(error).max() < 1e-9
    assert result.weak_directions == ()
    assert result.converged
    R = result.T_ref_cur[:3, :3]
    np.testing.assert_allclose(R @ R.T, np.eye(3), atol=1e-14)


@pytest.mark.parametrize("make", [wall, lining])
def test_error_without_change_is_below_a_twentieth_of_a_millimetre(make):
    """Spacing 7 mm, noise 2 mm, 200 000 points; along the normals, since the rest is not fixed."""
    T = motion(0.2, 0.02)
    a, _, seen = pair(make, 2, T, n=200_000)
    result = register(epoch(a), epoch(seen))
    # The free motions stay at the start; the surface itself tells how far it was left from where it was.
    moved = apply(result.T_ref_cur, seen)
    if make is wall:
        plane = np.linalg.lstsq(np.c_[moved[:, [0, 2]], np.ones(len(moved))], moved[:, 1], rcond=None)[0]
        fitted = np.c_[moved[:, [0, 2]], np.ones(len(moved))] @ plane
        error = np.sqrt((fitted**2).mean())
    else:
        # Radial modes of a rigid motion: shift and tilt of the axis.
        t = np.arctan2(moved[:, 2], moved[:, 1])
        modes = np.c_[np.cos(t), np.sin(t), moved[:, 0] * np.cos(t), moved[:, 0] * np.sin(t)]
        height = np.hypot(moved[:, 1], moved[:, 2]) - 0.8
        error = np.sqrt(((modes @ np.linalg.lstsq(modes, height, rcond=None)[0]) ** 2).mean())
    # The fit itself and the cloud that judges it each know the surface to some 0.01 mm.
    assert error < 0.05e-3
    assert result.overlap > 0.95
    assert result.stable_fraction > 0.9
    assert result.rms == pytest.approx(np.sqrt(2) * 0.002 / 12, rel=0.3)


def test_a_smooth_tunnel_names_slide_and_roll_and_holds_them():
    rng = np.random.default_rng(3)
    a, b = lining(rng), lining(rng)
    slid = b @ Rotation.from_rotvec([0.005 / 0.8, 0, 0]).as_matrix().T + [0.05, 0, 0]
    result = register(epoch(a), epoch(slid))
    assert [w.description for w in result.weak_directions] == [
        "slide along the tunnel axis",
        "roll about the tunnel axis",
    ]
    assert abs(result.T_ref_cur[0, 3]) < 2e-3
    sd = np.sqrt(np.diagonal(result.displacement_covariance(b), axis1=1, axis2=2))
    assert sd[:, 0].min() > 0.05
    normals = SCENES["lining_normals"](b)
    across = np.einsum("ni,nij,nj->n", normals, result.displacement_covariance(b), normals)
    # What is held must not blur what is known.
    assert np.sqrt(across.max()) < 0.2e-3
    assert any("held at the start value" in sentence for sentence in result.warnings)


def test_a_plain_wall_has_three_weak_motions_and_one_with_relief_has_none():
    a, _, seen = pair(wall, 4)
    result = register(epoch(a), epoch(seen))
    assert len(result.weak_directions) == 3
    assert np.isnan(result.scale_ppm)
    assert np.isnan(result.scale_ppm_sd)
    a, _, seen = pair(wall, 4, relief=0.01)
    assert register(epoch(a), epoch(seen)).weak_directions == ()


def test_the_same_cloud_twice_has_not_moved():
    points = wall(np.random.default_rng(5))
    result = register(epoch(points), epoch(points.copy()))
    assert np.abs(apply(result.T_ref_cur, points) - points).max() < 1e-4
    assert np.isfinite(result.covariance).all()


@pytest.mark.parametrize("share", [0.3, 0.4])
@pytest.mark.parametrize("step", [0.01, 0.04])
def test_a_moved_part_does_not_move_the_datum(share, step):
    """5 to 20 standard deviations of a point, coherently."""
    a, b, _ = pair(wall, 6, n=80_000)
    moved = b[:, 0] < np.quantile(b[:, 0], share)
    result = register(epoch(a), epoch(b + np.where(moved[:, None], [0, step, 0], 0.0)))
    error = (apply(result.T_ref_cur, b) - b)[~moved, 1]
    assert np.sqrt((error**2).mean()) < 0.1e-3
    assert result.stable[a[:, 0] < np.quantile(a[:, 0], share - 0.05)].mean() < 0.02
    assert result.stable[a[:, 0] > np.quantile(a[:, 0], share + 0.2)].mean() > 0.9


@pytest.mark.parametrize(("share", "relief"), [(0.5, 0.0), (0.6, 0.0), (0.5, 0.01)])
def test_half_moved_is_called_ambiguous_and_control_settles_it(share, relief):
    a, b, _ = pair(wall, 7, n=80_000, relief=relief)
    edge = np.quantile(b[:, 0], share)
    current = epoch(b + np.where((b[:, 0] < edge)[:, None], [0, 0.02, 0], 0.0))
    result = register(epoch(a), current)
    said = next(sentence for sentence in result.warnings if "ambiguous" in sentence)
    # With relief the two halves also say, badly, how they moved in the plane.
    assert float(re.search(r"up to ([\d.]+) mm", said)[1]) == pytest.approx(20, abs=10 if relief else 0.5)
    control = a[:, 0] > edge + 0.1
    result = register(epoch(a), current, stable=control)
    error = (apply(result.T_ref_cur, b) - b)[b[:, 0] > edge, 1]
    assert np.sqrt((error**2).mean()) < (0.15e-3 if relief else 0.1e-3)
    assert not result.stable[~control].any()


def test_all_ground_takes_the_moved_part_in():
    a, b, _ = pair(wall, 8)
    moved = b[:, 0] < np.quantile(b[:, 0], 0.3)
    current = epoch(b + np.where(moved[:, None], [0, 0.002, 0], 0.0))
    shift = [
        (apply(register(epoch(a), current, stable=ground).T_ref_cur, b) - b)[~moved, 1].mean()
        for ground in ("auto", "all")
    ]
    assert abs(shift[0]) < 0.1e-3
    assert abs(shift[1]) > 2 * abs(shift[0])


@pytest.fixture(scope="module")
def partly_moved():
    """A wall of which the left 30 % moved by 6 mm, and what moved in the reference."""
    a, b, _ = pair(wall, 9, n=80_000)
    moved = b[:, 0] < np.quantile(b[:, 0], 0.3)
    return epoch(a), epoch(b + np.where(moved[:, None], [0, 0.006, 0], 0.0)), a[:, 0] < np.quantile(a[:, 0], 0.3)


def test_an_excluded_part_is_never_stable_ground(partly_moved):
    reference, current, moved = partly_moved
    found = register(reference, current, excluded=moved)
    assert not found.stable[moved].any()
    assert found.ground.chosen_by == "auto"
    assert found.ground.share > 0.9


def test_named_ground_that_did_not_stand_still_is_doubted(partly_moved):
    reference, current, moved = partly_moved
    mixed = register(reference, current, stable=np.ones(len(reference), bool))
    assert mixed.ground.chosen_by == "given"
    assert mixed.ground.second_shift == pytest.approx(0.006, rel=0.5)
    assert any("check that it stood still" in sentence for sentence in mixed.warnings)
    right = register(reference, current, stable=~moved)
    assert not any("stood still" in sentence for sentence in right.warnings)


@pytest.mark.parametrize("ppm", [0.0, 500.0])
def test_scale_is_reported_and_never_applied(ppm):
    a, b, _ = pair(lining, 9, n=80_000)
    result = register(epoch(a), epoch(b * (1 + 1e-6 * ppm)))
    assert result.scale_ppm == pytest.approx(ppm, abs=4 * result.scale_ppm_sd)
    assert result.scale_ppm_sd < 60
    assert np.linalg.det(result.T_ref_cur[:3, :3]) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("degrees", [10, 30])
def test_coarse_start_finds_the_room_again(degrees):
    T = motion(degrees, 1.0)
    a, b, seen = pair(room, 10, T, noise=0.002)
    result = register(epoch(a), epoch(seen))
    assert result.start == "coarse"
    assert np.abs(apply(result.T_ref_cur, seen) - b).max() < 0.5e-3


def test_a_start_can_be_given_as_a_matrix():
    T = motion(35, 2.0)
    a, b, seen = pair(room, 11, T, noise=0.002)
    result = register(epoch(a), epoch(seen), start=motion(1, 0.05) @ T)
    assert result.start == "given"
    assert np.abs(apply(result.T_ref_cur, seen) - b).max() < 0.5e-3


def test_partial_overlap_is_told():
    a, b, _ = pair(room, 12, noise=0.002)
    result = register(epoch(a), epoch(b[b[:, 0] < 0.5]))
    assert 0.4 < result.overlap < 0.9
    assert not result.stable[a[:, 0] > 1.0].any()
    assert result.stable[a[:, 0] < 0.2].mean() > 0.6


def test_same_call_same_digits():
    a, _, seen = pair(room, 13, motion(0.5, 0.02), noise=0.002)
    first, second = (register(epoch(a), epoch(seen), seed=3) for _ in range(2))
    np.testing.assert_array_equal(first.T_ref_cur, second.T_ref_cur)
    np.testing.assert_array_equal(first.covariance, second.covariance)


def test_progress_only_grows():
    a, _, seen = pair(wall, 14)
    told = []
    register(epoch(a), epoch(seen), progress=told.append)
    assert told == sorted(told)
    assert told[-1] == 1.0


def test_scans_that_do_not_meet_are_refused():
    rng = np.random.default_rng(15)
    points = wall(rng)
    with pytest.raises(OverlapError, match=r"4\d\.\d m apart"):
        register(epoch(points), epoch(wall(rng) + np.array([50, 0, 0])))
    with pytest.raises(OverlapError, match="of the surface matched"):
        register(epoch(wall(rng, relief=0.05)), epoch(lining(rng)))


def test_clouds_without_a_surface_are_refused():
    rng = np.random.default_rng(16)
    with pytest.raises(RegistrationError, match="flat blocks"):
        register(epoch(rng.uniform(0, 1, (20_000, 3))), epoch(rng.uniform(0, 1, (20_000, 3))))
    line = rng.uniform(0, 1, (1000, 1)) * [[1.0, 0.5, 0.2]]
    with pytest.raises(RegistrationError, match="span a surface"):
        register(epoch(line), epoch(line))


def test_too_few_iterations_are_no_result():
    a, _, seen = pair(room, 17, motion(0.5, 0.03), noise=0.002)
    with pytest.raises(RegistrationError, match="convergence within 1 iterations"):
        register(epoch(a), epoch(seen), max_iterations=1)


def test_open3d_is_named_with_its_system_packages_when_it_is_needed(monkeypatch):
    a, _, seen = pair(room, 18, motion(40, 1.0))
    monkeypatch.setitem(sys.modules, "open3d", None)
    with pytest.raises(MissingDependencyError, match="libx11-6 libgomp1 libgl1"):
        register(epoch(a), epoch(seen))


@pytest.mark.parametrize(
    ("options", "says"),
    [
        ({"start": "corse"}, "did you mean 'coarse'"),
        ({"start": 1.001 * np.eye(4)}, "rotation and a translation"),
        ({"start": np.diag([1.0, 1, -1, 1])}, "mirrors"),
        ({"stable": "some"}, "one of auto, all"),
        ({"stable": np.ones(5, bool)}, "one bool a reference point"),
        ({"stable": np.zeros(40_000, bool)}, "at least 100 points"),
        ({"capture_range": 0.0}, "above 0"),
        ({"capture_range": np.nan}, "above 0"),
        ({"max_iterations": 0}, "at least 1"),
    ],
)
def test_wrong_options_are_refused(options, says):
    points = wall(np.random.default_rng(19))
    with pytest.raises(OptionError, match=says):
        register(epoch(points), epoch(points), **options)


def test_frames_must_be_shared_and_local():
    points = wall(np.random.default_rng(20))
    a, far = epoch(points), epoch(points + np.array([482_310, 5_391_270, 0]))
    with pytest.raises(OptionError, match="one local frame"):
        register(a, replace(a, origin=np.ones(3)))
    with pytest.raises(OverlapError, match="within 10000 m"):
        register(far, far)
