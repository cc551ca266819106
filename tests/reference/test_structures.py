# SPDX-License-Identifier: MIT
"""Structures with known displacements, limits and budgets (`structures_values.toml`).

Displacements in closed form go into an affine least-squares fit of a patch, as a gauge has it, and from there through
the strain stage. Fits use a general library, so that only the strain stage is judged here; scans are in the scenes.
"""

from __future__ import annotations

import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain.budget import projection_line, scale_line, temperature_line
from scanstrain.damage import tensile_class
from scanstrain.linalg import rotation_matrix, tensor_2d
from scanstrain.strain import compute_strain
from scanstrain.strain.measures import biot, green_lagrange, small
from scanstrain.strain.surface import principal
from scanstrain.structures import Wall, measure_wall

HERE = Path(__file__).parent
VALUES = tomllib.loads((HERE / "structures_values.toml").read_text())
FIELDS = runpy.run_path(str(HERE.parent / "strain_fields.py"))
GRID = runpy.run_path(str(HERE.parent / "structures_walls.py"))["grid"]
UE, MM = 1e-6, 1e-3


def on_ring(t, length, radius, radial, along):
    """Places of the inside of a ring about the y axis and their displacements, `radial` outwards, `along` with t."""
    zero = np.zeros_like(t)
    out, hoop = np.stack([np.cos(t), zero, np.sin(t)], -1), np.stack([-np.sin(t), zero, np.cos(t)], -1)
    return radius * out + length[:, None] * [0, 1, 0], radial(t)[:, None] * out + along(t)[:, None] * hoop


def gauge_on_ring(angle, window, radius, radial, along):
    """Strain of one gauge from an affine fit in its tangent plane to the full displacements of dense points."""
    step = np.linspace(-window, window, 81)
    s, length = (each.ravel() for each in np.meshgrid(step, step))
    near = np.hypot(s, length) <= window
    place, moved = on_ring(angle + np.arcsin(s[near] / radius), length[near], radius, radial, along)
    hoop, out = np.array([-np.sin(angle), 0, np.cos(angle)]), np.array([np.cos(angle), 0, np.sin(angle)])
    frame = np.stack([hoop, [0.0, 1.0, 0.0], -out], axis=1)
    x, y, _ = ((place - radius * out) @ frame).T
    columns = np.stack([np.ones(len(x)), x, y], axis=1)
    fit = np.linalg.lstsq(columns, moved @ frame, rcond=None)[0]
    field = FIELDS["affine_field"](
        radius * out, frame, displacement=fit[0], gradient=fit[1:].T[None], shape=[1 / radius, 0.0, 0.0]
    )
    strain = compute_strain(field, structure="tunnel", axis=[0, 1, 0], measure="small")
    return {name: strain.values[name][0] / UE for name in ("strain_u", "strain_v")}


def kirsch(ratio):
    """Displacements of the wall of the hole, outwards and along t."""
    v = VALUES["kirsch"]
    scale = -v["vertical_stress"] * v["radius"] / (4 * v["shear_modulus"])
    one = 3 - 4 * v["poisson"]
    return (
        lambda t: scale * ((1 + ratio) - (1 - ratio) * one * np.cos(2 * t)),
        lambda t: scale * (1 - ratio) * (3 - 4 * v["poisson"]) * np.sin(2 * t),
    )


@pytest.mark.parametrize("k", range(3))
@pytest.mark.parametrize("window", [0.2, 0.4])
def test_hoop_strain_of_an_excavation(k, window):
    """The springline moves least and strains most: u_r / a alone would be wrong by a factor of five there."""
    v = VALUES["kirsch"]
    radial, along = kirsch(v["ratio"])
    t = np.radians(v["degrees"][k])
    assert radial(t) / MM == pytest.approx(v["radial_mm"][k], rel=1e-10)
    assert along(t) / MM == pytest.approx(v["along_mm"][k], abs=1e-10)
    found = gauge_on_ring(t, window, v["radius"], radial, along)
    # the small measure is formed after the rotation: it shows the stretch, which is second-order larger
    turn = ((radial(t + 1e-6) - radial(t - 1e-6)) / 2e-6 - along(t)) / v["radius"]
    bias = abs(v["hoop_ue"][k]) * (window / v["radius"]) ** 2
    assert found["strain_u"] == pytest.approx(v["hoop_ue"][k] + turn**2 / 2 / UE, abs=v["tolerance_ue"] + bias)
    assert found["strain_v"] == pytest.approx(0.0, abs=v["tolerance_ue"])


