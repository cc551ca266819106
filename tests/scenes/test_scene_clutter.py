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
    "reference": ((0.9, 1.0, 0.3), (3.1, 2.1, 0.3)),
    "current": ((2.0, 1.4, 0.5), (3.3, 0.8, 0.3)),
}
"""Shadows (q1, q2, radius) [m]: elsewhere in each epoch."""
CASES = ("stray points", "shadows")
UNKNOWNS = MEASURES["MOTION"]


def pair(scene, *, outliers=0.0, holes=None):
    """Two epochs of the scene."""
    shadows = holes or {"reference": (), "current": ()}
    return [
        sample_epoch(
            scene, deformed=deformed, spacing=0.01, intensity_noise=30.0, seed=71 + deformed, outliers=outliers,
            holes=shadows["current" if deformed else "reference"],
        )
        for deformed in (False, True)
    ]  # fmt: skip


@pytest.fixture(scope="module")
def seen():
    """The same homogeneous motion, seen clean, with 5 % stray points, and with shadows: field, errors, reference."""
    scene = MEASURES["textured"](Wall(4.0, 3.0), Linear(GRADIENT, centre=(2.0, 1.5), offset=(0.001, -0.002, 0.004)))
    out = {"scene": scene}
    for name, options in (("clean", {}), ("stray points", {"outliers": 0.05}), ("shadows", {"holes": HOLES})):
        reference, current = pair(scene, **options)
        field = fit_affine(reference, current, gauge_length=0.6, gauge_spacing=0.15)
        out[name] = field, MEASURES["errors_of"](scene, field), reference
    return out


@pytest.mark.parametrize("case", CASES)
@pytest.mark.parametrize("unknown", UNKNOWNS)
def test_it_costs_no_more_than_the_points_it_takes(seen, case, unknown):
    _, clean, _ = seen["clean"]
    _, errors, _ = seen[case]
    # Gauges that the shadows leave whole are judged; what happens at their rims is the next test.
    whole = errors.inside & (rim_distance(errors.material, case) > 0.3)
    error, sd = errors.of(unknown, whole)
    assert len(error) > 50
    # The aim is 1.2. Shadows cost up to 1.1; stray points up to 1.75, in the tilt, and the stated errors grow with it.
    assert rms(error) < (1.4 if case == "shadows" else 2.0) * rms(clean.of(unknown)[0])
    assert coverage(error, sd) >= 0.85


def rim_distance(q, case):
    """Distance to the nearest shadow of either epoch [m]."""
    if case != "shadows":
        return np.full(len(q), np.inf)
    discs = [disc for discs in HOLES.values() for disc in discs]
    return np.min([np.hypot(q[:, 0] - u, q[:, 1] - v) - radius for u, v, radius in discs], axis=0)


@pytest.mark.parametrize("unknown", UNKNOWNS)
def test_what_is_said_at_the_rim_of_a_shadow_is_right(seen, unknown):
    _, errors, _ = seen["shadows"]
    error, sd = errors.of(unknown, errors.inside & (rim_distance(errors.material, "shadows") <= 0.3))
    assert len(error) > 50
    assert coverage(error, sd) >= 0.85


@pytest.mark.parametrize("case", CASES)
def test_strain_is_not_biased(seen, case):
    field, errors, _ = seen[case]
    for unknown in ("g11", "g12", "g21", "g22"):
        error, _ = errors.of(unknown)
        given = errors.inside & np.isfinite(errors.error[:, UNKNOWNS.index(unknown)])
        mean, its_error = MEASURES["mean_and_error"](error, errors.material[given], field.gauge_length)
        assert abs(mean) < 3 * its_error, unknown


def test_nothing_is_said_in_the_middle_of_a_shadow(seen):
    """Gauges end near the rim, values half a gauge behind them: the rest of the shadow is empty."""
    field, _, reference = seen["shadows"]
    points = blend_to_points(compute_strain(field), reference.points)
    q, _ = seen["scene"].surface.project(reference.points)
    u, v, radius = HOLES["current"][0]
    deep = np.hypot(q[:, 0] - u, q[:, 1] - v) < radius - 0.4
    assert deep.sum() > 200
    for name in ("disp_n", "disp_x", "strain_1", "tilt", "curv_1", "spin"):
        assert np.isnan(points[name][deep]).all(), name
    assert (points["status"][deep] > 0).all()


def test_stray_points_are_no_surface(seen):
    """Gauges that stand on points far before the wall have no numbers."""
    field, _, _ = seen["stray points"]
    _, height = seen["scene"].surface.project(field.position)
    off = np.abs(height) > 0.1
    assert np.isnan(field.displacement[off]).all()
    assert np.isnan(field.gradient[off]).all()
