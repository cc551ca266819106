# SPDX-License-Identifier: MIT
"""Errors of every quantity and means over zones, against simulation and closed forms."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import JUDGED
from scanstrain.strain import compute_strain
from scanstrain.strain.zone_values import area_of, zone_values

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
DRAWS = 6000
SD = np.array([1e-4, 2e-4, 1e-4, 1e-5, 2e-5, 1e-5, 3e-5, 1e-4, 1e-4, 1e-3, 1e-3, 2e-3])


def noisy(rng, truth, count=DRAWS, **options):
    """One gauge many times: unknowns with correlated noise of known covariance."""
    mix = np.tril(rng.uniform(-0.4, 0.4, (12, 12)), -1) + np.eye(12)
    root = SD[:, None] * mix
    p = np.asarray(truth) + rng.normal(size=(count, 12)) @ root.T
    frame = FIELDS["random_frames"](rng, 1)[0]
    return FIELDS["affine_field"](
        np.zeros((count, 3)), frame, displacement=p[:, :3], gradient=p[:, 3:9].reshape(-1, 3, 2), hessian=p[:, 9:],
        covariance=root @ root.T, **options,
    )  # fmt: skip


def test_every_error_is_the_spread_of_its_quantity():
    """A state in which no length is near zero: then errors are plain standard deviations."""
    rng = np.random.default_rng(3)
    truth = [1e-3, 2e-3, 3e-3, 6e-4, 1e-4, 3e-4, -4e-4, 2e-3, 1e-3, 3e-2, 5e-3, -2e-2]
    strain = compute_strain(noisy(rng, truth), structure="wall", measure="small", thickness=0.4)
    assert set(strain.certainty) == set(JUDGED)
    for name in JUDGED:
        claimed, values = np.median(strain.certainty[name].sd), np.asarray(strain.values[name])
        assert claimed == pytest.approx(values.std(), rel=0.05), name
        assert not strain.certainty[name].datum_sd.any()


def test_the_bias_of_lengths_and_principal_values_at_rest_is_the_one_stated():
    rng = np.random.default_rng(4)
    strain = compute_strain(noisy(rng, np.zeros(12)), structure="wall", measure="small", thickness=0.4)
    for name, sign in {"tilt": 1, "strain_1": 1, "strain_2": -1, "shear_max": 1, "curv_1": 1, "bend_2": -1}.items():
        mean, stated = np.mean(strain.values[name]), np.median(strain.certainty[name].noise_bias)
        # noise that is not round lengthens less: sqrt(2 / pi) against sqrt(pi / 4) where it has one direction only
        assert 0.88 < mean / stated < 1.03, name
        assert np.sign(stated) == sign
    assert not strain.certainty["strain_u"].noise_bias.any()


def grid(n, spacing, rng, sd, truth=0.0, length=0.4):
    """Gauges on a wall whose normal displacements are means over overlapping patches of one gauge length."""
    from scipy.signal import fftconvolve

    reach = round(length / spacing)  # of the patch, in half spacings
    steps = np.arange(-reach, reach + 1)
    disc = (np.hypot(*np.meshgrid(steps, steps)) <= reach).astype(float)
    white = rng.normal(size=(2 * n + 2 * reach,) * 2)
    noise = fftconvolve(white, disc / np.sqrt(disc.sum()), mode="valid")[: 2 * n : 2, : 2 * n : 2]
    x, z = np.meshgrid(np.arange(n) * spacing, np.arange(n) * spacing, indexing="ij")
    frame = np.column_stack([[1.0, 0, 0], [0, 0, 1], [0, -1, 0]])
    un = truth + sd * noise.ravel()
    return FIELDS["affine_field"](
        np.column_stack([x.ravel(), 0 * x.ravel(), z.ravel()]), frame, displacement=np.c_[0 * un, 0 * un, un],
        sd=[1e-4] * 2 + [sd] + [1e-5] * 6 + [1e-3] * 3, gauge_length=length, gauge_spacing=spacing,
    )  # fmt: skip


def test_the_interval_of_a_mean_counts_overlap_and_holds():
    """A thousand points behind overlapping gauges are not a thousand gauges."""
    rng = np.random.default_rng(5)
    hits, ratios = 0, []
    for _ in range(100):
        strain = compute_strain(grid(24, 0.1, rng, 3e-4, truth=2e-3), structure="wall", measure="small")
        value = zone_values(strain, np.ones(24 * 24, bool))["disp_n"]
        hits += value.mean_low < 2e-3 < value.mean_high
        ratios.append((value.mean - 2e-3) / value.mean_sd)
    assert hits >= 90
    assert 0.6 < np.std(ratios) < 1.15
    assert 30 <= value.independent <= 60 < value.observable == 576


def test_the_error_of_the_registration_does_not_average_out():
    """A turn about the vertical through the middle leaves the mean alone; a shift along the normal is all in it."""
    rng = np.random.default_rng(6)
    field = grid(12, 0.1, rng, 1e-4)
    middle = field.position.mean(axis=0)
    for motion, expected in (([0, 0, 1e-3, 0, 0, 0], 0.0), ([0, 0, 0, 0, 1e-3, 0], 1e-3), ([0, 0, 0, 1e-3, 0, 0], 0.0)):
        registered = FIELDS["registration"](np.diag(np.square(motion)), middle)
        strain = compute_strain(field, registration=registered, structure="wall", measure="small")
        value = zone_values(strain, np.ones(144, bool), registration=registered)["disp_n"]
        alone = zone_values(compute_strain(field, structure="wall", measure="small"), np.ones(144, bool))["disp_n"]
        assert np.sqrt(value.mean_sd**2 - alone.mean_sd**2) == pytest.approx(expected, abs=1e-7)
    assert strain.certainty["strain_u"].datum_sd.max() == 0


def test_a_zone_has_its_own_gauges_area_and_extreme():
    rng = np.random.default_rng(7)
    field = grid(12, 0.1, rng, 1e-4)
    field.displacement[40, 2] = -0.02
    strain = compute_strain(field, structure="wall", measure="small")
    here, elsewhere = np.arange(144) < 72, np.arange(144) >= 72
    value = zone_values(strain, here)["disp_n"]
    assert (value.gauge, value.extreme) == (40, pytest.approx(-0.02))
    # an interval for all 72 gauges together: 3.39 standard errors (Sidak), by the tables of the normal distribution
    assert value.extreme_high - value.extreme == pytest.approx(3.39 * 1e-4, rel=0.01)
    assert abs(zone_values(strain, elsewhere)["disp_n"].extreme) < 1e-3
    assert area_of(strain, here) == pytest.approx(0.72)


def test_what_nothing_shows_has_no_number():
    seen = np.ones(12, bool)
    seen[FIELDS["IN_PLANE"]] = False
    strain = compute_strain(noisy(np.random.default_rng(8), np.zeros(12), 5, observable=seen), measure="small")
    found = zone_values(strain, np.ones(5, bool))
    assert found["strain_1"].observable == 0
    assert np.isnan(found["strain_1"].mean)
    assert found["strain_1"].gauge is None
    assert found["bend_1"].observable == 0
    assert found["disp_n"].observable == 5
    assert found["disp_n"].independent == 1