def test_hoop_strain_of_an_excavation_under_even_stress():
    v = VALUES["kirsch"]
    found = gauge_on_ring(0.3, 0.3, v["radius"], *kirsch(1.0))
    assert found["strain_u"] == pytest.approx(v["hydrostatic_hoop_ue"], abs=v["tolerance_ue"])


@pytest.mark.parametrize("row", VALUES["lame"], ids=lambda row: f"{row['inner']} m, plane {row['plane']}")
def test_hoop_strain_of_a_thick_cylinder(row):
    a, b, nu = row["inner"], row["outer"], row["poisson"]
    A = (row["inner_pressure"] * a**2 - row["outer_pressure"] * b**2) / (b**2 - a**2)
    B = (row["inner_pressure"] - row["outer_pressure"]) * a**2 * b**2 / (b**2 - a**2)
    strained = (1 + nu) * ((1 - 2 * nu) * A * a + B / a), (1 - nu) * A * a + (1 + nu) * B / a
    u = strained[row["plane"] == "stress"] / row["young"]
    assert u / MM == pytest.approx(row["inner_mm"], abs=5e-8)
    found = gauge_on_ring(1.0, a / 10, a, lambda t: u + 0 * t, np.zeros_like)
    assert found["strain_u"] == pytest.approx(row["hoop_ue"], abs=1e-3)


def test_uniform_convergence_has_no_bias_from_curvature():
    v = VALUES["uniform_convergence"]
    for window in v["windows"]:
        found = gauge_on_ring(0.7, window, v["radius"], lambda t: -v["inwards_mm"] * MM + 0 * t, np.zeros_like)
        assert found["strain_u"] == pytest.approx(v["hoop_ue"], abs=v["tolerance_ue"])
        assert found["strain_v"] == pytest.approx(v["axial_ue"], abs=v["tolerance_ue"])


def test_the_bias_of_a_tangent_plane_falls_with_the_square_of_the_window():
    v = VALUES["tangent_plane"]
    u0, R = v["u0"], v["radius"]
    found = [
        gauge_on_ring(0.0, w, R, lambda t: u0 * np.cos(2 * t), lambda t: -u0 / 2 * np.sin(2 * t))["strain_u"]
        for w in v["window"]
    ]
    np.testing.assert_allclose(found, v["bias_ue"], rtol=0.02)
    np.testing.assert_allclose(np.divide(found[1:], found[:-1]), 4.0, rtol=0.02)


def bent(curvature, thickness):
    """Strain of the scanned face of a flat wall whose normal displacement has a second derivative along a1."""
    field = FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), hessian=[curvature, 0, 0])
    values = compute_strain(field, thickness=thickness, measure="small").values
    return values["bend_1"][0] / UE, values["bend_2"][0] / UE


def test_face_strain_of_a_pinched_ring():
    """Opposite signs under the load and at the sides; at the load the ring gets flatter, so its inside is stretched."""
    v = VALUES["pinched_ring"]
    W, R, EI = v["load"], v["radius"], v["young"] * v["thickness"] ** 3 / 12
    # normal displacement w towards the inside: w'' + w / R^2 = M / EI; both ends of the arc are symmetric, w' = 0
    for moment, expected, name in (
        (W * R / np.pi, v["face_under_load_ue"], 0),
        (-(0.5 - 1 / np.pi) * W * R, -v["face_at_sides_ue"], 1),
    ):
        field = FIELDS["affine_field"](
            [[R, 0, 0]],
            np.array([[0.0, 0, -1], [0, 1, 0], [1, 0, 0]]),
            hessian=[-moment / EI, 0, 0],
            shape=[1 / R, 0, 0],
        )
        values = compute_strain(
            field, structure="tunnel", axis=[0, 1, 0], thickness=v["thickness"], measure="small"
        ).values
        assert values[f"bend_{name + 1}"][0] / UE == pytest.approx(expected, rel=1e-4)


