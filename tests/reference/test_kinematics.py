# SPDX-License-Identifier: MIT
"""Strain and rotation measures against values from outside the package (`kinematics_values.toml`)."""

from __future__ import annotations

import tomllib
from pathlib import Path

import numpy as np
import pytest
import scipy.linalg

from scanstrain.linalg import (
    apply_to_eigenvalues,
    axial,
    components_2d,
    eigh,
    polar,
    rotation_matrix,
    rotation_vector,
    sandwich,
    skew,
    tensor_2d,
)
from scanstrain.strain.measures import MEASURES, almansi, biot, green_lagrange, hencky, small
from scanstrain.strain.surface import map_surface, principal, surface_strain

VALUES = tomllib.loads((Path(__file__).parent / "kinematics_values.toml").read_text())
UE = 1e-6


@pytest.fixture
def rng():
    return np.random.default_rng(20240611)


def upper(T):
    return T[..., [0, 0, 0, 1, 1, 2], [0, 1, 2, 1, 2, 2]]


@pytest.mark.parametrize("name", list(MEASURES))
def test_generic_case_in_space(name):
    row = VALUES["generic"]
    F = np.eye(3) + np.array(row["H"])
    E = MEASURES[name](F)
    np.testing.assert_allclose(upper(E), row["tensor"][name], rtol=0, atol=row["tolerance"])
    if name in row["principal"]:
        np.testing.assert_allclose(eigh(E)[0], row["principal"][name], rtol=0, atol=row["tolerance"])


def test_generic_rotation():
    row = VALUES["generic"]
    F = np.eye(3) + np.array(row["H"])
    R, U = polar(F)
    w = rotation_vector(R)
    np.testing.assert_allclose(w, row["rotation_vector"], rtol=0, atol=row["tolerance"])
    np.testing.assert_allclose(np.degrees(np.linalg.norm(w)), row["rotation_degrees"], rtol=0, atol=5e-10 * 180)
    np.testing.assert_allclose(axial(skew(F)), row["small_rotation"], rtol=0, atol=1e-12)
    np.testing.assert_allclose(eigh(U)[0], row["principal_stretches"], rtol=0, atol=row["tolerance"])
    np.testing.assert_allclose(np.linalg.det(F), row["jacobian"], rtol=0, atol=row["tolerance"])
    np.testing.assert_allclose(R @ U, F, rtol=0, atol=1e-14)
    np.testing.assert_allclose(sandwich(R, U) @ R, F, rtol=0, atol=1e-14)


def test_polar_and_logarithm_agree_with_a_general_library(rng):
    F = np.eye(3) + 0.3 * rng.normal(size=(20, 3, 3))
    F = F[np.linalg.det(F) > 0.1]
    for one, R, U, L in zip(F, *polar(F), hencky(F), strict=True):
        R_ref, U_ref = scipy.linalg.polar(one)
        np.testing.assert_allclose(R, R_ref, rtol=0, atol=1e-12)
        np.testing.assert_allclose(U, U_ref, rtol=0, atol=1e-12)
        np.testing.assert_allclose(L, scipy.linalg.logm(U_ref), rtol=0, atol=1e-11)


@pytest.mark.parametrize("row", VALUES["uniaxial"], ids=lambda row: str(row["stretch"]))
@pytest.mark.parametrize("name", list(MEASURES))
@pytest.mark.parametrize("d", [2, 3])
def test_uniaxial_stretch(row, name, d):
    F = np.eye(d)
    F[0, 0] = row["stretch"]
    E = MEASURES[name](F[None])[0]
    expected = np.zeros((d, d))
    expected[0, 0] = row[name]
    np.testing.assert_allclose(E, expected, rtol=0, atol=row["tolerance"])


@pytest.mark.parametrize("row", VALUES["shear"], ids=lambda row: str(row["g"]))
def test_simple_shear(row):
    g, tolerance = row["g"], row["tolerance"]
    F = np.array([[1.0, g], [0.0, 1.0]])
    R, U = polar(F)
    stretches, vectors = eigh(U)
    np.testing.assert_allclose(stretches[::-1], row["stretches"], rtol=0, atol=5e-11)
    np.testing.assert_allclose(np.degrees(np.arctan2(R[1, 0], R[0, 0])), row["rotation"], rtol=0, atol=tolerance)
    np.testing.assert_allclose(np.degrees(skew(F)[1, 0]), row["small_rotation"], rtol=0, atol=tolerance)
    major = np.degrees(np.arctan2(vectors[1, 1], vectors[0, 1])) % 180
    np.testing.assert_allclose(major, row["axis"], rtol=0, atol=tolerance)
    after = eigh(sandwich(R, U))[1][:, 1]
    np.testing.assert_allclose(np.degrees(np.arctan2(after[1], after[0])) % 180, row["axis_current"], atol=tolerance)
    np.testing.assert_allclose(U, np.array([[2, g], [g, 2 + g * g]]) / np.sqrt(4 + g * g), rtol=1e-14)
    np.testing.assert_allclose(green_lagrange(F), [[0, g / 2], [g / 2, g * g / 2]], rtol=0, atol=1e-15)
    np.testing.assert_allclose(almansi(F), [[0, g / 2], [g / 2, -g * g / 2]], rtol=0, atol=1e-15)
    np.testing.assert_allclose(eigh(hencky(F))[0], np.arcsinh(g / 2) * np.array([-1, 1]), rtol=0, atol=1e-14)
    if "hencky" in row:
        np.testing.assert_allclose(hencky(F), row["hencky"], rtol=0, atol=5e-9)


