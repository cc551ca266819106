# SPDX-License-Identifier: MIT
"""Standard errors against simulation, and the registration's part in them against its own formula."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.linalg import rotation_matrix
from scanstrain.neighbourhood.result import Observed
from scanstrain.strain import compute_strain
from scanstrain.strain.uncertainty import magnitude_sd, registration_covariance, worst_direction_sd

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
PIVOT = np.array([3.0, -2.0, 1.0])


@pytest.fixture
def rng():
    return np.random.default_rng(11)


def random_covariance(rng, size, scale):
    A = rng.normal(size=(size, size))
    return (A @ A.T + np.eye(size)) * scale**2


def test_displacement_block_is_the_one_that_registration_itself_gives(rng):
    fit = FIELDS["registration"](random_covariance(rng, 6, 1e-3), PIVOT)
    position, frame = rng.normal(size=(8, 3)) * 10, FIELDS["random_frames"](rng, 8)
    S = registration_covariance(position, frame, fit)
    expected = np.swapaxes(frame, 1, 2) @ fit.displacement_covariance(position) @ frame
    np.testing.assert_allclose(S[:, :3, :3], expected, rtol=1e-9, atol=1e-15)


def test_gradient_block_against_simulated_rigid_motions(rng):
    cov = random_covariance(rng, 6, 1e-4)
    position, frame = rng.normal(size=(1, 3)) * 10, FIELDS["random_frames"](rng, 1)
    S = registration_covariance(position, frame, FIELDS["registration"](cov, PIVOT))[0]
    draws = 20_000
    errors = rng.multivariate_normal(np.zeros(6), cov, size=draws)
    R = rotation_matrix(errors[:, :3])
    u = (R - np.eye(3)) @ (position[0] - PIVOT) + errors[:, 3:]
    grad = frame[0].T @ (R - np.eye(3)) @ frame[0][:, :2]
    sample = np.concatenate([u @ frame[0], grad.reshape(draws, 6), np.zeros((draws, 3))], axis=1)
    sd = np.sqrt(np.diagonal(S))
    got = np.cov(sample.T)
    np.testing.assert_allclose(np.sqrt(np.diagonal(got)), sd, rtol=5 / np.sqrt(2 * draws), atol=1e-7)
    moved = [0, 1, 2, 4, 5, 7, 8]  # a rotation has no g11 and g22 to first order
    block, scale = np.ix_(moved, moved), np.outer(sd[moved], sd[moved])
    np.testing.assert_allclose(got[block] / scale, S[block] / scale, atol=0.06)


def test_registration_error_enters_displacement_and_rotation_and_not_strain_or_curvature(rng):
    gradient = rng.normal(0, 1e-3, (6, 3, 2))
    field = FIELDS["affine_field"](
        rng.normal(size=(6, 3)), FIELDS["random_frames"](rng, 6), gradient=gradient, shape=[0.1, 0, 0]
    )
    alone = compute_strain(field, measure="small")
    fit = FIELDS["registration"](random_covariance(rng, 6, 1e-4), PIVOT)
    both = compute_strain(field, registration=fit, measure="small")
    for name in ("strain_1_sd", "strain_2_sd", "curv_sd"):
        np.testing.assert_array_equal(both.values[name], alone.values[name])
    for name in ("disp_n_sd", "tilt_sd", "spin_sd"):
        assert (both.values[name] > 10 * alone.values[name]).all(), name
    normal = field.frame[:, :, 2]
    expected = np.sqrt(1e-12 + np.einsum("gi,gij,gj->g", normal, fit.displacement_covariance(field.position), normal))
    np.testing.assert_allclose(both.values["disp_n_sd"], expected, rtol=1e-9)
    np.testing.assert_allclose(both.detection_limit["disp_n"], 1.959963984540054 * expected, rtol=1e-9)


def test_a_motion_that_the_datum_leaves_open_is_not_given(rng):
    gradient = rng.normal(0, 1e-3, (6, 3, 2))
    field = FIELDS["affine_field"](np.zeros((6, 3)), np.eye(3), gradient=gradient)
    open_slide = np.diag([1e-12] * 3 + [0.3**2, 1e-12, 1e-12])
    values = compute_strain(field, registration=FIELDS["registration"](open_slide, np.zeros(3))).values
    assert np.isnan(values["disp_x"]).all()
    assert not (values["observed"] & (Observed.DISPLACEMENT_U | Observed.DISPLACEMENT_V) == 24).any()
    for name in ("disp_n", "tilt", "spin", "strain_xx", "curv_1"):
        assert np.isfinite(values[name]).all(), name


@pytest.mark.parametrize("measure", ["small", "green_lagrange", "almansi", "hencky", "biot"])
def test_claimed_errors_match_the_scatter_of_repeats(measure, rng):
    draws = 6000
    truth = np.array([[0.04, 0.02], [-0.01, -0.03], [0.05, -0.04]])
    shape, hessian = np.array([0.3, 0.05, -0.1]), np.array([0.2, -0.02, 0.01])
    cov = random_covariance(rng, 12, 2e-4)
    noise = rng.multivariate_normal(np.zeros(12), cov, size=draws)
    field = FIELDS["affine_field"](
        np.zeros((draws, 3)), np.eye(3), displacement=noise[:, :3],
        gradient=truth + noise[:, 3:9].reshape(draws, 3, 2), hessian=hessian + noise[:, 9:],
        shape=shape, covariance=cov,
    )  # fmt: skip
    values = compute_strain(field, measure=measure).values
    tolerance = 3 / np.sqrt(2 * draws) + 0.01
    for name, error in (
        ("strain_1", "strain_1_sd"), ("strain_2", "strain_2_sd"), ("tilt", "tilt_sd"), ("spin", "spin_sd"),
        ("disp_n", "disp_n_sd"),
    ):  # fmt: skip
        assert np.median(values[error]) == pytest.approx(values[name].std(), rel=tolerance), name
    larger = max(values["curv_1"].std(), values["curv_2"].std())
    assert np.median(values["curv_sd"]) == pytest.approx(larger, rel=tolerance)


@pytest.mark.parametrize("length", [0.0, 0.5, 1.0, 2.0, 5.0, 20.0])
def test_intervals_of_a_length_cover_the_truth_at_every_length(length, rng):
    draws = 40_000
    vector = rng.normal(size=(draws, 2)) + np.array([length, 0.0])
    sd = magnitude_sd(vector, np.broadcast_to(np.eye(2), (draws, 2, 2)))
    covered = (np.abs(np.hypot(*vector.T) - length) <= 1.959964 * sd).mean()
    assert 0.93 <= covered <= 0.975


def test_error_of_a_length_without_noise_is_zero():
    assert magnitude_sd(np.zeros((1, 2)), np.zeros((1, 2, 2)))[0] == 0.0


def test_worst_direction():
    # only t22 is noisy: the worst direction is the second one
    S = np.zeros((1, 3, 3))
    S[0, 1, 1] = 4.0
    assert worst_direction_sd(S)[0] == pytest.approx(2.0)
    # only shear is noisy: 45 degrees, where the normal component is 2 s c t12 = t12
    S = np.zeros((1, 3, 3))
    S[0, 2, 2] = 9.0
    assert worst_direction_sd(S)[0] == pytest.approx(3.0)


def test_tilt_limit_is_passed_by_one_null_gauge_in_twenty(rng):
    draws = 40_000
    gradient = np.zeros((draws, 3, 2))
    gradient[:, 2] = rng.normal(0, 1e-4, (draws, 2))
    sd = np.full(12, 1e-6)
    sd[7:9] = 1e-4
    result = compute_strain(FIELDS["affine_field"](np.zeros((draws, 3)), np.eye(3), gradient=gradient, sd=sd))
    share = (result.values["tilt"] > result.detection_limit["tilt"]).mean()
    assert share == pytest.approx(0.05, abs=3 * np.sqrt(0.05 * 0.95 / draws))
