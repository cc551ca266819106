# SPDX-License-Identifier: MIT
"""A room that is only turned by 30 degrees and carried 10 m away, in survey coordinates: no strain at all."""

from __future__ import annotations

import runpy
from pathlib import Path

import laspy
import numpy as np
import pytest

import scanstrain
from scanstrain.linalg import rotation_matrix
from scanstrain.neighbourhood.result import AffineField
from scanstrain.strain import compute_strain
from scanstrain.synthetic import Wall, jittered_grid

MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
SURVEY = np.array([482310.0, 5391270.0, 86.0])
AXIS = np.array([0.2, -0.3, 0.93])
TURN = np.deg2rad(30.0) * AXIS / np.linalg.norm(AXIS)
SHIFT = np.array([8.0, -5.0, 3.3166])
SCALE = 1e-6
"""Step of the written coordinates [m]; its rounding is all that differs between the epochs."""
SPACING = 0.02
STRAINS = ("strain_xx", "strain_yy", "strain_zz", "strain_xy", "strain_xz", "strain_yz", "strain_1", "strain_2")
HEIGHT = 2.4
PLAN = np.array([[0.0, 0.0], [0.0, 2.2], [3.1, 2.9], [3.7, 0.0]])
"""Corners of the floor, clockwise, so that the free side is inside [m]. No two walls are parallel or equal: a
rectangular room fits itself as well when turned by half a circle."""


def side(wall, number, spacing):
    """Noise-free points and intensities of one wall with relief and texture."""
    scene = MEASURES["textured"](wall, None, seed=number)
    q = jittered_grid(wall, spacing, np.random.default_rng(number))
    normal = wall.frames(q)[:, :, 2]
    return wall.points(q) + scene.relief(q)[:, None] * normal, scene.intensity(q)


@pytest.fixture(scope="module")
def room():
    """Points (n, 3) [m] and intensities of the inside of a room: four walls and a floor."""
    parts = []
    for number, (start, end) in enumerate(zip(PLAN, np.roll(PLAN, -1, axis=0), strict=True), start=1):
        along = end - start
        wall = Wall(float(np.hypot(*along)), HEIGHT, corner=(*start, 0.0), bearing=float(np.arctan2(*along[::-1])))
        parts.append(side(wall, number, SPACING))
    floor, grey = side(Wall(3.7, 2.9), 9, SPACING)
    x, y = floor[:, 0], floor[:, 2]
    inside = np.ones(len(x), bool)
    for start, end in zip(PLAN, np.roll(PLAN, -1, axis=0), strict=True):
        (dx, dy), (sx, sy) = end - start, start
        inside &= dx * (y - sy) - dy * (x - sx) < 0
    parts.append((np.stack([x, y, floor[:, 1]], axis=1)[inside], grey[inside]))
    points, intensity = (np.concatenate(part) for part in zip(*parts, strict=True))
    return points, np.clip(np.round(intensity), 1, 65535)


def carried(points):
    """The same points after the motion, in survey coordinates."""
    return points @ rotation_matrix(TURN).T + SHIFT + SURVEY


def test_given_correspondences_show_no_strain(room):
    """Local affine maps by plain least squares on the survey coordinates of the same points, before and after."""
    points, _ = room
    before, after = points + SURVEY, carried(points)
    rng = np.random.default_rng(4)
    places = points[rng.choice(len(points), 40, replace=False)]
    frames, gradients, moves = [], [], []
    for place in places:
        near = np.linalg.norm(points - place, axis=1) < 0.3
        x = before[near] - (place + SURVEY)
        u = (after - before)[near]
        _, _, Vt = np.linalg.svd(x - x.mean(axis=0), full_matrices=False)
        A = Vt.T if np.linalg.det(Vt) > 0 else Vt.T @ np.diag([1.0, 1.0, -1.0])
        # All three directions are fitted: points of a rough patch do not lie in its tangent plane.
        fitted, *_ = np.linalg.lstsq(np.column_stack([np.ones(len(x)), x @ A]), u @ A, rcond=None)
        frames.append(A)
        moves.append(fitted[0])
        gradients.append(fitted[1:3].T)
    g = len(places)
    field = AffineField(
        position=places,
        frame=np.array(frames),
        displacement=np.array(moves),
        gradient=np.array(gradients),
        hessian=np.zeros((g, 3)),
        covariance=np.broadcast_to(1e-12 * np.eye(12), (g, 12, 12)).copy(),
        shape=np.zeros((g, 3)),
        observable=np.ones((g, 12), bool),
        status=np.zeros(g, np.uint8),
        points=np.full(g, 500),
        residual_normal=np.ones(g),
        residual_intensity=np.ones(g),
        gauge_length=0.6,
        gauge_spacing=0.15,
    )
    for measure in ("auto", "green_lagrange", "hencky", "biot", "almansi", "small"):
        values = compute_strain(field, measure=measure).values
        for name in STRAINS:
            assert np.abs(values[name]).max() < 1e-9, (measure, name)
    turn = np.stack([values[f"rot_{axis}"] for axis in "xyz"], axis=1)
    np.testing.assert_allclose(turn, np.broadcast_to(TURN, turn.shape), atol=1e-8)


@pytest.fixture(scope="module")
def result(room, tmp_path_factory):
    points, intensity = room
    folder = tmp_path_factory.mktemp("room")
    for name, places in (("before", points + SURVEY), ("after", carried(points))):
        header = laspy.LasHeader(version="1.4", point_format=6)
        header.scales, header.offsets = np.full(3, SCALE), np.round(places.mean(axis=0))
        las = laspy.LasData(header)
        las.xyz, las.intensity = places, intensity.astype(np.uint16)
        las.write(folder / f"{name}.las")
    return scanstrain.compare(
        folder / "before.las", folder / "after.las", gauge_length=0.6, gauge_spacing=0.3, assume_same_crs=True
    )


def test_registration_takes_the_motion_back(result):
    corners = np.array([[x, y, z] for x, y in PLAN for z in (0.0, HEIGHT)])
    T = result.registration.file_matrix()
    back = carried(corners) @ T[:3, :3].T + T[:3, 3]
    np.testing.assert_allclose(back, corners + SURVEY, atol=5e-6)


def test_files_of_a_moved_room_show_no_strain(result):
    values = result.strain.values
    assert np.isfinite(values["strain_1"]).mean() > 0.5
    for name in STRAINS:
        size = np.abs(values[name])
        # A point that the micrometres of rounding and registration carry over the border of a cell changes two
        # averages: where that happens a gauge errs by some 1e-5.
        assert np.nanquantile(size, 0.75) < 1e-6, name
        assert np.nanmax(size) < 1e-4, name


def test_files_of_a_moved_room_show_no_displacement(result):
    # Single gauges in the corners of the room feel a cell that changed sides, as above.
    normal, tilt = np.abs(result.strain.values["disp_n"]), result.strain.values["tilt"]
    assert np.nanquantile(normal, 0.99) < 5e-6
    assert np.nanquantile(tilt, 0.99) < 2e-5
    assert np.nanmax(normal) < 5e-5
    assert np.nanmax(tilt) < 5e-4