def test_pure_rotation_is_false_strain_only_for_the_small_measure():
    row = VALUES["false_strain"]
    w = np.zeros((len(row["degrees"]), 3))
    w[:, 2] = np.radians(row["degrees"])
    R = rotation_matrix(w)
    for component in (0, 1):
        np.testing.assert_allclose(small(R)[:, component, component] / UE, row["ue"], rtol=0, atol=row["tolerance_ue"])
    for measure in (green_lagrange, almansi, hencky, biot):
        np.testing.assert_allclose(measure(R), 0.0, atol=1e-15)


def test_pure_rotation_about_a_slanted_axis():
    row = VALUES["false_strain_space"]
    axis = np.array(row["axis"]) / np.linalg.norm(row["axis"])
    R = rotation_matrix(np.radians(row["degrees"]) * axis)
    np.testing.assert_allclose(upper(small(R)) / UE, row["ue"], rtol=0, atol=row["tolerance_ue"])
    np.testing.assert_allclose(axial(skew(R)), row["small_rotation"], rtol=0, atol=row["small_rotation_tolerance"])


def test_stretch_under_a_rotation():
    row = VALUES["rotated_stretch"]
    stretch = np.diag([1 + row["stretch_ue"][0] * UE, 1 + row["stretch_ue"][1] * UE, 1.0])
    F = rotation_matrix(np.array([0, 0, np.radians(row["degrees"])])) @ stretch
    for name, measure in (("small_ue", small), ("biot_ue", biot), ("green_lagrange_ue", green_lagrange)):
        np.testing.assert_allclose(
            np.diagonal(measure(F))[:2] / UE, row[name], rtol=0, atol=row["tolerance_ue"], err_msg=name
        )
    np.testing.assert_allclose(small(F)[0, 1] / UE, row["small_shear_ue"], rtol=0, atol=row["tolerance_ue"])


@pytest.mark.parametrize("degrees", VALUES["false_strain"]["degrees"])
@pytest.mark.parametrize("measure", list(MEASURES))
def test_the_surface_shows_no_strain_in_a_pure_rotation(degrees, measure):
    axis = np.array([[1.0, 2.0, 2.0], [0.0, 0.0, 3.0], [3.0, 0.0, 0.0]]) / 3.0
    gradient = (rotation_matrix(np.radians(degrees) * axis) - np.eye(3))[:, :, :2]
    np.testing.assert_allclose(surface_strain(map_surface(gradient), measure), 0.0, atol=2e-15)


@pytest.mark.parametrize("row", VALUES["rosette"], ids=lambda row: row["id"])
def test_rosette(row):
    angle = np.radians(row["degrees"])
    gauge = np.stack([np.cos(angle) ** 2, np.sin(angle) ** 2, 2 * np.sin(angle) * np.cos(angle)], axis=1)
    components = np.linalg.solve(gauge, row["readings_ue"])
    np.testing.assert_allclose(
        components * [1, 1, 2], row["ex_ey_gxy_ue"], rtol=0, atol=max(row["tolerance_ue"], 0.005)
    )
    T = tensor_2d(components)
    np.testing.assert_allclose(principal(T), row["principal_ue"], rtol=0, atol=row["tolerance_ue"])
    # and back: the tensor sampled along the gauges gives the readings
    Q = np.stack([np.stack([np.cos(angle), np.sin(angle)], -1), np.stack([-np.sin(angle), np.cos(angle)], -1)], -2)
    np.testing.assert_allclose(sandwich(Q, T)[:, 0, 0], row["readings_ue"], rtol=0, atol=1e-9)


@pytest.mark.parametrize("row", VALUES["mohr"], ids=lambda row: row["id"])
def test_mohr_circle(row):
    ex, ey, gxy = row["ex_ey_gxy_ue"]
    T = tensor_2d(np.array([ex, ey, gxy / 2]))
    np.testing.assert_allclose(principal(T), row["principal_ue"], rtol=0, atol=6e-4)
    if "axis" in row:
        major = eigh(T)[1][:, 1]
        np.testing.assert_allclose(np.degrees(np.arctan2(major[1], major[0])) % 180, row["axis"], rtol=0, atol=6e-4)
    if "at_degrees" in row:
        a = np.radians(row["at_degrees"])
        Q = np.array([[np.cos(a), np.sin(a)], [-np.sin(a), np.cos(a)]])
        turned = components_2d(sandwich(Q, T))
        np.testing.assert_allclose(np.abs(turned * [1, 1, 2]), row["at_ue"], rtol=0, atol=6e-4)


def test_dilation_is_the_exact_change_of_area():
    row = VALUES["dilation"]
    gradient = np.zeros((1, 3, 2))
    gradient[0, :2] = np.array(row["F"]) - np.eye(2)
    mapped = map_surface(gradient)
    np.testing.assert_allclose(mapped.area - 1, row["exact"], rtol=0, atol=row["tolerance"])
    np.testing.assert_allclose(np.trace(gradient[0, :2]), row["first_order"], rtol=0, atol=row["tolerance"])


def test_functions_of_a_matrix_agree_with_a_general_library(rng):
    S = rng.normal(size=(10, 2, 2))
    S = S @ np.swapaxes(S, 1, 2) + np.eye(2)
    for one, root in zip(S, apply_to_eigenvalues(np.sqrt, S), strict=True):
        np.testing.assert_allclose(root, scipy.linalg.sqrtm(one), rtol=0, atol=1e-12)
