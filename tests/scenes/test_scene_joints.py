# SPDX-License-Identifier: MIT
"""Joints of known movement: recovered with honest errors, and no false strain beside them."""

from __future__ import annotations

import runpy
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
from scipy.stats import binom, chi2

from scanstrain.neighbourhood import fit_affine
from scanstrain.neighbourhood.joint_lines import Joint
from scanstrain.neighbourhood.joints import measure_joints
from scanstrain.neighbourhood.result import Status
from scanstrain.synthetic import Lining, Scene, Wall, sample_epoch
from scanstrain.synthetic.deformation import from_components, zeros

MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
SPACING, NOISE, GAUGE = 0.012, 5e-4, 0.4
JUMP = np.array([1e-3, 5e-4, 1e-3, 1e-3])
"""Opening, slip, step [m] and hinge angle [rad]."""
MIDDLE = 0.6
"""Where the joint is along the wall [m]."""
FREE = np.array([0.0, -9.0, 0.0])
"""A place before the wall [m]."""


@dataclass(frozen=True)
class Split:
    """All beyond `at` on coordinate `axis` moves as a body: opens, slips, steps, and turns about the joint."""

    at: float
    jump: tuple[float, float, float, float]
    axis: int = 0

    def jet(self, surface, q):
        opening, slip, step, hinge = self.jump
        jet, far = zeros(len(q)), q[:, self.axis] > self.at
        jet.value[far, self.axis], jet.value[far, 1 - self.axis] = opening, slip
        jet.value[far, 2] = step - hinge * (q[far, self.axis] - self.at)
        jet.first[far, 2, self.axis] = -hinge
        return from_components(surface, jet)


def joint_at(surface, q, width=0.01):
    return Joint("j", surface.points(np.asarray(q, float)), width)


def drawn(scene, seed, **options):
    usual = {"spacing": SPACING, "noise": NOISE, "intensity_noise": 30.0}
    return tuple(
        sample_epoch(scene, deformed=deformed, seed=2 * seed + deformed, **usual | options)
        for deformed in (False, True)
    )


def fitted(pair, joints, **options):
    # Strains of these small gauges count as given up to a vague 1 %.
    usual = {"gauge_length": GAUGE, "gauge_spacing": 0.3, "free_side": FREE, "required_strain_sd": 0.01}
    return fit_affine(*pair, joints=joints, **usual | options)


TARGET = {"spacing": 0.007, "noise": 2e-3}
"""A scan as usual on site; its gauges are 0.6 m long."""
SURFACE = Wall(2 * MIDDLE, 2.4)
LINE = joint_at(SURFACE, [[MIDDLE, 0.0], [MIDDLE, 2.4]])
SCENE = MEASURES["textured"](SURFACE, Split(MIDDLE, tuple(JUMP)))
SMALL = Wall(2 * MIDDLE, 1.0)
ACROSS = joint_at(SMALL, [[MIDDLE, 0.0], [MIDDLE, 1.0]])


@pytest.fixture(scope="module")
def pair():
    return drawn(SCENE, 1, **TARGET)


@pytest.fixture(scope="module")
def field(pair):
    return fitted(pair, (LINE,), gauge_length=0.6, gauge_spacing=0.2)


@pytest.fixture(scope="module")
def jumps(pair, field):
    """Two pairs of scans of one joint; the first field serves both, since the motion is the same."""
    return [measure_joints(*scans, field, (LINE,))[0] for scans in (pair, drawn(SCENE, 2, **TARGET))]


