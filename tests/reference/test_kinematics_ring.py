# SPDX-License-Identifier: MIT
"""The ovalising lining: bending, hoop strain, wall rotation and their signs (`kinematics_values.toml`, ring)."""

from __future__ import annotations

import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain import strain
from scanstrain.neighbourhood.result import Observed

HERE = Path(__file__).parent
RING = tomllib.loads((HERE / "kinematics_values.toml").read_text())["ring"]
FIELDS = runpy.run_path(str(HERE.parent / "strain_fields.py"))
SPRINGLINE, SHOULDER, CROWN = range(3)
UE = 1e-6


def ring(observable=None, *, measure="small"):
    theta = np.radians([0, 45, 90, 135, 180, 225, 270, 315, 20, 70])
    field = FIELDS["ring_field"](theta, radius=RING["radius"], u0=RING["u0"], observable=observable)
    return strain.compute_strain(field, structure="tunnel", thickness=RING["thickness"], measure=measure)


def smooth_lining():
    observable = np.ones(12, bool)
    observable[FIELDS["IN_PLANE"]] = False
    return ring(observable)


@pytest.mark.parametrize("result", [ring(), smooth_lining()], ids=["textured", "smooth"])
def test_intrados_bending_signs(result):
    springline, crown = RING["intrados_ue"]["springline"], RING["intrados_ue"]["crown"]
    tolerance = RING["intrados_tolerance_ue"]
    bend_1, bend_2 = result.values["bend_1"] / UE, result.values["bend_2"] / UE
    for k in (SPRINGLINE, 4):
        assert bend_2[k] == pytest.approx(springline, abs=tolerance)
        assert bend_1[k] == pytest.approx(0.0, abs=tolerance)
    for k in (CROWN, 6):
        assert bend_1[k] == pytest.approx(crown, abs=tolerance)
        assert bend_2[k] == pytest.approx(0.0, abs=tolerance)


def test_ring_gets_sharper_where_curvature_towards_the_free_side_falls():
    values = ring().values
    change = RING["ring_curvature_change"]
    assert values["curv_2"][SPRINGLINE] == pytest.approx(-change["springline"], rel=1e-3)
    assert values["curv_1"][CROWN] == pytest.approx(-change["crown"], rel=1e-3)
    # between them the change is 3 u0 cos 2t / R^2, less the square of a wall rotation of 7.5 mrad times 1/R
    assert values["curv_1"][SHOULDER] == pytest.approx(0.0, abs=3e-5)


def test_inextensible_mode_has_no_hoop_strain():
    values = ring().values
    for name in ("strain_u", "strain_v", "shear_uv"):
        np.testing.assert_allclose(values[name][[SPRINGLINE, CROWN]], 0.0, atol=1e-12)


def test_second_order_mid_line_strain_at_45_degrees():
    values = ring(measure="green_lagrange").values
    assert values["strain_u"][SHOULDER] / UE == pytest.approx(RING["mid_line_green_lagrange_45_ue"], abs=0.002)


def test_wall_rotation():
    values = ring().values
    assert values["tilt"][SHOULDER] == pytest.approx(RING["max_wall_rotation"], rel=1e-4)
    assert values["tilt"][SPRINGLINE] == pytest.approx(0.0, abs=1e-12)


def test_a_smooth_lining_shows_no_hoop_strain_instead_of_a_wrong_one():
    result = smooth_lining()
    for name in ("strain_1", "strain_2", "strain_u", "strain_v", "shear_uv", "dilation", "spin", "disp_x"):
        assert np.isnan(result.values[name]).all(), name
    expected = Observed.NORMAL | Observed.TILT | Observed.CURVATURE
    assert (result.values["observed"] == expected).all()
    np.testing.assert_allclose(result.values["disp_n"][[SPRINGLINE, CROWN]], [-RING["u0"], RING["u0"]], atol=1e-12)
    assert any("not observable" in sentence for sentence in result.warnings)


def test_hoop_and_axial_axes():
    result = ring()
    np.testing.assert_allclose(result.axes[:, :, 1], np.tile([0.0, 1.0, 0.0], (10, 1)), atol=1e-12)
    np.testing.assert_allclose(result.axes[SPRINGLINE, :, 0], [0, 0, 1], atol=1e-12)
    np.testing.assert_allclose(result.axes[CROWN, :, 0], [-1, 0, 0], atol=1e-12)


def test_radial_growth_followed_by_points_or_by_the_surface_gives_the_same_curvature():
    # the ring grows by c everywhere: curvature of the ring goes from 1/R to 1/(R + c)
    R, c = RING["radius"], 0.003
    frame = np.array([[0.0, 0.0, -1.0], [0.0, 1.0, 0.0], [1.0, 0.0, 0.0]])
    expected = 1 / R - 1 / (R + c)
    gradient = np.zeros((3, 2))
    gradient[0, 0] = c / R
    points = FIELDS["affine_field"](
        [[R, 0, 0]], frame, gradient=gradient, hessian=[c / R**2, 0, 0], shape=[1 / R, 0, 0]
    )  # fmt: skip
    observable = np.ones(12, bool)
    observable[FIELDS["IN_PLANE"]] = False
    surface = FIELDS["affine_field"](
        [[R, 0, 0]], frame, hessian=[1 / (R + c) - 1 / R, 0, 0], shape=[1 / R, 0, 0], observable=observable
    )
    for field in (points, surface):
        values = strain.compute_strain(field, measure="small").values
        assert values["curv_1"][0] == pytest.approx(expected, rel=1e-6)