CURVATURES = {
    "cantilever": lambda q, L: q * L**2 / 2,
    "cantilever_triangular": lambda q, L: q * L**2 / 6,
    "propped": lambda q, L: q * L**2 / 8,
    "propped_triangular": lambda q, L: q * L**2 / 15,
}


@pytest.mark.parametrize("row", VALUES["base_of_wall"], ids=lambda row: row["case"])
def test_face_strain_at_the_base_of_a_wall(row):
    moment = CURVATURES[row["case"]](row["load"], row["height"])
    # w grows towards the free side, so the face there is compressed where w'' > 0
    found = bent(moment / row["stiffness"], row["thickness"])[1]
    assert found == pytest.approx(-row["face_ue"], rel=1e-9)


def wall_result(length, height, displacement):
    wall = Wall(
        np.zeros(3), np.array([0.0, -1, 0]), np.array([1.0, 0, 0]), np.array([0.0, 0, 1]), length, height, 0.05, 0.0
    )
    places = GRID(length, height, 0.1)
    return measure_wall(
        wall, wall.places(*places.T), displacement(*places.T), np.full(len(places), 1e-6), gauge_length=0.4,
        gauge_spacing=0.1, bands=0.1,
    )  # fmt: skip


def test_belly_of_a_propped_wall_under_earth_pressure():
    v = VALUES["propped_triangular"]
    L, load = v["height"], 40e3 / 1.6e8
    # from the prop, z = L - x: w = q0 (L^4 z - 2 L^2 z^3 + z^5) / 120 L EI
    result = wall_result(
        3.0, L, lambda x, y: load * (L**4 * (L - y) - 2 * L**2 * (L - y) ** 3 + (L - y) ** 5) / (120 * L)
    )
    bands = result.of_kind("band")
    y, w = np.array([(b.bottom + b.top) / 2 for b in bands]), np.array([b.values["displacement"] for b in bands])
    near, fine = np.polynomial.Polynomial.fit(y, w, 5), np.linspace(2, 5, 30_001)
    assert near(fine).max() / MM == pytest.approx(v["largest_mm"], rel=1e-3)
    assert fine[near(fine).argmax()] == pytest.approx(v["at"], abs=5e-3)


def test_a_pure_tilt_distorts_nothing():
    result = wall_result(5.0, 4.0, lambda x, y: VALUES["pure_tilt"]["tilt"] * y)
    assert result.whole.values["lean_change"] == pytest.approx(VALUES["pure_tilt"]["tilt"], rel=1e-9)
    assert result.bulge is None or abs(result.bulge.height) < 1e-9


def test_curvature_face_strain_and_slope_of_a_sinusoidal_bulge():
    v = VALUES["sine_bulge"]
    k, w0 = np.pi / v["side"], v["amplitude"]
    field = FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), hessian=[-w0 * k**2, 0.0, -w0 * k**2])
    values = compute_strain(field, thickness=v["thickness"], measure="small").values
    for name in ("1", "2"):
        assert values[f"curv_{name}"][0] == pytest.approx(v["curvature"], rel=1e-5)
        assert values[f"bend_{name}"][0] / UE == pytest.approx(v["face_ue"], rel=1e-5)
    gradient = np.zeros((1, 3, 2))
    gradient[0, 2, 0] = w0 * k
    edge = FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), gradient=gradient)
    assert compute_strain(edge).values["tilt"][0] / MM == pytest.approx(v["slope_mrad"], rel=1e-4)
    found = compute_strain(edge, measure="green_lagrange").values
    assert found["strain_1"][0] / UE == pytest.approx(v["edge_stretch_ue"], rel=1e-5)
    # the linear measure of the gradient itself has none of it
    F = np.eye(3)
    F[2, 0] = w0 * k
    assert small(F)[0, 0] == 0.0
    assert green_lagrange(F)[0, 0] / UE == pytest.approx(v["edge_stretch_ue"], rel=1e-5)


