# SPDX-License-Identifier: MIT
"""What a test finds at 80 % power, rigid or not, and the bias in intervals, against draws and closed forms."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import f as fisher
from scipy.stats import kstest

from scanstrain.neighbourhood.result import PARAMETERS, Correlation, SharedNoise
from scanstrain.strain import compute_strain

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
affine_field = FIELDS["affine_field"]
WALL = np.stack([[1.0, 0, 0], [0, 0, 1], [0, -1, 0]], axis=-1)
SD = np.array([1e-4] * 3 + [5e-5] * 6 + [1e-3] * 3)
G = 2000


def places(count):
    """Gauges so far apart that none is beside another."""
    return np.arange(count)[:, None] * [100.0, 0.0, 0.0]


def drawn(mean, rng, count=G, **options):
    values = mean + rng.normal(size=(count, 12)) * SD
    return affine_field(
        places(count), WALL, displacement=values[:, :3], gradient=values[:, 3:9].reshape(-1, 3, 2),
        hessian=values[:, 9:], sd=SD, **options,
    )  # fmt: skip


def test_four_of_five_tests_find_what_is_called_detectable():
    rng = np.random.default_rng(1)
    alone = compute_strain(affine_field([[0.0, 0, 0]], WALL, sd=SD), measure="small").detectable_80
    mean = np.zeros(12)
    mean[2], mean[7] = alone["disp_n"][0], alone["tilt"][0]
    result = compute_strain(drawn(mean, rng), measure="small")
    error = 3 * np.sqrt(0.16 / G)
    assert np.mean(np.abs(result.values["disp_n"]) > result.detection_limit["disp_n"]) == pytest.approx(0.8, abs=error)
    assert np.mean(result.values["tilt"] > result.detection_limit["tilt"]) == pytest.approx(0.8, abs=error)


def test_rigid_motion_gives_even_p_values_and_strain_or_bending_small_ones():
    rng = np.random.default_rng(2)
    mean = np.zeros(12)
    mean[[0, 2, 4, 5, 7]] = 1e-3, 2e-3, 4e-4, -4e-4, 1e-3  # shift, spin and tilt
    p = compute_strain(drawn(mean, rng), measure="small").rigid_p
    assert kstest(p, "uniform").pvalue > 1e-3
    for bent in (3, 9):
        changed = mean.copy()
        changed[bent] = 8 * SD[bent]
        assert np.median(compute_strain(drawn(changed, rng), measure="small").rigid_p) < 1e-6


def test_the_rigid_test_is_fishers_with_the_freedom_that_shared_noise_leaves():
    mean = np.zeros(12)
    mean[3] = 3 * SD[3]
    values = np.zeros((3, 2))
    values[0, 0] = mean[3]
    field = affine_field([[0.0, 0, 0]], WALL, gradient=values, sd=SD, points=500)
    seen = compute_strain(field, measure="small").rigid_p[0]
    assert seen == pytest.approx(fisher.sf(9 / 6, 6, 500 - 12), rel=1e-3)
    factor = tuple(5.0 if name == "un" else 1.0 for name in PARAMETERS)
    shared = replace(field, correlation=Correlation(SharedNoise(0.2, 0.05), None, factor))
    assert compute_strain(shared, measure="small").rigid_p[0] == pytest.approx(fisher.sf(9 / 6, 6, 8), rel=1e-3)


def test_a_smooth_surface_is_judged_by_its_bending_alone():
    seen = np.array([name not in ("u1", "u2", "g11", "g12", "g21", "g22") for name in PARAMETERS])
    field = affine_field([[0.0, 0, 0]], WALL, hessian=[3 * SD[9], 0, 0], sd=SD, observable=seen, points=500)
    assert compute_strain(field, measure="small").rigid_p[0] == pytest.approx(fisher.sf(3, 3, 488), rel=1e-3)


def test_bias_widens_intervals_and_limits_but_no_test_of_no_change():
    field = affine_field([[0.0, 0, 0]], WALL, displacement=[0, 0, 2e-4], sd=SD)
    bias = np.zeros((1, 12))
    bias[0, [2, 3, 7, 9]] = 3e-4, -1e-4, 2e-4, 4e-3
    plain, blurred = compute_strain(field, measure="small"), compute_strain(replace(field, bias=bias), measure="small")
    assert blurred.values["disp_n_sd"][0] == pytest.approx(np.hypot(1e-4, 3e-4))
    assert blurred.certainty["strain_u"].sd[0] == pytest.approx(np.hypot(5e-5, 1e-4), rel=1e-4)
    assert blurred.detection_limit["disp_n"][0] == pytest.approx(1.959964 * np.hypot(1e-4, 3e-4), rel=1e-6)
    assert blurred.values["significance"][0] == plain.values["significance"][0]
    assert blurred.rigid_p[0] == plain.rigid_p[0]
    sizes = {name: float(size[0]) for name, size in blurred.bias.items()}
    assert sizes == pytest.approx({"disp_n": 3e-4, "tilt": 2e-4, "spin": 0.0, "strain": 1e-4, "curvature": 4e-3})


def test_a_bias_that_nobody_knows_changes_nothing_and_is_no_number():
    field = affine_field([[0.0, 0, 0]], WALL, displacement=[0, 0, 2e-4], sd=SD)
    plain, blurred = (compute_strain(each) for each in (field, replace(field, bias=np.full((1, 12), np.nan))))
    assert blurred.values["disp_n_sd"][0] == plain.values["disp_n_sd"][0]
    assert np.isnan(blurred.bias["disp_n"][0])
