# SPDX-License-Identifier: MIT
"""Exact truth of scenes against closed forms: ovalisation, walls, bulges, homogeneous strain, rigid motion."""

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.synthetic import (
    Bulge,
    Cantilever,
    Linear,
    Lining,
    Ovalisation,
    Rigid,
    Scene,
    Wall,
    truth,
    truth_at,
)

RING = Scene(Lining(3.0, 2.0), Ovalisation(0.015))
SPRINGLINE, SHOULDER, CROWN = (np.array([[t * 3.0, 1.0]]) for t in (0.0, np.pi / 4, np.pi / 2))


def plane(gradient, centre=(0.0, 0.0)):
    return Scene(Wall(4.0, 4.0), Linear(gradient, centre))


# Inextensional ring mode u_r = u0 cos 2t, u_t = -(u0/2) sin 2t, R = 3 m, u0 = 15 mm (Rayleigh 1894); values computed
# on the exact deformed curve.


def chord(a, b):
    before = [RING.points(q, deformed=False)[0] for q in (a, b)]
    after = [RING.points(q, deformed=True)[0] for q in (a, b)]
    return 1e3 * (np.linalg.norm(after[1] - after[0]) - np.linalg.norm(before[1] - before[0]))


def test_ovalisation_chords():
    left, invert = np.array([[np.pi * 3.0, 1.0]]), np.array([[-np.pi / 2 * 3.0, 1.0]])
    assert chord(SPRINGLINE, left) == pytest.approx(30.0, abs=1e-3)
    assert chord(CROWN, invert) == pytest.approx(-30.0, abs=1e-3)
    assert chord(SPRINGLINE, CROWN) == pytest.approx(0.053, abs=5e-4)
    assert chord(SHOULDER, np.array([[0.75 * np.pi * 3.0, 1.0]])) == pytest.approx(10.607, abs=1e-3)


def test_ovalisation_does_not_strain_the_middle_line():
    q = np.concatenate([SPRINGLINE, SHOULDER, CROWN])
    np.testing.assert_allclose(truth_at(RING, q)["strain_u"], 0.0, atol=1e-16)
    green = truth_at(RING, q, measure="green_lagrange")["strain_u"]
    np.testing.assert_allclose(green * 1e6, [0.0, 28.125, 0.0], atol=1e-3)
    # the normal motion alone would be taken for u_r / R
    np.testing.assert_allclose(truth_at(RING, q)["disp_n"] / -3.0 * 1e6, [5000.0, 0.0, -5000.0], atol=1e-6)


def test_ovalisation_bends_and_turns():
    spring, shoulder, crown = (truth_at(RING, q) for q in (SPRINGLINE, SHOULDER, CROWN))
    # sharper at the springline: seen from inside less convex
    assert spring["curvature"][0, 0, 0] == pytest.approx(-0.005, abs=1e-12)
    assert crown["curvature"][0, 0, 0] == pytest.approx(0.005, abs=1e-12)
    assert shoulder["tilt"][0] == pytest.approx(np.arctan(7.5e-3), abs=1e-12)
    assert np.abs(shoulder["spin"][0]) < 1e-15
    # turned about the axis, +x here; the ring runs clockwise about it
    np.testing.assert_allclose(
        [shoulder["rot_x"][0], shoulder["rot_y"][0], shoulder["rot_z"][0]], [-7.5e-3, 0, 0], atol=2e-7
    )


def test_curvature_change_is_that_of_the_exact_deformed_curve():
    """Curvature of the moved circle by finite differences of its points, elsewhere than at the symmetric places."""
    t, h = 0.4, 1e-3
    q = np.array([[3.0 * (t + k * h), 1.0] for k in (-1, 0, 1)])
    a, b, c = RING.points(q, deformed=True)
    area = np.linalg.norm(np.cross(b - a, c - a)) / 2
    sides = np.linalg.norm(b - a) * np.linalg.norm(c - b) * np.linalg.norm(c - a)
    # Menger curvature of three points; error of order h^2
    change = -(4 * area / sides - 1 / 3.0)
    assert truth_at(RING, q[1:2])["curvature"][0, 0, 0] == pytest.approx(change, abs=2e-8)
    assert change == pytest.approx(-3 * 0.015 * np.cos(2 * t) / 9, abs=6e-5)


