# SPDX-License-Identifier: MIT
"""Covariance from patches against the scatter of repeated estimates with known errors."""

import numpy as np
import pytest

from scanstrain.registration.covariance import estimate, full_covariance, physical
from scanstrain.registration.fit import Fit, biweight
from scanstrain.registration.match import Metric, Rows

PATCHES, EACH = 80, 12
METRIC = Metric(np.zeros(3), 5.0)
BASIS = np.eye(7)[:, [0, 2, 4]]  # on a wall in y = 0: two tilts and the shift along the normal


def wall_fit(rng, white, shared):
    """Fit robustly, to the end, a wall 10 x 8 m with errors of independent blocks and of whole patches [m]."""
    patch = np.repeat(np.arange(PATCHES), EACH)
    corner = np.stack([patch % 10 - 5.0, 0 * patch, patch // 10 - 4.0], axis=1)
    place = corner + rng.uniform(0, 1, (len(patch), 3)) * [1, 0, 1]
    normal = np.tile([0.0, 1, 0], (len(patch), 1))
    row = np.c_[np.cross(place / METRIC.arm, normal), normal, 0 * patch]
    residual = rng.normal(0, white, len(patch)) + rng.normal(0, shared, PATCHES)[patch]
    sd = np.full(len(patch), white)
    a, x, scale = row @ BASIS, np.zeros(3), 1.4826 * np.median(np.abs(residual / sd))
    for _ in range(30):
        weight = biweight((residual - a @ x) / (4.685 * scale * sd)) / sd**2
        x = np.linalg.solve((a * weight[:, None]).T @ a, (a * weight[:, None]).T @ residual)
    rows = Rows(row, 0 * row, residual - a @ x, sd, place, normal, np.arange(len(patch)))
    return Fit(np.eye(4), rows, weight, scale, BASIS[:6], np.empty((6, 0)), True, 1, 0.0), patch, x


@pytest.mark.parametrize("shared", [0.0, 0.0002, 0.001])
def test_claimed_scatter_is_the_true_one(shared):
    """At 0.2 mm in common under 0.25 mm of its own, independent blocks would claim 0.35 of the variance there is."""
    rng = np.random.default_rng(1)
    steps, claims = [], []
    for _ in range(300):
        fit, patch, found = wall_fit(rng, 0.00025, shared)
        steps.append(found)
        step, covariance, _ = estimate(fit, patch, PATCHES, BASIS)
        assert np.abs(step).max() < 1e-6
        claims.append(np.diag(covariance))
    ratio = np.mean(claims, axis=0) / np.var(steps, axis=0)
    # 300 repeats know a variance to 8 %; the limit from below and the jackknife lean to the safe side.
    assert ratio.min() > 0.8
    assert ratio.max() < 1.4


def test_without_common_errors_the_textbook_covariance_is_reached():
    rng = np.random.default_rng(2)
    claims = [np.diag(estimate(*wall_fit(rng, 0.00025, 0.0)[:2], PATCHES, BASIS)[1]) for _ in range(60)]
    n = PATCHES * EACH
    # A shift known to s / sqrt(n), a tilt to s / sqrt(n) over the rms distance, 1 / 0.95 lost to the biweight.
    textbook = 0.00025**2 / n / 0.95 * np.array([25 / (8**2 / 12), 25 / (10**2 / 12), 1])
    ratio = np.mean(claims, axis=0) / textbook
    np.testing.assert_allclose(ratio, 1.1, atol=0.15)


def test_held_motions_keep_the_uncertainty_of_the_start():
    basis = np.linalg.qr(np.random.default_rng(3).normal(size=(6, 6)))[0]
    strong, weak = basis[:, :4], basis[:, 4:]
    whole = full_covariance(np.diag([1.0, 2, 3, 4]) * 1e-10, strong, weak, np.diag([0.01, 0.0025]))
    np.testing.assert_allclose(weak.T @ whole @ weak, np.diag([0.01, 0.0025]), atol=1e-12)
    np.testing.assert_allclose(strong.T @ whole @ strong, np.diag([1.0, 2, 3, 4]) * 1e-10, atol=1e-14)


def test_physical_units():
    S = physical(np.diag([4.0, 4, 4, 9, 9, 9]) * 1e-6, METRIC)
    np.testing.assert_allclose(np.sqrt(np.diag(S)), [0.0004, 0.0004, 0.0004, 0.003, 0.003, 0.003])
