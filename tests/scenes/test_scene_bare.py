# SPDX-License-Identifier: MIT
"""Smooth surfaces of one colour: what moves along its normal is measured, what moves in its own plane is not given."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.neighbourhood import fit_affine
from scanstrain.strain import blend_to_points, compute_strain
from scanstrain.synthetic import Cantilever, Dome, Lining, Ovalisation, Scene, Sum, Wall, sample_epoch

MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
rms, coverage = MEASURES["rms"], MEASURES["coverage"]
IN_PLANE = (
    "disp_x", "disp_y", "disp_z", "strain_xx", "strain_yy", "strain_zz", "strain_xy", "strain_xz", "strain_yz",
    "strain_1", "strain_2", "strain_1_sd", "strain_2_sd", "shear_max", "dilation", "strain_u", "strain_v", "shear_uv",
    "rot_x", "rot_y", "rot_z", "spin", "spin_sd",
)  # fmt: skip
NOISE, WALL_SPACING, WALL_GAUGE = 5e-4, 0.012, 0.5
R, U0, THICKNESS = 3.0, 0.015, 0.25
"""Ring of 3 m (the lining's middle line), 0.5 % change of diameter, 0.25 m thick."""


@pytest.fixture(scope="module")
def bare_wall():
    """A wall that leans by 9 mm and bulges by 4 mm; even reflectance with 2 % noise."""
    scene = Scene(Wall(4.0, 3.0), Sum((Cantilever(0.009, 3.0), Dome(0.004, (2.0, 1.5), 1.8))))
    reference, current = (
        sample_epoch(
            scene, deformed=deformed, spacing=WALL_SPACING, noise=NOISE, intensity_noise=30.0, seed=40 + deformed
        )
        for deformed in (False, True)
    )
    field = fit_affine(
        reference, current, gauge_length=WALL_GAUGE, gauge_spacing=0.125, free_side=np.array([2.0, -5, 1])
    )
    strain = compute_strain(field, structure="wall")
    return scene, field, strain, blend_to_points(strain, reference.points), reference, current


def test_bare_wall_gives_nothing_in_plane(bare_wall):
    _, _, _, points, *_ = bare_wall
    for name in IN_PLANE:
        assert np.isnan(points[name]).mean() >= 0.99, name


def test_bare_wall_gives_normal_displacement_and_tilt(bare_wall):
    _, _, _, points, *_ = bare_wall
    for name in ("disp_n", "disp_n_sd", "tilt", "tilt_sd", "curv_1"):
        assert np.isfinite(points[name]).mean() >= 0.95, name


def test_bare_wall_normal_displacement_and_tilt_are_right(bare_wall):
    scene, field, strain, _, reference, current = bare_wall
    errors = MEASURES["errors_of"](scene, field)
    q = [scene.surface.project(epoch.points)[0] for epoch in (reference, current)]
    bounds = MEASURES["normal_bounds"](
        scene.surface, errors.material[errors.inside], WALL_GAUGE / 2, *[(each, NOISE**2) for each in q]
    )
    for name, bound in zip(("un", "gn1", "gn2"), bounds.T, strict=False):
        error, sd = errors.of(name)
        assert len(error) == len(bound), name
        assert rms(error) < 1.5 * rms(bound), name
        assert coverage(error, sd) >= 0.90, name
    tilt, exact = strain.values["tilt"], errors.truth["tilt"]
    steep = errors.inside & (exact > 2e-3)
    assert steep.sum() > 100
    np.testing.assert_allclose(tilt[steep], exact[steep], atol=6 * rms(bounds[:, 1]))


def test_bare_wall_tells_the_user_why(bare_wall):
    _, _, strain, *_ = bare_wall
    assert any("not observable" in warning for warning in strain.warnings)


@pytest.fixture(scope="module")
def bare_ring():
    """A lining without texture that becomes an oval at constant length."""
    scene = Scene(Lining(R, 2.4, arc=(-np.pi / 2, 1.5 * np.pi)), Ovalisation(U0))
    reference, current = (
        sample_epoch(scene, deformed=deformed, spacing=0.018, noise=1e-4, intensity_noise=30.0, seed=50 + deformed)
        for deformed in (False, True)
    )
    axis = np.array([1.0, 0.0, 0.0])
    field = fit_affine(reference, current, gauge_length=0.8, gauge_spacing=0.2, axis=axis)
    strain = compute_strain(field, structure="tunnel", thickness=THICKNESS, axis=axis)
    return scene, field, strain, blend_to_points(strain, reference.points)


def sector(scene, field, angle):
    """Gauges within 6 degrees of an angle of the ring, or of the one opposite, away from its ends."""
    q, _ = scene.surface.project(field.position)
    turn = np.angle(np.exp(2j * (q[:, 0] / R - angle))) / 2
    return (np.abs(turn) < np.deg2rad(6)) & MEASURES["within"](scene.surface, q, 0.4) & (field.status == 0)


def test_bare_ring_gives_no_strain_anywhere(bare_ring):
    """A normal-only reading of this motion is +5000 microstrain at the springline, where the truth is nil."""
    *_, points = bare_ring
    for name in IN_PLANE:
        assert np.isnan(points[name]).mean() >= 0.99, name
    for name in (n for n in IN_PLANE if n.startswith(("strain", "shear", "dilation")) and "sd" not in n):
        given = points[name][np.isfinite(points[name])]
        assert (np.abs(given) < 2e-3).all(), name


def test_bare_ring_moves_as_it_does(bare_ring):
    scene, field, *_ = bare_ring
    errors = MEASURES["errors_of"](scene, field)
    error, _ = errors.of("un")
    assert len(error) > 300
    # 15 mm of motion; slid unseen by 7.5 mm along the ring, which turns the normal by 2.5 mrad
    assert rms(error) < 1e-4


@pytest.mark.parametrize(
    ("place", "angle", "curvature", "name", "bending"),
    [
        ("springline", 0.0, -0.005, "2", -625e-6),
        ("crown", np.pi / 2, +0.005, "1", +625e-6),
    ],
)
def test_bare_ring_bends_as_the_closed_form_says(bare_ring, place, angle, curvature, name, bending):
    """Sharper by 3 u0 / R^2 at the springline: less convex to the free side, the intrados in compression."""
    scene, field, strain, _ = bare_ring
    here = sector(scene, field, angle)
    assert here.sum() >= 12
    assert strain.values[f"curv_{name}"][here].mean() == pytest.approx(curvature, rel=0.05), place
    assert strain.values[f"bend_{name}"][here].mean() == pytest.approx(bending, rel=0.05), place
    other = "1" if name == "2" else "2"
    assert abs(strain.values[f"curv_{other}"][here].mean()) < 0.1 * abs(curvature), place