def test_a_ring_that_grows_strains_and_flattens():
    """u_r = 6 mm everywhere: hoop strain u/R, curvature 1/(R + u)."""
    grown = Scene(Lining(3.0, 2.0), Linear(offset=(0.0, 0.0, -0.006)))
    exact = truth_at(grown, SHOULDER)
    assert exact["strain_u"][0] == pytest.approx(0.002, rel=1e-12)
    assert exact["dilation"][0] == pytest.approx(0.002, rel=1e-9)
    assert exact["curvature"][0, 0, 0] == pytest.approx(1 / 3 - 1 / 3.006, rel=1e-9)
    assert exact["tilt"][0] == 0.0


# Cantilever wall under even load (handbook beam table): L = 6 m, EI = 1.6e8 N m2/m, q = 10 kPa, thickness 0.4 m.


def test_cantilever():
    wall = Scene(Wall(2.0, 6.0), Cantilever(1e4 * 6**4 / (8 * 1.6e8), 6.0))
    top, foot = (truth_at(wall, np.array([[1.0, z]])) for z in (6.0, 0.0))
    assert top["disp_n"][0] * 1e3 == pytest.approx(10.125, rel=1e-12)
    assert np.tan(top["tilt"][0]) * 1e3 == pytest.approx(2.25, rel=1e-12)
    assert foot["curvature"][0, 1, 1] * 0.2 * 1e6 == pytest.approx(-225.0, rel=1e-9)
    assert truth_at(wall, np.array([[1.0, 3.0]]))["disp_n"][0] / 0.010125 == pytest.approx(17 / 48)


# Sinusoidal bulge, a = 4 m, w0 = 20 mm, thickness 0.2 m (plate theory).


def test_sinusoidal_bulge():
    wall = Scene(Wall(4.0, 4.0), Bulge(0.02, (0.0, 0.0), (4.0, 4.0)))
    centre, side = truth_at(wall, np.array([[2.0, 2.0]])), np.array([[0.0, 2.0]])
    assert centre["disp_n"][0] == pytest.approx(0.02)
    np.testing.assert_allclose(centre["curvature"][0], 0.0123370 * np.eye(2), atol=5e-8)
    assert centre["curv_1"][0] * 0.1 * 1e6 == pytest.approx(1233.70, abs=0.005)
    assert np.tan(truth_at(wall, side)["tilt"][0]) * 1e3 == pytest.approx(15.708, abs=5e-4)
    assert truth_at(wall, side)["strain_1"][0] == 0.0
    assert truth_at(wall, side, measure="green_lagrange")["strain_1"][0] * 1e6 == pytest.approx(123.370, abs=1e-3)
    line = np.stack([np.linspace(0, 4, 4001), np.full(4001, 2.0)], axis=1)
    stretch = truth_at(wall, line, measure="green_lagrange")["strain_u"]
    assert np.trapezoid(stretch, line[:, 0]) / 4 * 1e6 == pytest.approx(61.685, abs=1e-3)


# Homogeneous strain (closed forms).


@pytest.mark.parametrize(
    ("measure", "value"),
    [
        ("small", 0.1),
        ("biot", 0.1),
        ("green_lagrange", 0.105),
        ("almansi", 0.0867768595),
        ("hencky", 0.0953101798),
    ],
)
def test_uniaxial_stretch(measure, value):
    exact = truth_at(plane(((0.1, 0), (0, 0), (0, 0))), np.array([[1.0, 2.0]]), measure=measure)
    assert exact["strain_u"][0] == pytest.approx(value, abs=1e-10)
    assert exact["dilation"][0] == pytest.approx(0.1)
    # the wall runs along x: strain_u is strain_xx
    assert exact["strain_xx"][0] == pytest.approx(value, abs=1e-10)
    assert exact["strain_zz"][0] == pytest.approx(0.0, abs=1e-15)


