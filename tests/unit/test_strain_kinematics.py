# SPDX-License-Identifier: MIT
"""Tilt, spin and change of curvature of surfaces whose motion is known exactly."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.linalg import rotation_matrix
from scanstrain.strain import compute_strain
from scanstrain.strain.rotation import rotation_in_space, spin, tilt_vector
from scanstrain.strain.surface import map_surface, surface_strain

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))


def gradient_of(F):
    return (np.asarray(F) - np.eye(3))[..., :, :2]


@pytest.mark.parametrize("tilt", [0.0, 1e-7, 0.01, 0.5])
@pytest.mark.parametrize("turn", [-1.2, 0.0, 1e-6, 0.4])
def test_a_turn_about_the_normal_and_then_a_tilt_come_back_as_spin_and_tilt(tilt, turn):
    swing = rotation_matrix(tilt * np.array([0.6, 0.8, 0.0]))
    twist = rotation_matrix(np.array([0.0, 0.0, turn]))
    stretch = np.diag([1.02, 0.97, 1.0])
    mapped = map_surface(gradient_of(swing @ twist @ stretch)[None])
    np.testing.assert_allclose(spin(mapped), turn, atol=1e-14)
    np.testing.assert_allclose(tilt_vector(mapped)[0], [0.6 * tilt, 0.8 * tilt], atol=1e-14)
    np.testing.assert_allclose(mapped.rotation[0], swing @ twist, atol=1e-14)
    np.testing.assert_allclose(surface_strain(mapped, "biot")[0], np.diag([0.02, -0.03]), atol=1e-14)


def test_the_rotation_vector_is_given_in_local_axes():
    w = np.array([0.02, -0.01, 0.03])
    frame = FIELDS["random_frames"](np.random.default_rng(0), 5)
    in_frame = np.swapaxes(frame, 1, 2) @ rotation_matrix(w) @ frame
    np.testing.assert_allclose(
        rotation_in_space(map_surface(gradient_of(in_frame)), frame), np.tile(w, (5, 1)), atol=1e-15
    )


def test_tilt_from_normal_rows_alone_is_the_angle_of_the_slope():
    observable = np.ones(12, bool)
    observable[FIELDS["IN_PLANE"]] = False
    gradient = np.zeros((3, 2))
    gradient[2] = [0.03, 0.04]
    field = FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), gradient=gradient, observable=observable)
    values = compute_strain(field).values
    assert values["tilt"][0] == pytest.approx(np.arctan(0.05), rel=1e-12)
    assert np.isnan(values["spin"][0])
    assert np.isnan(values["rot_x"][0])


def test_a_flattening_sphere_changes_curvature_by_the_difference_of_one_over_radius():
    # free side outside: a cap falls away from its tangent plane, so the shape is -1/R
    R, R_now = 2.0, 2.2
    hessian = np.array([-1 / R_now + 1 / R, 0.0, -1 / R_now + 1 / R])
    field = FIELDS["affine_field"]([[0, 0, R]], np.eye(3), hessian=hessian, shape=[-1 / R, 0, -1 / R])
    values = compute_strain(field, thickness=0.4).values
    for name in ("curv_1", "curv_2"):
        assert values[name][0] == pytest.approx(1 / R_now - 1 / R, rel=1e-9)
    assert values["bend_1"][0] == pytest.approx(0.2 * (1 / R_now - 1 / R), rel=1e-9)


def test_uniform_growth_of_a_sphere_needs_the_stretch_of_the_arc():
    # u = (k - 1) x: the height of material points over the old tangent plane is k s x x / 2, their arc k x
    R, k = 2.0, 1.1
    gradient = np.zeros((3, 2))
    gradient[0, 0] = gradient[1, 1] = k - 1
    s = -1 / R
    field = FIELDS["affine_field"](
        [[0, 0, R]], np.eye(3), gradient=gradient, hessian=[(k - 1) * s, 0, (k - 1) * s], shape=[s, 0, s]
    )
    values = compute_strain(field, measure="hencky").values
    assert values["curv_1"][0] == pytest.approx(1 / (k * R) - 1 / R, rel=1e-9)
    assert values["strain_1"][0] == pytest.approx(np.log(k), rel=1e-12)


def test_a_rigid_tilt_of_a_curved_surface_changes_no_curvature():
    s, angle = np.array([0.5, 0.1, -0.3]), 0.2
    R = rotation_matrix(np.array([angle, 0.0, 0.0]))
    # the turned quadric as the fit sees it: affine in its tangents, second derivatives along the old normal
    field = FIELDS["affine_field"](
        [[0, 0, 0]], np.eye(3), gradient=gradient_of(R), hessian=s / np.cos(angle) - s, shape=s
    )
    values = compute_strain(field).values
    np.testing.assert_allclose([values["curv_1"][0], values["curv_2"][0]], 0.0, atol=1e-14)
    assert values["tilt"][0] == pytest.approx(angle, rel=1e-12)
