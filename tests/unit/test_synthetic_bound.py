# SPDX-License-Identifier: MIT
"""The Cramér-Rao bound: closed forms, and the spread of least squares that attains it."""

import numpy as np
import pytest

from scanstrain.synthetic import cramer_rao, normal_displacement_bound


def disc(n, seed=1, radius=0.3):
    rng = np.random.default_rng(seed)
    angle, r = rng.uniform(0, 2 * np.pi, n), radius * np.sqrt(rng.random(n))
    return np.stack([r * np.cos(angle), r * np.sin(angle)], axis=1)


def test_a_mean_displacement_is_bound_by_the_two_means():
    bound = normal_displacement_bound(
        disc(400), disc(900), reference_variance=4e-6, current_variance=np.full(900, 9e-6), order=0
    )
    assert bound[0, 0] == pytest.approx(4e-6 / 400 + 9e-6 / 900, rel=1e-12)


def test_slope_and_curvature_of_a_uniform_disc():
    n, s, a = 200_000, 1e-3, 0.3
    bound = normal_displacement_bound(disc(n), disc(n, 2), reference_variance=s**2, current_variance=s**2)
    # Uniform disc, quadratic model: centre value 4 s^2/n (1 for a plane), slope 4 s^2/(n a^2); two epochs double it.
    assert bound[0, 0] == pytest.approx(2 * 4 * s**2 / n, rel=0.02)
    assert bound[1, 1] == pytest.approx(2 * 4 * s**2 / (n * a**2), rel=0.02)
    plane = normal_displacement_bound(disc(n), disc(n, 2), reference_variance=s**2, current_variance=s**2, order=1)
    assert plane[0, 0] == pytest.approx(2 * s**2 / n, rel=0.02)


def test_weighted_least_squares_attains_the_bound():
    rng = np.random.default_rng(3)
    A, s = rng.standard_normal((60, 3)) * [1.0, 1e-3, 1e3], rng.uniform(0.5, 2.0, 60)
    estimates = np.linalg.lstsq(A / s[:, None], rng.standard_normal((60, 20000)), rcond=None)[0]
    ratio = np.cov(estimates) / cramer_rao(A, s**2)
    np.testing.assert_allclose(np.diag(ratio), 1.0, atol=0.04)
    np.testing.assert_allclose(cramer_rao(A, np.diag(s**2)), cramer_rao(A, s**2), rtol=1e-9)