@pytest.mark.parametrize(("g", "degrees"), [(0.002, -0.0572957604), (0.2, -5.7105931375), (1.0, -26.5650511771)])
def test_simple_shear(g, degrees):
    exact = truth_at(plane(((0, g), (0, 0), (0, 0))), np.array([[1.0, 2.0]]), measure="hencky")
    assert np.degrees(exact["spin"][0]) == pytest.approx(degrees, abs=1e-9)
    assert exact["tilt"][0] == pytest.approx(0.0, abs=1e-15)
    assert exact["strain_1"][0] == pytest.approx(np.arcsinh(g / 2), rel=1e-9)
    if g == 1.0:
        np.testing.assert_allclose(exact["strain"][0], [[-0.21520447, 0.43040894], [0.43040894, 0.21520447]], atol=5e-9)


@pytest.mark.parametrize("surface", [Wall(4.0, 4.0, bearing=0.3), Lining(3.0, 4.0, bearing=0.3)])
def test_rigid_motion_strains_nothing_and_turns_as_told(surface):
    w = np.array([0.3, -0.2, 0.4])
    scene = Scene(surface, Rigid(tuple(w), (10.0, -5.0, 2.0), (1.0, 2.0, 3.0)))
    q = np.random.default_rng(1).uniform(0.5, 3.5, (50, 2))
    for measure in ("green_lagrange", "almansi", "hencky", "biot"):
        np.testing.assert_allclose(truth_at(scene, q, measure=measure)["strain"], 0.0, atol=5e-15)
    exact = truth_at(scene, q)
    turned = np.stack([exact[f"rot_{axis}"] for axis in "xyz"], axis=1)
    np.testing.assert_allclose(turned, np.broadcast_to(w, turned.shape), atol=1e-13)
    np.testing.assert_allclose(exact["curvature"], 0.0, atol=1e-14)
    angle = np.linalg.norm(w)
    K = np.array([[0, -w[2], w[1]], [w[2], 0, -w[0]], [-w[1], w[0], 0]]) / angle
    R = np.eye(3) + np.sin(angle) * K + (1 - np.cos(angle)) * K @ K
    tilt = np.arccos(np.einsum("ni,ij,nj->n", exact["normal"], R, exact["normal"]))
    np.testing.assert_allclose(exact["tilt"], tilt, atol=1e-12)
    # first order: spin is the rotation vector along the normal
    small = truth_at(Scene(surface, Rigid(tuple(w * 1e-3))), q)
    np.testing.assert_allclose(small["spin"], small["normal"] @ w * 1e-3, atol=1e-7)


def test_false_small_strain_of_a_pure_rotation():
    """2 degrees about the normal: cos t - 1 = -609.173 microstrain in the small measure, none in the others."""
    scene = Scene(Wall(4.0, 4.0), Rigid((0.0, -float(np.deg2rad(2.0)), 0.0)))
    exact = truth_at(scene, np.array([[1.0, 1.0]]))
    assert exact["strain_1"][0] * 1e6 == pytest.approx(-609.173, abs=1e-3)
    assert np.degrees(exact["spin"][0]) == pytest.approx(2.0)


def test_points_are_projected_and_strangers_left_out():
    scene = Scene(Lining(3.0, 2.0, start=(5.0, 6.0, 7.0)), Ovalisation(0.015))
    q = np.array([[1.0, 0.5], [2.0, 1.5]])
    points = scene.points(q, deformed=False)
    normal = scene.surface.frames(q)[:, :, 2]
    near, far, past = (truth(scene, points + offset) for offset in (0.005 * normal, 0.1 * normal, [[3.0, 0, 0]]))
    np.testing.assert_allclose(near["disp_n"], truth_at(scene, q)["disp_n"], rtol=1e-12)
    assert near["on_structure"].all()
    for other in (far, past):
        assert not other["on_structure"].any()
        assert not other["disp_n"].any()


def test_an_unknown_measure_is_refused():
    with pytest.raises(OptionError, match="did you mean 'hencky'"):
        truth_at(RING, SHOULDER, measure="henky")
