# SPDX-License-Identifier: MIT
"""Starts from outside, and their error along what the surfaces do not fix."""

import runpy
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, OverlapError
from scanstrain.registration import register
from scanstrain.registration.match import Metric
from scanstrain.registration.start import GivenStart, held_covariance, start_from_matrix, start_from_targets
from scanstrain.registration.targets import fit_targets

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, epoch, lining, motion, room = (SCENES[name] for name in ("apply", "epoch", "lining", "motion", "room"))
SURVEY = np.array([482_310.0, 5_391_270.0, 312.0])


def in_file(T, origin):
    """The same motion in coordinates that `origin` was added to."""
    out = T.copy()
    out[:3, 3] += origin - T[:3, :3] @ origin
    return out


def test_file_and_local_motions_are_one():
    T = motion(12, 1.5)
    covariance = np.diag([1.0, 2, 3, 4, 5, 6]) * 1e-8
    start = start_from_matrix(in_file(T, SURVEY), SURVEY, covariance=covariance, pivot=SURVEY + np.arange(1, 4))
    np.testing.assert_allclose(start.T_ref_cur, T, atol=3e-9)
    np.testing.assert_allclose(start.pivot, [1, 2, 3])
    assert (start.source, start.targets) == ("file", None)


def test_a_printed_matrix_becomes_an_exact_rotation_without_moving_the_scan():
    """Nine digits of a rotation about a survey origin shift a scan by 3 mm, its making exact by nothing more."""
    T = in_file(motion(12, 1.5), SURVEY)
    printed = np.array([[float(f"{value:.9f}") for value in row] for row in T])
    start = start_from_matrix(printed, SURVEY)
    R = start.T_ref_cur[:3, :3]
    np.testing.assert_allclose(R @ R.T, np.eye(3), atol=1e-14)
    exact = printed[:3, :3] @ SURVEY + printed[:3, 3] - SURVEY
    np.testing.assert_allclose(start.T_ref_cur[:3, 3], exact, atol=1e-8)


def test_held_covariance_moves_the_covariance_to_the_metric_s_pivot():
    """Against the scatter of drawn starts: displacement of two places, seen from either pivot."""
    rng = np.random.default_rng(1)
    root = rng.normal(size=(6, 6)) * 1e-3
    start = GivenStart(np.eye(4), "file", root @ root.T, np.array([3.0, -2, 1]))
    metric = Metric(np.array([-1.0, 4, 2]), 7.0)
    weak = np.linalg.qr(rng.normal(size=(6, 2)))[0]
    held = held_covariance(start, weak, np.ones(2), metric, 0.3)
    draws = rng.normal(size=(200_000, 6)) @ root.T
    shift = draws[:, 3:] + np.cross(draws[:, :3], metric.pivot - start.pivot)
    seen = np.c_[draws[:, :3] * metric.arm, shift] @ weak
    np.testing.assert_allclose(held, np.cov(seen.T), rtol=0.03, atol=0.03 * held.max())


def test_without_a_covariance_the_capture_range_counts():
    held = held_covariance("auto", np.eye(6)[:, :2], np.array([1.0, 0.5]), Metric(np.zeros(3), 1.0), 0.3)
    np.testing.assert_allclose(held, np.diag([0.01, 0.04]))


@pytest.fixture(scope="module")
def tunnel():
    """A smooth lining, slid and rolled between the epochs; targets on it with 2 mm in each coordinate, both epochs."""
    rng = np.random.default_rng(2)
    a, b = lining(rng), lining(rng)
    turn = Rotation.from_rotvec([0.03, 0, 0]).as_matrix()
    truth = np.eye(4)
    truth[:3, :3], truth[:3, 3] = turn, [0.08, 0, 0]
    seen = apply(np.linalg.inv(truth), b)
    marks = a[rng.choice(len(a), 8, replace=False)]
    known = marks + rng.normal(0, 0.002, marks.shape)
    found = apply(np.linalg.inv(truth), marks) + rng.normal(0, 0.002, marks.shape)
    fit = fit_targets([f"T{i}" for i in range(8)], known + SURVEY, found + SURVEY, reference_sd=0.002, current_sd=0.002)
    reference, current = (Epoch(points, SURVEY) for points in (a, seen))
    return register(reference, current, start=start_from_targets(fit, SURVEY)), truth, marks, b, fit


