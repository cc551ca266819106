# SPDX-License-Identifier: MIT
"""Standard errors of gradients and the bias of principal values (`kinematics_values.toml`, last two tables)."""

from __future__ import annotations

import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain import strain

HERE = Path(__file__).parent
VALUES = tomllib.loads((HERE / "kinematics_values.toml").read_text())
FIELDS = runpy.run_path(str(HERE.parent / "strain_fields.py"))
UE = 1e-6


def test_disc_gradient_standard_errors_arrive_in_strain():
    row = VALUES["disc_gradient"]
    # least squares on a full disc: each gradient entry has variance s^2 / sum x^2, sum x^2 = N w^2 / 4
    sd = np.full(12, row["noise"] / np.sqrt(row["points"] * row["radius"] ** 2 / 4))
    covariance = np.diag(sd**2)
    gradient = np.zeros((1, 3, 2))
    gradient[0, 0, 0] = 0.02  # far enough from equal principal values for first order to hold
    field = FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), gradient=gradient, covariance=covariance)
    result = strain.compute_strain(field, measure="small")
    assert result.values["strain_1_sd"][0] / UE == pytest.approx(row["normal_strain_sd_ue"], rel=2e-3)
    limit = result.detection_limit["strain"][0]
    assert limit / 1.959964 / UE == pytest.approx(row["normal_strain_sd_ue"], rel=2e-3)


def test_principal_value_of_pure_noise():
    row = VALUES["null_principal"]
    rng = np.random.default_rng(5)
    draws, s = 40_000, 1e-4
    gradient = rng.normal(0, s, (draws, 3, 2))
    gradient[:, 2] = 0.0
    covariance = np.diag([1e-12] * 3 + [s**2] * 4 + [1e-20] * 2 + [1e-12] * 3)
    field = FIELDS["affine_field"](np.zeros((draws, 3)), np.eye(3), gradient=gradient, covariance=covariance)
    values = strain.compute_strain(field, measure="small").values
    larger = values["strain_1"] / s
    assert larger.mean() == pytest.approx(row["mean"], abs=3 * row["sd"] / np.sqrt(draws) + 1e-4)
    assert larger.std() == pytest.approx(row["sd"], rel=3 / np.sqrt(2 * draws) + 1e-3)
    assert np.quantile(larger, 0.95) == pytest.approx(row["percentile_95"], abs=0.03)
    # the standard error counts the bias in: 95 % intervals about strain_1 still hold the true zero
    covered = (np.abs(values["strain_1"]) <= 1.96 * values["strain_1_sd"]).mean()
    assert 0.93 <= covered <= 0.97