def test_a_jump_is_recovered_within_its_errors(jumps):
    error = np.concatenate([j.values - JUMP for j in jumps])
    score = error / np.concatenate([j.sd for j in jumps])
    assert np.isfinite(score).all()
    assert max(MEASURES["rms"](error[:, k]) for k in range(3)) < 3e-4
    inside = np.abs(score) < 1.96
    # Places one apart share points: half of them count as independent.
    assert inside.mean() > binom.ppf(0.001, inside.size // 2, 0.95) / (inside.size // 2)
    # Errors may lean to the safe side, as the noise of a moving surface is told less well.
    assert 0.5 < np.mean(score**2) < chi2.ppf(0.999, score.size // 2) / (score.size // 2)


def test_the_whole_joint_is_better_known_than_its_places(jumps):
    for j in jumps:
        assert (j.mean_sd < 0.7 * j.sd.min(axis=0)).all()
        assert (np.abs(j.mean - JUMP) < 3.5 * j.mean_sd).all()
        assert (np.abs(j.mean - JUMP)[:3] < 3e-4).all()
        assert j.mean_significance < 1e-6


def test_no_gauge_reaches_across_the_joint(field):
    inside = np.abs(field.position[:, 2] - 1.2) < 0.9
    distance = np.abs(field.position[:, 0] - MIDDLE)
    seen = field.observable[:, 3] & inside
    across = field.gradient[:, 0, 0]
    noise = MEASURES["rms"](across[seen & (distance > 0.3)])
    beside = seen & (distance < 0.2)
    assert beside.sum() > 0.7 * (inside & (distance < 0.2)).sum()
    assert MEASURES["rms"](across[beside]) < 2 * noise
    # Across the joint it would be 8 d / (3 pi w), the slope over a disc with a step d through its middle.
    smeared = 8 * JUMP[0] / (3 * np.pi * 0.3)
    assert np.abs(np.mean(across[beside])) < 0.2 * smeared


def test_a_large_jump_is_reached_from_both_sides():
    """Ten millimetres and more: beyond the strip that belongs to neither side."""
    large = np.array([0.012, -0.008, 0.01, 0.0])
    scans = drawn(MEASURES["textured"](SMALL, Split(MIDDLE, tuple(large))), 9)
    jump = measure_joints(*scans, fitted(scans, (ACROSS,), gauge_spacing=0.15), (ACROSS,))[0]
    assert (np.abs(jump.values - large) < 4 * jump.sd).all()


def test_a_bare_wall_shows_step_and_hinge_only():
    scans = drawn(Scene(SMALL, Split(MIDDLE, (1e-3, 0.0, 2e-3, 0.0))), 11)
    jump = measure_joints(*scans, fitted(scans, (ACROSS,)), (ACROSS,))[0]
    assert np.isnan(jump.values[:, :2]).all()
    assert (np.abs(jump.values - [0, 0, 2e-3, 0])[:, 2:] < 4 * jump.sd[:, 2:]).all()
    assert jump.reason(0).startswith("opening and slip")


def test_a_step_of_the_other_sign_when_the_line_is_drawn_the_other_way(pair, field, jumps):
    turned = Joint("j", LINE.line[::-1].copy(), LINE.width)
    jump = measure_joints(*pair, field, (turned,))[0]
    np.testing.assert_allclose(jump.mean * [1, 1, -1, 1], jumps[0].mean, atol=0.5 * jump.mean_sd.min())


def test_a_ring_joint_in_a_lining():
    """Frames follow the surface: the step is radial and the opening axial all around."""
    surface = Lining(1.5, 1.0, arc=(0.0, 1.2))
    move = (1e-3, 5e-4, 1e-3, 0.0)
    scene = MEASURES["textured"](surface, Split(MIDDLE, move, axis=1))
    scans = drawn(scene, 13)
    line = joint_at(surface, np.column_stack([np.linspace(0.0, 1.8, 5), np.full(5, MIDDLE)]))
    where = {"free_side": np.array([MIDDLE, 0.0, 0.0])}
    jump = measure_joints(*scans, fitted(scans, (line,), **where), (line,))[0]
    assert len(jump) == 6  # 1.8 m in steps of the radius of the half discs, 0.28 m
    axial = jump.frame[:, :, 0] @ surface.frames(np.zeros((1, 2)))[0][:, 1]
    sign = np.sign(axial[0])
    np.testing.assert_allclose(axial, sign, atol=1e-3)
    _, height = surface.project(jump.position + 0.1 * jump.frame[:, :, 2])
    assert (height > 0.09).all()
    truth = np.array([1.0, 1.0, sign, 1.0]) * move
    # Along the line of increasing arc the right side is that of smaller chainage: the slip changes sign twice.
    assert (np.abs(np.abs(jump.mean) - np.abs(truth)) < 3.5 * jump.mean_sd).all()
    assert np.sign(jump.mean[2]) == sign


def test_a_side_that_only_one_epoch_shows_has_a_reason(pair, field):
    reference, current = pair
    seen = current.points[:, 0] < MIDDLE
    half = replace(current, points=current.points[seen], intensity=current.intensity[seen])
    jump = measure_joints(reference, half, field, (LINE,))[0]
    assert np.isnan(jump.values).all()
    assert (jump.status[:, 0] == Status.NO_OVERLAP).all()
    assert (jump.status[:, 1] == Status.FINE).all()
