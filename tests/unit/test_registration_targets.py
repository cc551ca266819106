# SPDX-License-Identifier: MIT
"""Targets: exact motion, honest covariance, blunders named, and refusals that say what is wrong."""

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation

from scanstrain.errors import OptionError, RegistrationError
from scanstrain.registration.targets import fit_targets

# Closed form and covariance: five points, Rz(30) Ry(-10) Rx(5), (100, -50, 7.5); 256.2, 171.1, 157.2 urad at 2 mm.
POINTS = np.array([[0, 0, 0], [10, 0, 0], [0, 6, 0], [0, 0, 4], [10, 6, 4]], float)
R = Rotation.from_euler("xyz", [5, -10, 30], degrees=True).as_matrix()
SHIFT = np.array([100, -50, 7.5])
NAMES = ["A", "B", "C", "D", "E"]
SURVEY = np.array([482_310.0, 5_391_270.0, 312.0])


def fit(reference, current, names=None, sd=0.002, other=1e-9, **options):
    names = [f"T{i}" for i in range(len(reference))] if names is None else names
    return fit_targets(names, reference, current, reference_sd=sd, current_sd=other, **options)


def test_exact_motion_and_its_covariance():
    done = fit(POINTS @ R.T + SHIFT, POINTS, NAMES)
    np.testing.assert_allclose(done.T_ref_cur[:3, :3], R, atol=1e-12)
    np.testing.assert_allclose(done.T_ref_cur[:3, 3], SHIFT, atol=1e-11)
    assert np.abs(done.residuals).max() < 1e-12
    # The textbook gives rotations about the current axes: the covariance is in reference axes.
    local = R.T @ done.covariance[:3, :3] @ R
    np.testing.assert_allclose(np.sqrt(np.diag(local)) * 1e6, [256.2, 171.1, 157.2], atol=0.05)
    np.testing.assert_allclose(np.sqrt(np.diag(done.covariance)[3:]) * 1e3, 0.894, atol=5e-4)
    np.testing.assert_allclose(done.pivot, (POINTS @ R.T + SHIFT).mean(axis=0), atol=1e-9)
    assert (done.redundant, done.blunders) == (9, ())
    assert done.redundancy.sum() == pytest.approx(9)


def test_survey_coordinates_lose_no_digits():
    near = fit(POINTS @ R.T, POINTS, NAMES)
    far = fit(POINTS @ R.T + SURVEY, POINTS + SURVEY, NAMES)
    np.testing.assert_allclose(far.T_ref_cur[:3, :3], near.T_ref_cur[:3, :3], atol=2e-10)
    np.testing.assert_allclose(far.covariance, near.covariance, rtol=1e-8, atol=1e-16)
    # The coordinates themselves have steps of 1e-9 m.
    assert np.abs(far.residuals).max() < 5e-9


def test_weights_of_every_axis_count():
    """Against a general minimiser of the same sum, with levelled heights ten times better than positions."""
    rng = np.random.default_rng(2)
    points = rng.uniform(-5, 5, (7, 3))
    s, c = np.array([0.004, 0.004, 0.0004]), np.array([0.002, 0.001, 0.001])
    seen = (points - SHIFT) @ R + rng.normal(0, c, points.shape)
    known = points + rng.normal(0, s, points.shape)
    done = fit(known, seen, sd=np.tile(s, (7, 1)), other=np.tile(c, (7, 1)))

    def whitened(x):
        turn = Rotation.from_rotvec(x[:3]).as_matrix() @ R
        root = np.linalg.inv(np.linalg.cholesky(np.diag(s**2) + turn @ np.diag(c**2) @ turn.T))
        return ((known - seen @ turn.T - SHIFT - x[3:]) @ root.T).ravel()

    best = least_squares(whitened, np.zeros(6), xtol=1e-15, ftol=1e-15, gtol=1e-15).x
    expected = Rotation.from_rotvec(best[:3]).as_matrix() @ R
    # The minimiser also lets the weights turn: a difference of second order in the residuals.
    np.testing.assert_allclose(done.T_ref_cur[:3, :3], expected, atol=2e-6)
    moved = seen @ done.T_ref_cur[:3, :3].T + done.T_ref_cur[:3, 3]
    np.testing.assert_allclose(moved, seen @ expected.T + SHIFT + best[3:], atol=1e-5)


def test_claimed_covariance_is_the_scatter():
    rng = np.random.default_rng(3)
    true = POINTS @ R.T + SHIFT
    whitened, named = [], 0
    for _ in range(400):
        done = fit(true + rng.normal(0, 0.002, true.shape), POINTS + rng.normal(0, 0.001, true.shape), other=0.001)
        turn = Rotation.from_matrix(R @ done.T_ref_cur[:3, :3].T).as_rotvec()
        moved_back = (done.pivot - done.T_ref_cur[:3, 3]) @ done.T_ref_cur[:3, :3]
        error = np.r_[turn, R @ moved_back + SHIFT - done.pivot]
        whitened.append(error @ np.linalg.solve(done.covariance, error))
        named += bool(done.blunders)
    # Chi-square of 6 degrees: mean 6, known to 0.17 from 400 draws.
    assert np.mean(whitened) == pytest.approx(6, abs=0.6)
    # 15 tests at 0.1 %, correlated: at most 6 of 400 expected.
    assert named <= 13


