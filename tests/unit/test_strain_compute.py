# SPDX-License-Identifier: MIT
"""The strain stage as callers see it: which components are given, codes, choice of measure, bad options."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import OptionError
from scanstrain.linalg import rotation_matrix
from scanstrain.neighbourhood.result import PARAMETERS, Observed, Status
from scanstrain.strain import compute_strain

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
affine_field = FIELDS["affine_field"]
WALL = np.stack([[1.0, 0, 0], [0, 0, 1], [0, -1, 0]], axis=-1)  # a1 = x, a2 = up, n = -y towards the viewer
CODES = ("discovery", "observed", "status", "stable", "gauge_points")


@pytest.fixture
def rng():
    return np.random.default_rng(29)


def seen(*names):
    return np.array([name in names for name in PARAMETERS])


def given(result, k=0):
    return {a.name for a in ATTRIBUTES if a.name not in CODES and np.isfinite(result.values[a.name][k])}


def test_every_attribute_is_there_with_one_value_a_gauge(rng):
    field = affine_field(rng.normal(size=(4, 3)), FIELDS["random_frames"](rng, 4))
    result = compute_strain(field, thickness=0.2)
    assert list(result.values) == [a.name for a in ATTRIBUTES]
    for a in ATTRIBUTES:
        assert result.values[a.name].shape == (4,), a.name
        assert result.values[a.name].dtype == (a.numpy_dtype if a.kind == "code" else np.float64), a.name
        # places on a structure come from elsewhere
        assert np.isfinite(result.values[a.name]).all() == (a.kind != "place"), a.name
    assert set(result.detection_limit) == {"disp_n", "tilt", "spin", "strain", "curvature"}


def test_known_motion_of_a_wall_in_file_axes():
    # the face goes 3 mm towards the viewer (-y) and 1 mm up, stretches 400 ue along x and 100 ue down z
    gradient = np.zeros((3, 2))
    gradient[0, 0], gradient[1, 1], gradient[0, 1] = 400e-6, -100e-6, 60e-6
    field = affine_field([[5, 0, 2]], WALL, displacement=[0, 1e-3, 3e-3], gradient=gradient)
    values = {k: v[0] for k, v in compute_strain(field, structure="wall", measure="small").values.items()}
    np.testing.assert_allclose([values["disp_x"], values["disp_y"], values["disp_z"]], [0, -3e-3, 1e-3], atol=1e-15)
    assert values["disp_n"] == pytest.approx(3e-3)
    for name, expected in (("xx", 400e-6), ("zz", -100e-6), ("xz", 30e-6), ("yy", 0), ("xy", 0), ("yz", 0)):
        assert values[f"strain_{name}"] == pytest.approx(expected, abs=1e-8), name
    assert values["strain_u"] == pytest.approx(400e-6, abs=1e-8)
    assert values["strain_v"] == pytest.approx(-100e-6, abs=1e-8)
    assert values["shear_uv"] == pytest.approx(30e-6, abs=1e-8)
    assert values["spin"] == pytest.approx(-30e-6, abs=1e-8)
    assert values["rot_y"] == pytest.approx(30e-6, abs=1e-8)  # the normal is -y
    assert values["shear_max"] == values["strain_1"] - values["strain_2"]
    assert values["dilation"] == pytest.approx(300e-6 - 4e-8, abs=1e-11)


def test_tensor_in_file_axes_is_zero_along_the_normal_and_has_the_principal_values(rng):
    field = affine_field(
        rng.normal(size=(30, 3)), FIELDS["random_frames"](rng, 30), gradient=rng.normal(0, 1e-2, (30, 3, 2))
    )
    result = compute_strain(field, measure="hencky")
    v = result.values
    T = np.stack(
        [np.stack([v[f"strain_{'xyz'[min(i, j)]}{'xyz'[max(i, j)]}"] for j in range(3)], -1) for i in range(3)], -2
    )
    np.testing.assert_allclose(np.einsum("gij,gj->gi", T, result.normal), 0.0, atol=1e-15)
    roots = np.sort(np.linalg.eigvalsh(T), axis=1)
    expected = np.sort(np.stack([v["strain_1"], v["strain_2"], np.zeros(30)], -1), axis=1)
    np.testing.assert_allclose(roots, expected, atol=1e-14)
    along_u = np.einsum("gi,gij,gj->g", result.axes[:, :, 0], T, result.axes[:, :, 0])
    np.testing.assert_allclose(along_u, v["strain_u"], atol=1e-15)


def test_detection_limits_are_two_sided_95_percent_points():
    sd = np.array([1, 1, 2e-3, *[1e-4] * 4, 3e-4, 3e-4, *[5e-3] * 3])
    limit = compute_strain(affine_field([[0, 0, 0]], WALL, sd=sd), measure="small").detection_limit
    assert limit["disp_n"][0] == pytest.approx(1.959964 * 2e-3, rel=1e-6)
    assert limit["spin"][0] == pytest.approx(1.959964 * 1e-4 / np.sqrt(2), rel=1e-6)
    assert limit["tilt"][0] == pytest.approx(2.447747 * 3e-4, rel=1e-6)
    assert limit["strain"][0] == pytest.approx(1.959964 * 1e-4, rel=1e-6)
    # shear of the curvature is one unknown, twice of it enters at 45 degrees: sqrt(1/4 + 1/4 + 1) of its error
    assert limit["curvature"][0] == pytest.approx(1.959964 * 5e-3 * np.sqrt(1.5), rel=1e-6)


NORMAL_ONLY = ("un", "gn1", "gn2", "h11", "h12", "h22")
PLANE = ("u1", "u2", "g11", "g12", "g21", "g22")


@pytest.mark.parametrize(
    ("observable", "bits", "names"),
    [
        (("un",), Observed.NORMAL, {"disp_n", "disp_n_sd", "significance"}),
        (
            NORMAL_ONLY,
            Observed.NORMAL | Observed.TILT | Observed.CURVATURE,
            {"disp_n", "disp_n_sd", "tilt", "tilt_sd", "curv_1", "curv_2", "curv_sd", "significance"},
        ),
        (
            ("u1", "un", "gn1"),
            Observed.NORMAL | Observed.DISPLACEMENT_U,
            {"disp_n", "disp_n_sd", "significance"},
        ),
        (
            ("u1", "u2", "un"),
            Observed.NORMAL | Observed.DISPLACEMENT_U | Observed.DISPLACEMENT_V,
            {"disp_x", "disp_y", "disp_z", "disp_n", "disp_n_sd", "significance"},
        ),
        (
            ("g12", "g21"),
            Observed.SPIN,
            {"spin", "spin_sd", "significance"},
        ),
        (
            (*NORMAL_ONLY, "u2", "g21", "g22"),
            Observed.NORMAL | Observed.TILT | Observed.CURVATURE | Observed.DISPLACEMENT_V,
            {"disp_n", "disp_n_sd", "tilt", "tilt_sd", "curv_1", "curv_2", "curv_sd", "significance"},
        ),
        ((), 0, set()),
    ],
)  # fmt: skip
def test_a_component_is_given_only_where_it_is_observable(observable, bits, names):
    field = affine_field(
        [[0, 0, 0]], WALL, displacement=1e-3, gradient=1e-4, hessian=1e-3, observable=seen(*observable)
    )
    result = compute_strain(field, structure="wall", thickness=None)
    assert given(result) == names
    assert result.values["observed"][0] == bits


def test_one_tangent_that_is_not_along_an_axis_gives_neither():
    c, s = np.cos(0.5), np.sin(0.5)
    turned = WALL @ np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]])
    field = affine_field([[0, 0, 0]], turned, observable=seen("u1", "un"))
    assert compute_strain(field, structure="wall").values["observed"][0] == Observed.NORMAL


def test_failed_gauges_keep_their_reason_and_nothing_else():
    status = [Status.FINE, Status.JOINT, Status.NO_OVERLAP]
    field = affine_field(np.zeros((3, 3)), WALL, displacement=5e-3, status=status, points=[400, 70_000, 3])
    result = compute_strain(field, thickness=0.3)
    np.testing.assert_array_equal(result.values["status"], status)
    np.testing.assert_array_equal(result.status, status)
    np.testing.assert_array_equal(result.values["gauge_points"], [400, 65535, 3])
    np.testing.assert_array_equal(result.values["discovery"], [1, 0, 0])
    np.testing.assert_array_equal(result.values["observed"], [127, 0, 0])
    assert given(result, 1) == given(result, 2) == set()
    for limit in result.detection_limit.values():
        assert np.isfinite(limit[0])
        assert np.isnan(limit[1:]).all()


def test_no_gauge_at_all_and_only_failed_gauges_are_no_accident():
    empty = affine_field(np.empty((0, 3)), np.empty((0, 3, 3)))
    assert len(compute_strain(empty)) == 0
    failed = affine_field(np.zeros((2, 3)), WALL, status=[Status.EDGE] * 2)
    assert np.isnan(compute_strain(failed, structure="tunnel").values["significance"]).all()


def uniform(rng, *, strain=0.0, tilt=0.0, sd=1e-5, draws=50):
    F = rotation_matrix(np.array([tilt, 0.0, 0.0])) @ np.diag([1 + strain, 1.0, 1.0])
    noise = rng.normal(0, sd, (draws, 3, 2))
    return affine_field(
        np.zeros((draws, 3)), WALL, gradient=(F - np.eye(3))[:, :2] + noise, sd=np.full(12, sd)
    )  # fmt: skip


@pytest.mark.parametrize(
    ("case", "measure", "words"),
    [
        ({}, "small", "no significant"),
        ({"strain": 0.009}, "small", "no significant"),
        ({"strain": 0.012}, "hencky", "strain of 1.2"),
        ({"strain": -0.012}, "hencky", "strain of 1.2"),
        ({"tilt": 0.009}, "small", "no significant"),
        ({"tilt": 0.011}, "hencky", "rotation of 0.011"),
        # noise that passes the limits is no reason: half of these gauges show more than 1 %
        ({"sd": 0.02}, "small", "no significant"),
    ],
)
def test_the_measure_follows_significant_strain_and_rotation(case, measure, words, rng):
    result = compute_strain(uniform(rng, **case))
    assert result.measure == measure
    assert words in result.measure_reason


def test_rotation_that_registration_explains_is_no_reason(rng):
    fit = FIELDS["registration"](np.diag([0.02, 0.02, 0.02, 1e-3, 1e-3, 1e-3]) ** 2)
    assert compute_strain(uniform(rng, tilt=0.011), registration=fit).measure == "small"


def test_a_measure_that_is_asked_for_is_used(rng):
    field = uniform(rng, strain=0.1, sd=1e-9)
    for name, expected in (
        ("green_lagrange", 0.105),
        ("almansi", 0.0867768595),
        ("hencky", 0.0953101798),
        ("biot", 0.1),
    ):
        result = compute_strain(field, measure=name)
        assert result.measure == name
        np.testing.assert_allclose(result.values["strain_1"], expected, atol=1e-7)


def test_bending_is_given_only_with_a_thickness():
    field = affine_field([[0, 0, 0]], WALL, hessian=[-2e-3, 0, 1e-3])
    without, given_ = compute_strain(field).values, compute_strain(field, thickness=0.2).values
    assert np.isnan(without["bend_1"][0])
    assert given_["bend_1"][0] == pytest.approx(2e-4, rel=1e-9)  # more convex: tension on the scanned face
    assert given_["bend_2"][0] == pytest.approx(-1e-4, rel=1e-9)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"measure": "henky"}, "did you mean 'hencky'"),
        ({"structure": "tunel"}, "did you mean 'tunnel'"),
        ({"thickness": 0.0}, "thickness"),
        ({"thickness": float("nan")}, "thickness"),
        ({"false_discovery_rate": 0.0}, "false_discovery_rate"),
        ({"false_discovery_rate": 1.0}, "false_discovery_rate"),
        ({"axis": [0, 1, 0]}, "tunnel"),
        ({"structure": "tunnel", "axis": [0, 0, 0]}, "axis"),
        ({"structure": "tunnel", "axis": [0, 1]}, "axis"),
    ],
)
def test_a_wrong_option_is_refused_in_one_sentence(options, words):
    with pytest.raises(OptionError, match=words) as caught:
        compute_strain(affine_field([[0, 0, 0]], WALL), **options)
    assert caught.value.exit_code == 2


def test_a_registration_without_a_finite_covariance_is_refused():
    fit = FIELDS["registration"](np.full((6, 6), np.inf))
    with pytest.raises(OptionError, match="finite covariance"):
        compute_strain(affine_field([[0, 0, 0]], WALL), registration=fit)
