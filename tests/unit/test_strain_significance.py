# SPDX-License-Identifier: MIT
"""Wald tests against closed forms and chance, false-discovery control against a general library."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

from scanstrain.strain import compute_strain
from scanstrain.strain.significance import benjamini_hochberg, wald

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))


@pytest.fixture
def rng():
    return np.random.default_rng(17)


def test_one_component_is_the_two_sided_normal_test():
    d, sd = np.array([[0.0], [1.0], [1.959963984540054], [5.0]]), 1.0
    p = wald(d * sd, np.full((4, 1, 1), sd**2), np.ones((4, 1), bool))
    np.testing.assert_allclose(p, 2 * stats.norm.sf(d[:, 0]), rtol=1e-12)
    assert p[2] == pytest.approx(0.05, rel=1e-12)


def test_correlated_components_in_different_units(rng):
    A = rng.normal(size=(4, 4))
    units = np.diag([1e-3, 1.0, 1e-6, 10.0])
    S = units @ (A @ A.T + np.eye(4)) @ units
    d = units @ rng.normal(size=4)
    expected = stats.chi2.sf(d @ np.linalg.solve(S, d), 4)
    assert wald(d[None], S[None], np.ones((1, 4), bool))[0] == pytest.approx(expected, rel=1e-9)


def test_only_observable_components_count(rng):
    S = np.diag([1.0, 4.0, 9.0])
    d = np.array([[1.0, np.nan, 3.0], [np.nan, 2.0, np.nan], [np.nan] * 3])
    p = wald(d, np.broadcast_to(S, (3, 3, 3)), np.isfinite(d))
    np.testing.assert_allclose(p[:2], [stats.chi2.sf(2.0, 2), stats.chi2.sf(1.0, 1)], rtol=1e-12)
    assert np.isnan(p[2])


def test_a_covariance_without_full_rank_counts_only_its_rank():
    S = np.array([[1.0, 1.0], [1.0, 1.0]])
    p = wald(np.array([[2.0, 2.0]]), S[None], np.ones((1, 2), bool))
    assert p[0] == pytest.approx(stats.chi2.sf(4.0, 1), rel=1e-9)


def test_null_p_values_are_uniform_whatever_is_observable(rng):
    draws = 20_000
    A = rng.normal(size=(12, 12))
    S = A @ A.T * 1e-8
    observable = rng.random((draws, 12)) < 0.7
    values = rng.multivariate_normal(np.zeros(12), S, size=draws)
    field = FIELDS["affine_field"](
        np.zeros((draws, 3)), np.eye(3), displacement=values[:, :3], gradient=values[:, 3:9].reshape(draws, 3, 2),
        hessian=values[:, 9:], covariance=S, observable=observable,
    )  # fmt: skip
    result = compute_strain(field)
    p = result.values["significance"]
    p = p[np.isfinite(p)]
    assert (p < 0.05).mean() == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / draws))
    assert stats.kstest(p, "uniform").pvalue > 1e-4
    assert result.values["discovery"].sum() <= 3


def test_null_p_values_with_registration_error(rng):
    draws = 4000
    cov = np.diag([2e-4, 1e-4, 3e-4, 1e-3, 2e-3, 1e-3]) ** 2
    fit = FIELDS["registration"](cov, [1.0, 2.0, 3.0])
    position, frame = rng.normal(size=(draws, 3)) * 5, FIELDS["random_frames"](rng, draws)
    errors = rng.multivariate_normal(np.zeros(6), cov, size=draws)
    w, t = errors[:, :3], errors[:, 3:]
    u = np.cross(w, position - fit.pivot) + t
    columns = np.cross(w[:, None, :], np.swapaxes(frame[:, :, :2], 1, 2))
    sd = np.full(12, 1e-4)
    noise = rng.normal(size=(draws, 12)) * sd
    field = FIELDS["affine_field"](
        position, frame, sd=sd,
        displacement=np.einsum("gik,gi->gk", frame, u) + noise[:, :3],
        gradient=np.einsum("gik,gji->gkj", frame, columns) + noise[:, 3:9].reshape(draws, 3, 2),
        hessian=noise[:, 9:],
    )  # fmt: skip
    p = compute_strain(field, registration=fit).values["significance"]
    assert (p < 0.05).mean() == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / draws))
    assert (compute_strain(field).values["significance"] < 0.05).mean() > 0.9


@pytest.mark.parametrize("rate", [0.01, 0.05, 0.2])
def test_false_discovery_control_agrees_with_a_general_library(rate, rng):
    p = np.concatenate([rng.random(500), rng.random(60) ** 8, [0.0, 1.0, 0.3, 0.3]])
    expected = stats.false_discovery_control(p, method="bh") <= rate
    np.testing.assert_array_equal(benjamini_hochberg(p, rate), expected)
    assert expected.any()
    assert not expected.all()


def test_false_discovery_control_by_hand():
    # limits k q / m are 0.0125, 0.025, 0.0375, 0.05: the second passes and takes the first along
    np.testing.assert_array_equal(benjamini_hochberg(np.array([0.9, 0.025, 0.02, 0.7]), 0.05), [0, 1, 1, 0])
    assert not benjamini_hochberg(np.array([0.9, 0.8, 0.02, 0.7]), 0.05).any()


def test_false_discovery_control_leaves_out_what_was_not_tested(rng):
    p = np.concatenate([rng.random(300) ** 3, np.full(700, np.nan)])
    found = benjamini_hochberg(p, 0.1)
    np.testing.assert_array_equal(found[:300], stats.false_discovery_control(p[:300]) <= 0.1)
    assert not found[300:].any()
    assert not benjamini_hochberg(np.full(3, np.nan), 0.1).any()
    assert not benjamini_hochberg(np.empty(0), 0.1).any()
