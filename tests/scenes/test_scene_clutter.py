# SPDX-License-Identifier: MIT
"""Stray points before the surface, and places that only one epoch shows: the rest stays right, the gaps stay empty."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.neighbourhood import fit_affine
from scanstrain.strain import blend_to_points, compute_strain
from scanstrain.synthetic import Linear, Wall, sample_epoch

MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
rms, coverage = MEASURES["rms"], MEASURES["coverage"]
GRADIENT = ((1.5e-3, 4e-4), (-6e-4, -1e-3), (3e-3, -2e-3))
HOLES = {
    "reference": ((1.0, 1.0, 0.35), (2.9, 2.2, 0.3), (0.4, 2.4, 0.25)),
    "current": ((2.1, 0.9, 0.35), (3.3, 1.2, 0.3), (1.6, 2.6, 0.25)),
}
"""Shadows (q1, q2, radius) [m]: elsewhere in each epoch."""


@pytest.fixture(scope="module")
def fields():
    """The same homogeneous motion, seen clean and seen with 5 % stray points and shadows."""
    scene = MEASURES["textured"](Wall(4.0, 3.0), Linear(GRADIENT, centre=(2.0, 1.5), offset=(0.001, -0.002, 0.004)))
    out = {}
    for name, outliers in (("clean", 0.0), ("cluttered", 0.05)):
        reference, current = (
            sample_epoch(
                scene, deformed=deformed, spacing=0.01, intensity_noise=30.0, seed=71 + deformed, outliers=outliers,
                holes=HOLES["current" if deformed else "reference"] if outliers else (),
            )
            for deformed in (False, True)
        )  # fmt: skip
        field = fit_affine(reference, current, gauge_length=0.6, gauge_spacing=0.15)
        out[name] = field, MEASURES["errors_of"](scene, field), reference
    return scene, out


@pytest.mark.parametrize("unknown", MEASURES["MOTION"])
def test_clutter_costs_no_more_than_the_points_it_takes(fields, unknown):
    _, seen = fields
    clean, _ = seen["clean"][1].of(unknown)
    error, sd = seen["cluttered"][1].of(unknown)
    assert len(error) > 0.6 * len(clean)
    assert rms(error) < 1.4 * rms(clean)
    assert coverage(error, sd) >= 0.88


def test_cluttered_strain_is_not_biased(fields):
    _, seen = fields
    field, errors, _ = seen["cluttered"]
    for unknown in ("g11", "g12", "g21", "g22"):
        error, _ = errors.of(unknown)
        given = errors.inside & np.isfinite(errors.error[:, MEASURES["MOTION"].index(unknown)])
        mean, its_error = MEASURES["mean_and_error"](error, errors.material[given], field.gauge_length)
        assert abs(mean) < 3 * its_error, unknown


def test_nothing_is_said_where_an_epoch_is_blind(fields):
    scene, seen = fields
    field, _, reference = seen["cluttered"]
    points = blend_to_points(compute_strain(field), reference.points)
    q, height = scene.surface.project(reference.points)
    on_wall = np.abs(height) < 0.01
    for u, v, radius in HOLES["current"]:
        deep = on_wall & (np.hypot(q[:, 0] - u, q[:, 1] - v) < radius - 0.15)
        assert deep.sum() > 100
        assert np.isnan(points["strain_1"][deep]).mean() > 0.9, (u, v)
        assert (points["status"][deep] > 0).mean() > 0.9, (u, v)


def test_stray_points_carry_no_gauges_of_their_own(fields):
    scene, seen = fields
    field, _, _ = seen["cluttered"]
    _, height = scene.surface.project(field.position)
    off = np.abs(height) > 0.02
    assert np.isnan(field.displacement[off, 2]).all()
    assert np.isnan(field.gradient[off][:, :2]).all()
