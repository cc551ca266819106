# SPDX-License-Identifier: MIT
"""Outlines: means over pieces of arc, values at clock angles, and no value where the lining is not seen."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.structures.outline import local_parabola, pieces, trace_outline, unit_variance

RADIUS = 3.0


@pytest.fixture
def rng():
    return np.random.default_rng(29)


def slice_points(rng, n=7500, *, share=1.0, noise=0.002, thickness=0.01):
    clock = rng.uniform(-np.pi, np.pi, n) * share
    return clock, RADIUS + noise * rng.normal(size=n), rng.uniform(-0.5, 0.5, n) * thickness


def trace(clock, rho, beside):
    return trace_outline(clock, rho, beside, angle=pieces(RADIUS), radius=RADIUS)


def test_pieces_are_a_tenth_of_a_metre_long_within_limits():
    assert len(pieces(3.0)) == 188
    assert len(pieces(0.2)) == 72
    assert len(pieces(50.0)) == 720


def test_a_parabola_is_exact_and_needs_both_sides():
    angle = pieces(RADIUS)
    value = 1 + 0.2 * angle - 0.3 * angle**2
    at = np.array([0.0, 0.4, -0.8])
    fit = local_parabola(angle, value, np.ones(len(angle)), at)
    np.testing.assert_allclose(fit.value, 1 + 0.2 * at - 0.3 * at**2, atol=1e-12)
    np.testing.assert_allclose(fit.slope, 0.2 - 0.6 * at, atol=1e-10)
    np.testing.assert_allclose(fit.bend, -0.3, atol=1e-9)
    rim = local_parabola(angle, value, (angle < 0.4).astype(float), np.array([0.25, 0.335, 0.39, 0.5]))
    assert np.isfinite(rim.value).tolist() == [True, False, False, False]


def test_a_window_goes_through_six_o_clock():
    angle = pieces(RADIUS)
    fit = local_parabola(angle, np.cos(2 * angle), np.ones(len(angle)), np.array([np.pi, -np.pi]))
    np.testing.assert_allclose(fit.value, 1.0, atol=1e-3)


def test_the_variance_of_a_point_comes_back_and_errors_shared_within_pieces_raise_it(rng):
    outlines = [trace(*slice_points(rng)) for _ in range(30)]
    variance = [unit_variance(o.angle, o.radius, o.weight) for o in outlines]
    assert np.mean(variance) == pytest.approx(0.002**2, rel=0.06)
    clock, rho, beside = slice_points(rng)
    shared = 0.001 * rng.normal(size=188)[np.floor((clock + np.pi) / (2 * np.pi) * 188).astype(int)]
    o = trace(clock, rho + shared, beside)
    # means of 40 points: 0.002^2 / 40 + 0.001^2, in variances of one point
    assert unit_variance(o.angle, o.radius, o.weight) == pytest.approx(0.002**2 + 40 * 0.001**2, rel=0.35)


def test_a_thin_ring_of_few_pieces_has_no_variance():
    angle = pieces(RADIUS)
    assert np.isnan(unit_variance(angle, np.ones(len(angle)), (np.abs(angle) < 0.2).astype(float)))


def test_strays_a_tray_and_a_hidden_stretch_leave_the_rest_alone(rng):
    clock, rho, beside = slice_points(rng)
    stray = rng.random(7500) < 0.05
    rho[stray] = RADIUS * rng.uniform(0.2, 0.99, stray.sum())
    hidden = (clock > 0.80) & (clock < 0.87)
    rho[hidden] -= 0.06
    outline = trace(clock, rho, beside)
    away = (np.abs(outline.angle - 0.835) > 0.06) & (outline.weight > 0)
    np.testing.assert_allclose(outline.radius[away], RADIUS, atol=5 * 0.002 / np.sqrt(25))
    assert abs((outline.radius[away] - RADIUS).mean()) < 1e-4
    assert (outline.weight[np.abs(outline.angle - 0.835) < 0.02] == 0).all()


def test_a_floor_is_not_the_invert(rng):
    clock, rho, beside = slice_points(rng)
    floor = np.abs(clock) > 2.2
    rho[floor] = RADIUS * np.cos(np.pi - 2.2) / np.cos(np.pi - np.abs(clock[floor]))
    outline = trace(clock, rho, beside)
    assert (outline.weight[np.abs(outline.angle) > 2.45] == 0).all()
    assert (outline.weight[np.abs(outline.angle) < 2.1] > 0).all()


def test_a_slope_along_the_axis_is_taken_out_of_a_lopsided_slice(rng):
    clock, rho, beside = slice_points(rng, thickness=0.2)
    left = clock < 0
    beside[left] = np.abs(beside[left])
    outline = trace(clock, rho + 0.05 * beside * (1 + 0.5 * np.cos(clock)), beside)
    off = outline.radius - RADIUS
    assert abs(off[outline.angle < 0].mean()) < 2e-4
    # without it the left side would be 0.05 x 0.05 m = 2.5 mm too far out


def test_an_empty_slice_gives_an_empty_outline():
    outline = trace(np.empty(0), np.empty(0), np.empty(0))
    assert not outline.weight.any()
    assert np.isnan(outline.radius).all()


def test_equipment_denser_than_the_lining_does_not_pull_the_outline_in(rng):
    clock, rho, beside = slice_points(rng, share=0.65)
    k = 9000
    box = rng.uniform(1.5, 2.0, k), RADIUS * 0.86 + 0.01 * rng.normal(size=k), np.zeros(k)
    free = (clock < 1.5) | (clock > 2.0)
    outline = trace(*(np.r_[one[free], other] for one, other in zip((clock, rho, beside), box, strict=True)))
    seen = outline.weight > 0
    np.testing.assert_allclose(outline.radius[seen], RADIUS, atol=0.002)
    assert not seen[(outline.angle > 1.55) & (outline.angle < 1.95)].any()


def test_a_slice_along_an_end_wall_shows_no_outline(rng):
    rho, clock = RADIUS * np.sqrt(rng.random(40000)), rng.uniform(-np.pi, np.pi, 40000)
    assert not trace(clock, rho, np.zeros(40000)).weight.any()
