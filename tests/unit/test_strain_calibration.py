# SPDX-License-Identifier: MIT
"""Standard errors held against stable ground: what is claimed there must be what is seen there."""

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.strain.calibration import GROUPS, KINDS, calibrate

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
SIDE, SPACING = 60, 0.15
TEXTURED, BARE = KINDS
CLAIMED = np.array([1e-4] * 3 + [2e-4] * 6 + [1e-3] * 3)


def grid_field(rng, scatter, *, moved=0.0):
    """Gauges on a square whose errors are `scatter` times what they claim; `moved` [m] beyond half of the square."""
    x, y = np.meshgrid(np.arange(SIDE) * SPACING, np.arange(SIDE) * SPACING, indexing="ij")
    position = np.stack([x.ravel(), y.ravel(), np.zeros(SIDE**2)], axis=1)
    noise = rng.normal(size=(SIDE**2, 12)) * CLAIMED * scatter
    noise[position[:, 0] > x.max() / 2, 2] += moved
    return FIELDS["affine_field"](
        position, np.eye(3), displacement=noise[:, :3], gradient=noise[:, 3:9].reshape(-1, 3, 2), hessian=noise[:, 9:],
        sd=CLAIMED, points=400,
    )  # fmt: skip


def datum(points, stable, overlap=1.0):
    return replace(FIELDS["registration"](np.eye(6) * 1e-16), stable=stable, overlap=overlap)


@pytest.fixture
def points(rng):
    return np.c_[rng.uniform(0, SIDE * SPACING, (20_000, 2)), np.zeros(20_000)]


@pytest.fixture
def rng():
    return np.random.default_rng(11)


def test_errors_that_hold_are_left_alone(rng, points):
    field = grid_field(rng, 1.0)
    calibrated, found, said = calibrate(field, datum(points, np.ones(len(points), bool)), points)
    assert found.ground == "stable ground"
    assert all(1.0 <= factor < 1.03 for each in found.factors.values() for factor in each.values())
    assert said == ()
    assert (np.diagonal(calibrated.covariance, axis1=1, axis2=2) >= CLAIMED**2 * (1 - 1e-12)).all()


def test_errors_that_are_too_small_grow_to_the_scatter_and_only_there(rng, points):
    scatter = np.ones(12)
    scatter[2], scatter[[7, 8]] = 3.0, 2.0
    field = grid_field(rng, scatter)
    calibrated, found, said = calibrate(field, datum(points, np.ones(len(points), bool)), points)
    assert found.factors[TEXTURED]["normal displacement"] == pytest.approx(3.0, rel=0.04)
    assert found.factors[TEXTURED]["tilt"] == pytest.approx(2.0, rel=0.04)
    assert found.factors[TEXTURED]["in-plane strain and spin"] < 1.03
    sd = np.sqrt(calibrated.covariance[0].diagonal())
    np.testing.assert_allclose(sd[2], 1e-4 * found.factors[TEXTURED]["normal displacement"], rtol=1e-12)
    assert f"normal displacement x {found.factors[TEXTURED]['normal displacement']:.1f}" in said[0]


def test_what_moved_does_not_count_as_error(rng, points):
    field = grid_field(rng, 1.0, moved=5e-3)
    stable = points[:, 0] < SIDE * SPACING * 0.52
    _, found, _ = calibrate(field, datum(points, stable), points)
    assert found.ground == "stable ground"
    assert found.factors[TEXTURED]["normal displacement"] < 1.05
    assert found.gauges < SIDE**2 * 0.52


def test_without_established_ground_the_whole_surface_is_the_background_and_that_is_said(rng, points):
    field = grid_field(rng, 4.0)
    _, found, said = calibrate(field, datum(points, rng.uniform(size=len(points)) < 0.2), points)
    assert found.ground == "whole surface"
    assert found.factors[TEXTURED]["normal displacement"] == pytest.approx(4.0, rel=0.04)
    assert "Less than half of the surface" in said[0]


def test_correlations_survive_and_unknown_gauges_do_not_spoil_it(rng, points):
    field = grid_field(rng, 2.0)
    covariance = field.covariance.copy()
    covariance[:, 2, 7] = covariance[:, 7, 2] = 0.5 * CLAIMED[2] * CLAIMED[7]
    displacement = field.displacement.copy()
    displacement[::3] = np.nan
    field = replace(field, covariance=covariance, displacement=displacement)
    calibrated, found, _ = calibrate(field, datum(points, np.ones(len(points), bool)), points)
    C = calibrated.covariance[5]
    assert C[2, 7] / np.sqrt(C[2, 2] * C[7, 7]) == pytest.approx(0.5, rel=1e-9)
    assert set(found.factors[TEXTURED]) == set(GROUPS)


def test_too_little_ground_changes_nothing(rng, points):
    field = grid_field(rng, 5.0)
    few = replace(field, status=np.where(np.arange(len(field)) < 40, 0, 1).astype(np.uint8))
    calibrated, found, _ = calibrate(few, datum(points, np.ones(len(points), bool)), points)
    assert found.ground == "none"
    assert calibrated is few


def test_bare_and_textured_surfaces_are_judged_apart(rng, points):
    scatter = np.where(np.arange(SIDE**2)[:, None] % 2 == 0, 1.0, 2.5)
    field = grid_field(rng, scatter)
    shows = field.observable.copy()
    shows[1::2, :2] = False
    calibrated, found, _ = calibrate(
        replace(field, observable=shows), datum(points, np.ones(len(points), bool)), points
    )
    assert found.factors[TEXTURED]["normal displacement"] < 1.06
    assert found.factors[BARE]["normal displacement"] == pytest.approx(2.5, rel=0.06)
    np.testing.assert_allclose(calibrated.covariance[0], field.covariance[0], rtol=0.15)
    assert calibrated.covariance[1, 2, 2] == pytest.approx(6.25 * field.covariance[1, 2, 2], rel=0.12)