@pytest.mark.parametrize("size", [0.03, 0.5, 20.0])
def test_a_blunder_is_named_and_left_out(size):
    rng = np.random.default_rng(4)
    points = rng.uniform(-8, 8, (8, 3))
    known = points @ R.T + SHIFT + rng.normal(0, 0.002, points.shape)
    known[5] += size * np.array([0.6, -0.64, 0.48])
    done = fit(known, points)
    assert done.blunders == ("T5",)
    assert done.used.tolist() == [i != 5 for i in range(8)]
    assert np.abs(done.w[5]).max() > done.critical > np.abs(done.w[done.used]).max()
    assert np.linalg.norm(done.residuals[5]) == pytest.approx(size, abs=0.01)
    assert "T5 was left out" in done.warnings[0]
    clean = fit(np.delete(known, 5, axis=0), np.delete(points, 5, axis=0))
    np.testing.assert_allclose(done.T_ref_cur, clean.T_ref_cur, atol=1e-10)


def test_two_blunders_are_named_the_worse_first():
    rng = np.random.default_rng(5)
    points = rng.uniform(-8, 8, (10, 3))
    known = points + rng.normal(0, 0.002, points.shape)
    known[2] += [0.05, 0, 0]
    known[7] += [0, 0, 0.3]
    assert fit(known, points).blunders == ("T7", "T2")


def test_detectable_bias_is_found_in_four_cases_of_five():
    rng = np.random.default_rng(6)
    points = rng.uniform(-8, 8, (6, 3))
    bias = fit(points, points).detectable[3, 1]
    found = 0
    for _ in range(300):
        known = points + rng.normal(0, 0.002, points.shape)
        known[3, 1] += bias
        found += bool(fit(known, points).blunders)
    assert 0.74 < found / 300 < 0.90


def test_three_targets_that_contradict_one_another_are_told_apart_from_none():
    points = POINTS[:3]
    done = fit(points + np.outer([0, 1, 0], [0.02, 0, 0]), points)
    assert done.blunders == ()
    assert any("contradict one another" in sentence for sentence in done.warnings)
    assert done.variance_factor > 5
    plain = fit(points, points)
    np.testing.assert_allclose(np.diag(done.covariance), done.variance_factor * np.diag(plain.covariance), rtol=0.02)


def test_deviations_that_do_not_fit_the_residuals_are_told():
    rng = np.random.default_rng(7)
    points = rng.uniform(-8, 8, (20, 3))
    known = points + rng.normal(0, 0.002, points.shape)
    assert fit(known, points).warnings == ()
    assert "given larger than they are" in fit(known, points, sd=0.01).warnings[0]
    assert any("given smaller than they are" in each for each in fit(known, points, sd=0.001).warnings)


@pytest.mark.parametrize(
    ("known", "seen", "says"),
    [
        (POINTS[:2], POINTS[:2], "at least 3 targets"),
        (np.outer(np.arange(4.0), [1, 2, 3]), np.outer(np.arange(4.0), [1, 2, 3]), "one line"),
        (np.ones((4, 3)), np.ones((4, 3)), "one line"),
        (POINTS * [1, 1e-3, 1e-3], POINTS * [1, 1e-3, 1e-3], "one line"),
        (POINTS, POINTS * [1, 1, -1], "z negated"),
        (POINTS, POINTS[:, [0, 2, 1]], "y and z exchanged"),
        (POINTS, (POINTS * [1, -1, 1]) @ R.T + SHIFT, "axes are swapped"),
        (POINTS, POINTS * 1000, "current targets looks like the list of reference targets in millimetres"),
        (POINTS / 0.3048, POINTS, "reference targets looks like the list of current targets in feet"),
        (POINTS, POINTS / 0.0254, "inches"),
        (POINTS, POINTS * 7, "7 times as long"),
        (POINTS, POINTS[[1, 2, 3, 4, 0]], "targets that agree"),
    ],
)
def test_targets_that_cannot_serve_are_refused(known, seen, says):
    with pytest.raises(RegistrationError, match=says):
        fit(known, seen)


def test_a_blunder_does_not_pass_for_a_mirror_or_a_unit():
    rng = np.random.default_rng(8)
    points = rng.uniform(-8, 8, (6, 3))
    seen = points.copy()
    seen[0] += [1000.0, 0, 0]
    assert fit(points, seen).blunders == ("T0",)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"names": NAMES[:4]}, "pair them"),
        ({"names": ["A", "B", "B", "C", "D"]}, "'B' more than once"),
        ({"names": ["A", "", "B", "C", "D"]}, "an empty name"),
        ({"sd": 0.0}, "above 0"),
        ({"sd": np.ones(4)}, "above 0"),
        ({"other": np.nan}, "above 0"),
        ({"current": POINTS[:4]}, "pair them"),
        ({"current": np.where(POINTS == 6, np.nan, POINTS)}, "target C: required finite"),
    ],
)
def test_wrong_calls_are_refused(change, says):
    options = {"names": NAMES, "reference": POINTS, "current": POINTS} | change
    with pytest.raises(OptionError, match=says):
        fit(options.pop("reference"), options.pop("current"), **options)


def test_a_nearly_straight_row_of_targets_is_told():
    points = np.c_[np.linspace(0, 60, 6), 0.4 * (np.arange(6) % 2), np.zeros(6)]
    assert any("nearly on one line" in sentence for sentence in fit(points, points).warnings)
