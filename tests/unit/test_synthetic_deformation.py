# SPDX-License-Identifier: MIT
"""Displacement fields: stated derivatives against finite differences, and the limits of windows."""

import numpy as np
import pytest

from scanstrain.synthetic import (
    Bulge,
    Cantilever,
    Dome,
    Linear,
    Lining,
    Ovalisation,
    Rigid,
    Still,
    StrainBump,
    Sum,
    Wall,
    Windowed,
)

WALL = Wall(8.0, 3.5, corner=(2.0, 1.0, 0.5), bearing=0.4)
LINING = Lining(1.9, 8.0, start=(1.0, 2.0, 1.4), bearing=0.6)

FIELDS = {
    "linear": Linear(((1e-3, 2e-3), (-3e-3, 4e-3), (5e-3, -6e-3)), (1.0, 1.0), (0.01, 0.02, 0.03)),
    "rigid": Rigid((0.3, -0.2, 0.4), (1.0, 2.0, -3.0), (0.5, 0.5, 0.5)),
    "ovalisation": Ovalisation(0.005, mode=3, phase=0.3),
    "bulge": Bulge(0.01, (0.1, 0.1), (7.0, 3.2)),
    "dome": Dome(0.006, (1.9, 1.6), 1.5),
    "cantilever": Cantilever(0.009, 3.5),
    "bump": StrainBump(1e-3, 2.0, 0.8),
    "windowed": Windowed(Ovalisation(0.005), (0.2, 0.3), (3.8, 3.1), (1.1, 1.2)),
    "sum": Sum((Dome(0.006, (1.9, 1.6), 1.5), Windowed(Rigid((0.1, 0.2, 0.3)), (0.2, 0.3), (3.8, 3.1), (1, 1)))),
}


@pytest.fixture
def places():
    return np.random.default_rng(4).uniform((0.3, 0.4), (3.6, 3.0), (300, 2))


def vectors(field, surface, q):
    return np.einsum("nij,nj->ni", surface.frames(q), field.jet(surface, q).value)


@pytest.mark.parametrize("surface", [WALL, LINING], ids=["wall", "lining"])
@pytest.mark.parametrize("name", FIELDS)
def test_first_derivatives_are_those_of_the_displacement_vector(name, surface, places):
    field, h = FIELDS[name], 1e-5
    stated = surface.frames(places) @ field.jet(surface, places).first
    for j in (0, 1):
        e = h * np.eye(2)[j]
        numeric = (vectors(field, surface, places + e) - vectors(field, surface, places - e)) / (2 * h)
        # central differences: h^2 f'''/6 is below 1e-9 here, rounding 1e-16 / h = 1e-11
        np.testing.assert_allclose(stated[:, :, j], numeric, atol=2e-9)


@pytest.mark.parametrize("surface", [WALL, LINING], ids=["wall", "lining"])
@pytest.mark.parametrize("name", FIELDS)
def test_second_derivatives_are_those_of_the_first(name, surface, places):
    field, h = FIELDS[name], 1e-5
    second = surface.frames(places) @ field.jet(surface, places).second

    def first(q):
        return surface.frames(q) @ field.jet(surface, q).first

    for k, (i, j) in enumerate(((0, 0), (0, 1), (1, 1))):
        for a, b in {(i, j), (j, i)}:
            e = h * np.eye(2)[a]
            numeric = (first(places + e)[:, :, b] - first(places - e)[:, :, b]) / (2 * h)
            np.testing.assert_allclose(second[:, :, k], numeric, atol=2e-8)


def test_a_window_leaves_the_inside_alone_and_nothing_outside():
    shift = Linear(offset=(1.0, 2.0, 3.0))
    field = Windowed(shift, (1.0, 1.0), (3.0, 3.0), (0.5, 0.5))
    inside = field.jet(WALL, np.array([[2.0, 2.0], [1.5, 2.5]]))
    np.testing.assert_array_equal(inside.value, [[1.0, 2.0, 3.0]] * 2)
    outside = field.jet(WALL, np.array([[1.0, 2.0], [0.2, 2.0], [2.0, 3.2]]))
    assert not outside.value.any()
    assert not outside.first.any()
    assert not outside.second.any()


def test_an_open_side_of_a_window_does_not_fade():
    field = Windowed(Linear(offset=(0.0, 0.0, 1.0)), (-np.inf, 1.0), (np.inf, 3.0), (1.0, 0.5))
    assert field.jet(WALL, np.array([[-50.0, 2.0], [80.0, 2.0]])).value[:, 2].tolist() == [1.0, 1.0]


def test_still_is_still(places):
    jet = Still().jet(LINING, places)
    assert not jet.value.any()
    assert not jet.first.any()
    assert not jet.second.any()


def test_a_strain_bump_has_half_its_peak_at_half_its_width():
    jet = StrainBump(1e-3, 2.0, 0.8).jet(WALL, np.array([[2.0, 0.0], [2.4, 0.0], [1.6, 1.0]]))
    np.testing.assert_allclose(jet.first[:, 0, 0], [1e-3, 5e-4, 5e-4], rtol=1e-12)