def test_targets_carry_the_slide_and_the_roll_of_a_smooth_tunnel(tunnel):
    result, truth, marks, b, fit = tunnel
    assert (result.start, result.targets) == ("targets", fit)
    slide, roll = result.weak_directions
    assert [slide.description, roll.description] == ["slide along the tunnel axis", "roll about the tunnel axis"]
    # Closed forms: s / sqrt(n) along the axis; s R / sqrt(sum of r^2) on the wall, with the axis as the lever.
    s = 0.002 * np.sqrt(2)
    assert slide.sd == pytest.approx(s / np.sqrt(8), rel=0.15)
    lever = marks - marks.mean(axis=0)
    assert roll.sd == pytest.approx(s * 0.8 / np.sqrt((lever[:, 1:] ** 2).sum()), rel=0.4)
    along = np.sqrt(result.displacement_covariance(b)[:, 0, 0])
    assert along.max() < 0.003
    error = apply(result.T_ref_cur, apply(np.linalg.inv(truth), b)) - b
    normals = SCENES["lining_normals"](b)
    assert np.sqrt(((error * normals).sum(axis=1) ** 2).mean()) < 0.2e-3
    assert np.abs(error[:, 0].mean()) < 3 * slide.sd
    assert np.linalg.norm(error, axis=1).max() < 4 * (slide.sd + roll.sd)


def test_a_start_without_covariance_keeps_the_capture_range():
    rng = np.random.default_rng(3)
    a, b = lining(rng), lining(rng)
    result = register(epoch(a), epoch(b), start=GivenStart(np.eye(4), "file"))
    assert result.start == "file"
    assert result.targets is None
    assert [each.sd for each in result.weak_directions] == pytest.approx([0.1, 0.1])


@pytest.mark.parametrize(
    ("start", "says"),
    [
        (GivenStart(1.001 * np.eye(4)), "rotation and a translation"),
        (GivenStart(np.eye(4), "guess"), "a source out of"),
        (GivenStart(np.eye(4), covariance=np.eye(6)), "the pivot that it refers to"),
        (GivenStart(np.eye(4), covariance=np.eye(5), pivot=np.zeros(3)), "6x6 covariance"),
        (GivenStart(np.eye(4), covariance=-np.eye(6), pivot=np.zeros(3)), "negative variances"),
        (GivenStart(np.eye(4), covariance=np.ones((6, 6)) + np.eye(6, k=1), pivot=np.zeros(3)), "symmetric"),
        (GivenStart(np.eye(4), covariance=np.full((6, 6), np.nan), pivot=np.zeros(3)), "6x6"),
    ],
)
def test_starts_that_are_none_are_refused(start, says):
    points = epoch(lining(np.random.default_rng(4), 2000))
    with pytest.raises(OptionError, match=says):
        register(points, points, start=start)


def test_a_matrix_that_was_meant_otherwise_is_named():
    rng = np.random.default_rng(5)
    T = motion(35, 2.0)
    a, seen = room(rng, noise=0.002), apply(np.linalg.inv(T), room(rng, noise=0.002))
    transposed, millimetres = T.copy(), T.copy()
    transposed[:3, :3] = T[:3, :3].T
    millimetres[:3, 3] *= 1000
    for wrong, says in (
        (np.linalg.inv(T), "the other way round"),
        (transposed, "rotation transposed"),
        (millimetres, "translation in millimetres"),
    ):
        with pytest.raises(OverlapError, match=says):
            register(epoch(a), epoch(seen), start=wrong)
