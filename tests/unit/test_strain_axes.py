# SPDX-License-Identifier: MIT
"""The structure's own axes: hoop and axial, horizontal and upward, and what happens where these fail."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.strain.axes import axis_of_normals, structure_axes

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))


@pytest.fixture
def rng():
    return np.random.default_rng(23)


def frames_with_normals(normals, rng):
    frame = FIELDS["random_frames"](rng, len(normals))
    n = np.asarray(normals, float)
    a1 = frame[:, :, 0] - np.einsum("gi,gi->g", frame[:, :, 0], n)[:, None] * n
    a1 /= np.linalg.norm(a1, axis=1, keepdims=True)
    return np.stack([a1, np.cross(n, a1), n], axis=-1)


def cylinder_normals(axis, angles):
    axis = np.asarray(axis, float) / np.linalg.norm(axis)
    e = np.cross(axis, [0.0, 0.0, 1.0])
    e /= np.linalg.norm(e)
    return -(np.cos(angles)[:, None] * e + np.sin(angles)[:, None] * np.cross(axis, e))


def test_axes_are_right_handed_tangents(rng):
    frame = FIELDS["random_frames"](rng, 200)
    for structure in ("tunnel", "wall", "free"):
        axes, _ = structure_axes(frame, structure=structure)
        np.testing.assert_allclose(np.cross(axes[:, :, 0], axes[:, :, 1]), frame[:, :, 2], atol=1e-12)
        np.testing.assert_allclose(np.linalg.norm(axes, axis=1), 1.0, atol=1e-12)


def test_on_a_wall_u_points_right_for_who_faces_it_and_v_up(rng):
    axes, notes = structure_axes(frames_with_normals([[0, -1, 0], [1, 0, 0], [0, -0.6, 0.8]], rng), structure="wall")
    np.testing.assert_allclose(axes[0].T, [[1, 0, 0], [0, 0, 1]], atol=1e-12)
    np.testing.assert_allclose(axes[1].T, [[0, 1, 0], [0, 0, 1]], atol=1e-12)
    np.testing.assert_allclose(axes[2].T, [[1, 0, 0], [0, 0.8, 0.6]], atol=1e-12)
    assert notes == ()


def test_a_floor_keeps_the_axes_of_the_gauge(rng):
    frame = frames_with_normals([[0, 0, 1], [0.05, 0, np.sqrt(1 - 0.0025)]], rng)
    axes, _ = structure_axes(frame, structure="wall")
    np.testing.assert_allclose(axes, frame[:, :, :2], atol=1e-12)


@pytest.mark.parametrize("arc", [2 * np.pi, np.pi, np.pi / 2])
def test_the_axis_of_a_tunnel_is_found_from_any_part_of_its_lining(arc, rng):
    axis = np.array([1.0, 2.0, 0.1]) / np.linalg.norm([1.0, 2.0, 0.1])
    normals = cylinder_normals(axis, np.linspace(0, arc, 200))
    np.testing.assert_allclose(axis_of_normals(normals), axis, atol=1e-9)
    axes, notes = structure_axes(frames_with_normals(normals, rng), structure="tunnel")
    np.testing.assert_allclose(axes[:, :, 1], np.tile(axis, (200, 1)), atol=1e-9)
    assert notes == ()


def test_a_given_axis_goes_before_the_found_one(rng):
    frame = frames_with_normals(cylinder_normals([0, 1, 0], np.linspace(0, 6, 50)), rng)
    axes, _ = structure_axes(frame, structure="tunnel", axis=np.array([0.0, -3.0, 0.0]))
    np.testing.assert_allclose(axes[:, :, 1], np.tile([0.0, -1.0, 0.0], (50, 1)), atol=1e-12)


@pytest.mark.parametrize(
    "normals", [np.tile([[0.0, -1.0, 0.0]], (30, 1)), np.empty((0, 3)), None], ids=["flat", "none", "ball"]
)
def test_without_an_axis_the_tunnel_gets_wall_axes_and_a_warning(normals, rng):
    if normals is None:
        normals = rng.normal(size=(2000, 3))
        normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    frame = frames_with_normals(normals, rng)
    axes, notes = structure_axes(frame, structure="tunnel")
    np.testing.assert_array_equal(axes, structure_axes(frame, structure="wall")[0])
    assert len(notes) == 1
    assert "axis" in notes[0]
