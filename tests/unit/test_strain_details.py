# SPDX-License-Identifier: MIT
"""Directions only where there is one, bending and membrane strain apart, and one measure against the others."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.strain import compare_measures, compute_strain
from scanstrain.strain.details import DETAILS

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
SD = 50e-6


def drawn(strain, draws, *, seed=3, sd=SD, covariance=None, **options):
    """Many gauges with one true in-plane strain ((xx, xy), (xy, yy)) and independent noise of the gradient."""
    rng = np.random.default_rng(seed)
    gradient = np.zeros((draws, 3, 2))
    gradient[:, :2] = np.asarray(strain) + rng.normal(0, sd, (draws, 2, 2))
    noise = np.diag([1e-12] * 3 + [sd**2] * 4 + [1e-20] * 2 + [1e-12] * 3) if covariance is None else covariance
    return FIELDS["affine_field"](np.zeros((draws, 3)), np.eye(3), gradient=gradient, covariance=noise, **options)


def test_equal_principal_strains_have_no_direction_in_95_percent_of_cases():
    strain = compute_strain(drawn(400e-6 * np.eye(2), 20_000), measure="small")
    given = np.isfinite(strain.details["direction_1"])
    assert given.mean() == pytest.approx(0.05, abs=0.006)
    assert (given == np.isfinite(strain.details["direction_1_sd"])).all()


def test_a_direction_and_its_error_are_those_of_repeated_draws():
    # principal strains of 500 and -100 microstrain, the larger one at 30 degrees from a1
    angle = np.radians(30)
    Q = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    strain = compute_strain(drawn(Q @ np.diag([500e-6, -100e-6]) @ Q.T, 20_000), measure="small")
    found, sd = strain.details["direction_1"], strain.details["direction_1_sd"]
    assert np.isfinite(found).mean() > 0.99
    # direction in space, whatever the axes u and v are: along cos u + sin v
    along = strain.axes[:, :, 0] * np.cos(found)[:, None] + strain.axes[:, :, 1] * np.sin(found)[:, None]
    turned = np.arctan2(along[:, 1], along[:, 0]) - angle
    turned = np.angle(np.exp(2j * turned[np.isfinite(turned)])) / 2
    assert turned.mean() == pytest.approx(0.0, abs=0.002)
    assert turned.std() == pytest.approx(np.nanmean(sd), rel=0.05)


def test_membrane_and_bending_strain_add_up_to_that_of_the_face():
    field = FIELDS["ring_field"](np.radians([0, 45, 90]), radius=3.0, u0=0.015)
    strain = compute_strain(field, structure="tunnel", thickness=0.25, measure="small")
    details = strain.details
    assert details["bend_u"][[0, 2]] == pytest.approx([-625e-6, 625e-6], abs=1e-6)
    assert details["bend_v"] == pytest.approx(np.zeros(3), abs=1e-6)
    for axis in "uv":
        total = details[f"membrane_{axis}"] + details[f"bend_{axis}"]
        np.testing.assert_allclose(total, strain.values[f"strain_{axis}"], atol=1e-15)


def test_the_error_of_the_membrane_strain_counts_what_both_parts_share():
    rng = np.random.default_rng(8)
    draws, thickness = 20_000, 0.3
    noise = np.zeros((12, 12))
    # the gradient g11 and the second derivative h11 of one gauge go together
    noise[3, 3], noise[9, 9], noise[3, 9] = 1e-8, 4e-7, 5e-8
    noise[9, 3] = noise[3, 9]
    noise += np.diag([1e-14] * 12)
    error = rng.multivariate_normal(np.zeros(12), noise, draws)
    gradient = error[:, 3:9].reshape(-1, 3, 2)
    field = FIELDS["affine_field"](
        np.zeros((draws, 3)), np.eye(3), gradient=gradient, hessian=error[:, 9:], covariance=noise
    )
    found = compute_strain(field, measure="small", thickness=thickness).details
    # u and v of a free object are a1 and a2 in some order and sense: take the one that carries the noise
    spread = {axis: found[f"membrane_{axis}"].std() for axis in "uv"}
    axis = max(spread, key=lambda each: spread[each])
    assert found[f"membrane_{axis}_sd"].mean() == pytest.approx(spread[axis], rel=0.03)


def test_without_thickness_or_texture_nothing_is_made_up():
    observable = np.ones(12, bool)
    observable[FIELDS["IN_PLANE"]] = False
    smooth = FIELDS["ring_field"](np.radians([0, 45, 90]), radius=3.0, u0=0.015, observable=observable)
    found = compute_strain(smooth, structure="tunnel", thickness=0.25).details
    assert np.isfinite(found["bend_u"]).all()
    for name in ("membrane_u", "membrane_u_sd", "direction_1", "direction_1_sd"):
        assert np.isnan(found[name]).all(), name
    bare = compute_strain(smooth, structure="tunnel").details
    assert list(bare) == list(DETAILS)
    assert all(np.isnan(values).all() for values in bare.values())


def test_bending_of_a_thick_ring_is_that_of_a_curved_bar():
    """Inside of a ring, measured there: r = 2.875 m, mid-line 3 m; 3 z u0 / (R r) = 652.17 microstrain (checked on the
    exact deformed curve, 652.176)."""
    thickness, inside = 0.25, 2.875
    field = FIELDS["ring_field"](np.radians([0, 90]), radius=inside, u0=0.015)
    thin, thick = (
        compute_strain(field, structure="tunnel", thickness=thickness, bending_form=form, measure="small")
        for form in ("thin", "thick")
    )
    assert thick.values["bend_2"][0] == pytest.approx(-652.174e-6, rel=2e-3)
    assert thick.values["bend_1"][1] == pytest.approx(652.174e-6, rel=2e-3)
    assert thin.values["bend_1"][1] / thick.values["bend_1"][1] == pytest.approx(3.0 / inside, rel=1e-9)
    ratio = thin.certainty["bend_1"].sd[1] / thick.certainty["bend_1"].sd[1]
    assert ratio == pytest.approx(3.0 / inside, rel=0.05)
    with pytest.raises(OptionError, match="form of bending"):
        compute_strain(field, bending_form="fat")


def test_measures_are_compared_where_they_differ_most():
    gradient = np.zeros((3, 3, 2))
    gradient[:, 0, 0] = [0.001, 0.10, 0.02]
    field = FIELDS["affine_field"](np.zeros((3, 3)), np.eye(3), gradient=gradient)
    rows = {row.measure: row for row in compare_measures(field, used="small")}
    assert list(rows) == ["green_lagrange", "almansi", "hencky", "biot"]
    # a stretch of 1.1: 0.105, 0.0867768595, 0.0953101798 (closed forms)
    for name, value in (("green_lagrange", 0.105), ("almansi", 0.0867768595), ("hencky", 0.0953101798), ("biot", 0.1)):
        assert rows[name].difference == pytest.approx(value - 0.1, abs=1e-9), name
    assert {rows[name].gauge for name in ("green_lagrange", "almansi", "hencky")} == {1}
    assert rows["hencky"].strain == pytest.approx(0.1)
    assert rows["hencky"].sd > 0


def test_measures_of_a_surface_without_strain_are_not_compared():
    observable = np.ones(12, bool)
    observable[FIELDS["IN_PLANE"]] = False
    field = FIELDS["affine_field"](np.zeros((3, 3)), np.eye(3), observable=observable)
    assert all(np.isnan(row.difference) and row.gauge is None for row in compare_measures(field, used="small"))
    assert replace(compute_strain(field), compared=compare_measures(field, used="small")).compared[0].gauge is None
