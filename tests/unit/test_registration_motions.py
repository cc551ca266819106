# SPDX-License-Identifier: MIT
"""Rotation vectors, symmetric steps and their inverse, against scipy and closed forms."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.registration.fit import motion, step_of
from scanstrain.registration.match import Metric
from scanstrain.registration.rigid import about, inverse, is_rigid, rigid, rotation


@pytest.mark.parametrize("angle", [0.0, 1e-12, 1e-4, 0.5, 3.0])
def test_rotation_agrees_with_scipy(angle):
    vector = angle * np.array([0.36, -0.48, 0.8])
    np.testing.assert_allclose(rotation(vector), Rotation.from_rotvec(vector).as_matrix(), atol=1e-15)


def test_a_step_turns_both_clouds_by_half():
    """Rigid, turns about the pivot by the whole vector, and moves the pivot by the half-turned shift."""
    pivot, vector, shift = np.array([3.0, -1, 2]), np.array([0.2, 0.1, -0.3]), np.array([0.5, 0.4, 0.1])
    T = about(pivot, vector, shift)
    np.testing.assert_allclose(T[:3, :3], Rotation.from_rotvec(vector).as_matrix(), atol=1e-14)
    moved = T[:3, :3] @ pivot + T[:3, 3]
    np.testing.assert_allclose(moved - pivot, Rotation.from_rotvec(vector / 2).apply(shift), atol=1e-14)


def test_unknowns_of_a_step_come_back():
    metric = Metric(pivot=np.array([3.0, -1, 2]), arm=4.0)
    unknowns = np.array([0.4, -0.2, 0.9, 0.3, 0.2, -0.1])
    np.testing.assert_allclose(motion(step_of(unknowns, metric), metric), unknowns, atol=1e-14)


def test_inverse_and_test_of_rigidity():
    T = rigid(rotation(np.array([0.3, 2.0, -1.0])), np.array([10.0, -3, 5]))
    np.testing.assert_allclose(T @ inverse(T), np.eye(4), atol=1e-14)
    assert is_rigid(T)
    scaled, mirrored, broken = T.copy(), np.diag([1.0, 1, -1, 1]), T.copy()
    scaled[:3, :3] *= 1.0005
    broken[0, 0] = np.nan
    assert not any(is_rigid(each) for each in (scaled, mirrored, broken, np.eye(3)))
