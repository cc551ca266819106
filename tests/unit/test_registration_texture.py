# SPDX-License-Identifier: MIT
"""Returned intensity fixes motions that the surfaces leave open, or says nothing."""

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.registration import register
from scanstrain.synthetic import Lining, RandomField, Scene, Wall, sample_epoch

textured = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))["textured"]
LINING = Lining(0.6, 1.2, arc=(-np.pi / 4, 1.25 * np.pi))
WALL = Wall(1.8, 1.0)
SLIDE, ROLL = 0.05, 0.005
SPACING, NOISE, GREY_NOISE = 0.01, 0.002, 30.0


class Wave:
    """A pattern that repeats along the second coordinate."""

    def __init__(self, period):
        self.period = period

    def __call__(self, q):
        return 0.25 * np.sin(2 * np.pi * q[:, 1] / self.period)


def turned(axis, angle, about, shift):
    T = np.eye(4)
    T[:3, :3] = Rotation.from_rotvec(np.asarray(axis) * angle).as_matrix()
    T[:3, 3] = about - T[:3, :3] @ about + shift
    return T


def slid_and_rolled(slide=SLIDE, roll=ROLL):
    """Current to reference for the lining, whose axis is x."""
    return turned([1.0, 0.0, 0.0], roll / LINING.radius, np.zeros(3), np.array([slide, 0.0, 0.0]))


def drawn(scene, seed):
    return sample_epoch(scene, deformed=False, spacing=SPACING, noise=NOISE, intensity_noise=GREY_NOISE, seed=seed)


def pair(scene, T, *, seed=1, later=None, paint=lambda epoch: epoch.intensity):
    """The scene, and the same again in another pose, with its intensity changed on request."""
    b = drawn(later or scene, 2 * seed + 1)
    b = replace(b, intensity=np.asarray(paint(b), np.float32))
    return drawn(scene, 2 * seed), b.moved(np.linalg.inv(T))


def standardised(result, T, directions):
    """Error of the motion along directions (rotation, translation at the pivot) over its claimed standard error."""
    E = result.T_ref_cur @ np.linalg.inv(T)
    turn = Rotation.from_matrix(E[:3, :3]).as_rotvec()
    error = np.r_[turn, E[:3, :3] @ result.pivot + E[:3, 3] - result.pivot]
    return directions @ error / np.sqrt(np.einsum("ai,ij,aj->a", directions, result.covariance, directions))


ALONG_AND_ROUND = np.array([[0, 0, 0, 1.0, 0, 0], [1.0, 0, 0, 0, 0, 0]])


def names(directions):
    return [direction.description for direction in directions]


@pytest.fixture(scope="module")
def painted():
    return textured(LINING, Scene(LINING).deformation)


def wet(epoch):
    """Another gain of the scanner, and a third of the lining darker by a third."""
    return epoch.intensity * np.where(epoch.points[:, 0] < 0.4, 0.87, 1.3)


@pytest.mark.parametrize("paint", [lambda epoch: epoch.intensity, wet], ids=["same", "gain and wet patch"])
def test_intensity_fixes_slide_and_roll_of_a_lining(painted, paint):
    T = slid_and_rolled()
    result = register(*pair(painted, T, paint=paint))
    assert result.weak_directions == ()
    assert names(result.texture_directions) == ["slide along the tunnel axis", "roll about the tunnel axis"]
    assert all(0 < direction.sd < 1e-3 for direction in result.texture_directions)
    # Within 3 of the claimed standard errors.
    assert (np.abs(standardised(result, T, ALONG_AND_ROUND)) < 3).all()
    assert any("returned intensity" in said and "roll" in said for said in result.warnings)


def test_capture_reaches_over_the_capture_range(painted):
    T = slid_and_rolled(-0.28, 0.2)
    result = register(*pair(painted, T))
    assert len(result.texture_directions) == 2
    assert (np.abs(standardised(result, T, ALONG_AND_ROUND)) < 3).all()


def test_intensity_fixes_slides_and_turn_of_a_wall():
    normal = WALL.frames(np.zeros((1, 2)))[0, :, 2]
    T = turned(normal, 0.02, np.array([0.9, 0.0, 0.5]), np.array([0.05, 0.0, -0.03]))
    scene = textured(WALL, Scene(WALL).deformation)
    result = register(*pair(scene, T))
    assert result.weak_directions == ()
    assert len(result.texture_directions) == 3
    directions = np.array([[0, 0, 0, 1.0, 0, 0], [0, 0, 0, 0, 0, 1.0], [*normal, 0, 0, 0]])
    assert (np.abs(standardised(result, T, directions)) < 3).all()


def test_nothing_is_claimed_without_texture(painted):
    T = slid_and_rolled()
    reference, current = pair(painted, T)
    bare = pair(Scene(LINING, relief=painted.relief), T)
    paint = RandomField((3.0, 1.2), rms=0.18, correlation_length=0.04, seed=99)
    repainted = pair(painted, T, later=Scene(LINING, relief=painted.relief, texture=paint))
    constant = reference, replace(current, intensity=np.full(len(current), 7, np.float32))
    broken = reference, replace(current, intensity=np.full(len(current), np.nan, np.float32))
    white = tuple(replace(e, intensity=np.minimum(e.intensity, 900)) for e in (reference, current))
    for scans in (bare, repainted, constant, broken, white):
        result = register(*scans)
        assert len(result.weak_directions) == 2
        assert result.texture_directions == ()
        assert not any("intensity" in said for said in result.warnings)
        # Held where it started, with the uncertainty of the start.
        np.testing.assert_allclose([w.sd for w in result.weak_directions], 0.1, rtol=1e-6)


def test_a_pattern_that_repeats_is_named_and_not_used(painted):
    result = register(*pair(Scene(LINING, relief=painted.relief, texture=Wave(0.25)), slid_and_rolled()))
    assert result.texture_directions == ()
    assert len(result.weak_directions) == 2
    said = [s for s in result.warnings if "more than one place" in s]
    assert len(said) == 1
    assert "slide along the tunnel axis" in said[0]


def test_ground_that_slid_in_itself_does_not_drag_the_datum(painted):
    """A quarter of the lining slides by 8 mm along the axis, which no surface shows."""
    T = slid_and_rolled()
    a, b = drawn(painted, 2), drawn(painted, 3)
    moved = (b.points[:, 0] < 0.6) & (b.points[:, 1] > 0.0)
    b = replace(b, points=b.points + np.where(moved[:, None], [0.008, 0.0, 0.0], 0.0))
    result = register(a, b.moved(np.linalg.inv(T)))
    slide = (result.T_ref_cur @ np.linalg.inv(T))[0, 3]
    # A plain mean would be off by 2 mm or more.
    assert abs(slide) < 0.3e-3


def test_intensity_can_be_left_out(painted):
    result = register(*pair(painted, slid_and_rolled()), use_intensity=False)
    assert len(result.weak_directions) == 2
    assert result.texture_directions == ()
