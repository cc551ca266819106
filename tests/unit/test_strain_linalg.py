# SPDX-License-Identifier: MIT
"""Batched small-matrix algebra against general libraries, with the hard angles."""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain import linalg


@pytest.fixture
def rng():
    return np.random.default_rng(3)


@pytest.mark.parametrize("angle", [0.0, 1e-300, 1e-12, 1e-8, 1e-4, 0.3, 2.0, np.pi - 1e-4, np.pi - 1e-8, np.pi])
def test_rotation_vector_returns_what_made_the_matrix(angle, rng):
    axis = rng.normal(size=(200, 3))
    axis[:3] = np.eye(3)
    axis /= np.linalg.norm(axis, axis=1, keepdims=True)
    R = linalg.rotation_matrix(angle * axis)
    w = linalg.rotation_vector(R)
    np.testing.assert_allclose(np.linalg.norm(w, axis=1), angle, rtol=1e-12, atol=1e-15)
    if angle == np.pi:  # both senses are the same turn
        w = w * np.sign(np.einsum("ij,ij->i", w, axis))[:, None]
    np.testing.assert_allclose(w, angle * axis, rtol=0, atol=1e-14 if angle < 3 else 1e-7)
    np.testing.assert_allclose(R, Rotation.from_rotvec(angle * axis).as_matrix(), rtol=0, atol=1e-15 * 8)


def test_rotation_vector_keeps_leading_dimensions(rng):
    w = rng.uniform(-1.5, 1.5, size=(4, 5, 3))
    np.testing.assert_allclose(linalg.rotation_vector(linalg.rotation_matrix(w)), w, atol=1e-13)


def test_cross_matrix_and_axial_are_inverse(rng):
    w, x = rng.normal(size=(2, 7, 3))
    W = linalg.cross_matrix(w)
    np.testing.assert_array_equal(linalg.axial(W), w)
    np.testing.assert_allclose(np.einsum("nij,nj->ni", W, x), np.cross(w, x), atol=1e-15)


@pytest.mark.parametrize("d", [2, 3])
def test_polar_is_a_rotation_times_a_symmetric_stretch(d, rng):
    F = rng.normal(size=(300, d, d))
    R, U = linalg.polar(F)
    np.testing.assert_allclose(R @ U, F, atol=1e-13)
    np.testing.assert_allclose(R @ np.swapaxes(R, 1, 2), np.broadcast_to(np.eye(d), F.shape), atol=1e-13)
    np.testing.assert_allclose(np.linalg.det(R), 1.0, atol=1e-13)
    proper = np.linalg.det(F) > 0
    assert proper.any()
    assert (~proper).any()
    assert (np.linalg.eigvalsh(U[proper]) > 0).all()


def test_closed_eigenvalues_agree_with_lapack(rng):
    S = linalg.sym(rng.normal(size=(100, 2, 2)))
    S[0], S[1] = np.eye(2), np.diag([2.0, 1.0])
    values, vectors = linalg.eigh(S)
    np.testing.assert_allclose(values, np.linalg.eigvalsh(S), atol=1e-14)
    np.testing.assert_allclose((vectors * values[:, None, :]) @ np.swapaxes(vectors, 1, 2), S, atol=1e-14)


def test_tensor_components_round_trip(rng):
    c = rng.normal(size=(6, 3))
    T = linalg.tensor_2d(c)
    np.testing.assert_array_equal(T[:, 0, 1], T[:, 1, 0])
    np.testing.assert_array_equal(linalg.components_2d(T), c)
    np.testing.assert_array_equal(T[:, 1, 1], c[:, 1])