def test_rotations_that_fake_a_limit_of_damage():
    v = VALUES["false_limits"]
    for strain, degrees in zip(v["ue"], v["degrees"], strict=True):
        R = rotation_matrix(np.array([0.0, 0.0, np.radians(degrees)]))
        assert -small(R)[0, 0] / UE == pytest.approx(strain, rel=2e-3)
        assert np.abs(biot(R)).max() < 1e-15


def test_one_percent_is_a_relative_error_of_stretch_and_an_absolute_one_of_rotation():
    v = VALUES["rule_of_one_percent"]
    for stretch, error in zip(v["stretch"], v["relative_error"], strict=True):
        F = np.diag([1 + stretch, 1.0])
        assert green_lagrange(F)[0, 0] / small(F)[0, 0] - 1 == pytest.approx(error, rel=1e-9)
    for turn, contraction in zip(v["rotation"], v["contraction_ue"], strict=True):
        assert -small(rotation_matrix(np.array([0.0, 0.0, turn])))[0, 0] / UE == pytest.approx(contraction, rel=1e-3)


@pytest.mark.parametrize("row", VALUES["damage"], ids=lambda row: row["mark"])
def test_classes_of_damage(row):
    assert tensile_class(np.array(row["ue"]) * UE).tolist() == row["class"]


def test_lateral_strain_with_angular_distortion_is_a_circle_of_mohr():
    v = VALUES["distortion"]
    T = tensor_2d(np.array([v["lateral_ue"] * UE, 0.0, v["distortion"] / 2]))
    larger = principal(T)[0]
    assert larger / UE == pytest.approx(v["principal_ue"], abs=5e-4)
    assert tensile_class(larger) == v["class"]


def test_even_strain_from_scale_temperature_and_projection():
    v = VALUES["budget"]
    assert scale_line(v["scale_ppm"], 1.0).value / UE == pytest.approx(v["scale_ue"])
    assert temperature_line(v["kelvin"], 0.0, v["expansion"], 0.0).value / UE == pytest.approx(v["temperature_ue"])
    false = projection_line(v["map_factor"], 1.0, same_system=False).value / UE
    assert false == pytest.approx(v["projection_ue"], abs=v["projection_tolerance_ue"])
    assert projection_line(v["map_factor"], v["map_factor"], same_system=True).value == 0.0


def test_a_step_passes_for_strain_in_an_affine_fit_unless_the_joint_is_cut():
    """What the cut at a joint is for: the strain that a gauge across it would report, and none on either side."""
    v = VALUES["step"]
    step = np.arange(-v["reach"] + 0.001, v["reach"], 0.002)
    x, y = (each.ravel() for each in np.meshgrid(step, step))
    u = v["step"] / 2 * np.sign(x)
    line = np.polyfit(step, v["step"] / 2 * np.sign(step), 1)[0]
    assert line / UE == pytest.approx(v["line_ue"], abs=v["tolerance_ue"])
    disc = np.hypot(x, y) <= v["reach"]
    for part, expected in ((disc, v["disc_ue"]), (disc & (x > 0), 0.0)):
        columns = np.stack([np.ones(part.sum()), x[part], y[part]], axis=1)
        fit = np.linalg.lstsq(columns, u[part], rcond=None)[0]
        gradient = np.zeros((1, 3, 2))
        gradient[0, 0] = fit[1:]
        found = compute_strain(FIELDS["affine_field"]([[0, 0, 0]], np.eye(3), gradient=gradient), measure="small")
        assert found.values["strain_1"][0] / UE == pytest.approx(expected, abs=v["tolerance_ue"])


def test_hoop_strain_round_the_ring_closes_to_the_change_of_the_perimeter():
    """Growth by 2 mm and an ovalisation on top, which changes no perimeter to first order."""
    v = VALUES["closure"]
    R, count = v["radius"], 24
    angles = np.arange(count) * 2 * np.pi / count
    radial, along = (lambda t: v["growth_mm"] * MM + 1e-4 * np.cos(2 * t)), (lambda t: -5e-5 * np.sin(2 * t))
    hoop = [gauge_on_ring(t, 0.2, R, radial, along)["strain_u"] * UE for t in angles]
    assert np.mean(hoop) * 2 * np.pi * R / MM == pytest.approx(v["perimeter_mm"], rel=1e-4)
