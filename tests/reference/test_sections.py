# SPDX-License-Identifier: MIT
"""Chords of deforming rings against closed forms (`sections_values.toml`)."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain.structures import cut_sections
from scanstrain.structures.axis import curve_through

VALUES = tomllib.loads((Path(__file__).parent / "sections_values.toml").read_text())
OVAL, LOADED = VALUES["ovalising_ring"], VALUES["point_loads"]
CHORDS = {"springline_to_crown": (3.0, 12.0), "shoulder_to_shoulder": (10.5, 1.5)}


def lining(clock, radius, length, radial, along):
    """Material points of a ring, displaced in its plane: `radial` outwards, `along` clockwise, as vectors [m]."""
    right = (radius + radial) * np.sin(clock) + along * np.cos(clock)
    up = (radius + radial) * np.cos(clock) - along * np.sin(clock)
    # looking north (+y), east (+x) is to the right
    return np.stack([right, length, up], axis=1)


def scan(seed, count, *, radial, along, noise, radius):
    rng = np.random.default_rng(seed)
    clock, length = rng.uniform(-np.pi, np.pi, count), rng.uniform(0, 2, count)
    points = lining(clock, radius, length, radial(clock), along(clock))
    out = np.stack([np.sin(clock), 0 * clock, np.cos(clock)], axis=1)
    return points + noise * rng.normal(size=(count, 1)) * out


def changes(radial, along, *, radius, noise, chords=(), thickness=0.8):
    axis = curve_through(np.array([[0.0, 0, 0], [0, 2.0, 0]]), radius)
    still = scan(1, 150_000, radial=np.zeros_like, along=np.zeros_like, noise=noise, radius=radius)
    moved = scan(2, 150_000, radial=radial, along=along, noise=noise, radius=radius)
    return cut_sections(axis, still, moved, spacing=1.0, thickness=thickness, chords=chords)[0]


@pytest.fixture(scope="module")
def oval():
    u0 = OVAL["u0"]
    # t of the source runs from the springline, the clock angle from the crown: cos 2t = -cos 2 clock, and clockwise
    # is against t
    return changes(
        lambda clock: -u0 * np.cos(2 * clock),
        lambda clock: 0.5 * u0 * np.sin(2 * clock),
        radius=OVAL["radius"],
        noise=0.002,
        chords=tuple(CHORDS.values()),
    )


def test_diameters_of_the_ovalising_ring(oval):
    expected, tolerance = OVAL["chords"], OVAL["tolerance_mm"]
    assert 1e3 * oval.values["horizontal_diameter_change"] == pytest.approx(expected["horizontal"], abs=tolerance)
    assert 1e3 * oval.values["vertical_diameter_change"] == pytest.approx(expected["vertical"], abs=tolerance)
    assert 1e3 * oval.values["chord_3_12_change"] == pytest.approx(expected["springline_to_crown"], abs=tolerance)
    assert oval.values["ovality_cur"] == pytest.approx(OVAL["ovality"], rel=0.01)
    assert oval.values["ovality_change"] == pytest.approx(OVAL["ovality"], rel=0.02)


def test_chords_between_marked_points_of_an_inextensible_ring(oval):
    expected, tolerance = OVAL["chords"], OVAL["tolerance_mm"]
    for name, chord in (("springline_to_crown", "chord_3_12"), ("shoulder_to_shoulder", "chord_10.5_1.5")):
        found = 1e3 * oval.values[f"{chord}_change_inextensible"]
        assert found == pytest.approx(expected[name], abs=tolerance)
    # at fixed clock angles the shoulders stay: what moved there is the material, along its own outline
    assert 1e3 * oval.values["chord_10.5_1.5_change"] == pytest.approx(-0.106, abs=tolerance)


def test_ovalisation_is_order_two_and_nothing_else(oval):
    assert oval.values["ovalisation_upright"] == pytest.approx(-OVAL["u0"], abs=1e-4)
    for name in ("mean_radial_change", "shift_up", "shift_right", "ovalisation_diagonal", "wave_3_cos", "wave_3_sin"):
        assert oval.values[name] == pytest.approx(0.0, abs=1e-4), name


def test_diameters_of_a_ring_between_two_loads():
    scale = LOADED["scale"]

    def radial(clock):
        # from the load at the crown: u'' + u = 1/pi - |sin| / 2, symmetric and smooth at the load (M = W R (...))
        t = np.abs(clock)
        t = np.minimum(t, np.pi - t)
        return scale * (1 / np.pi + t * np.cos(t) / 4 - np.pi / 8 * np.cos(t) - np.sin(t) / 4)

    section = changes(radial, np.zeros_like, radius=LOADED["radius"], noise=0.0)
    for name, key in (("vertical_diameter", "loaded_diameter"), ("horizontal_diameter", "other_diameter")):
        expected = 1e3 * scale * LOADED[key]
        assert 1e3 * section.values[f"{name}_change"] == pytest.approx(expected, abs=LOADED["tolerance_mm"]), name
