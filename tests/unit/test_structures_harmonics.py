# SPDX-License-Identifier: MIT
"""The Fourier series of the radial change, and how much of it a partly hidden ring supports."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.structures.harmonics import fit_harmonics, moved_along, terms


@pytest.fixture
def rng():
    return np.random.default_rng(11)


def ring(share, count=188):
    angle = -np.pi + (np.arange(count) + 0.5) * 2 * np.pi / count
    return angle[np.abs(angle) <= np.pi * share]


def test_a_series_is_recovered_to_rounding():
    angle, known = ring(1.0), np.array([1, 2, -3, 4, 5, -6, 7, 8, -9]) * 1e-3
    waves = fit_harmonics(angle, terms(angle, 4) @ known, np.ones(len(angle)))
    np.testing.assert_allclose(waves.coefficients, known, atol=1e-15)
    assert waves.order == 4


@pytest.mark.parametrize(("share", "order"), [(1.0, 4), (0.75, 4), (0.7, 3), (0.6, 2), (0.45, 1)])
def test_hidden_arcs_leave_only_the_long_waves(share, order):
    angle = ring(share)
    assert fit_harmonics(angle, np.cos(2 * angle), np.ones(len(angle))).order == order


def test_a_short_arc_supports_nothing():
    angle = ring(0.15)
    assert fit_harmonics(angle, np.cos(angle), np.ones(len(angle))) is None


@pytest.mark.parametrize("share", [1.0, 0.6])
def test_intervals_of_coefficients_hold(share, rng):
    angle = ring(share)
    weight = rng.uniform(10, 30, len(angle))
    inside, spread = [], []
    for _ in range(500):
        known = 1e-3 * rng.normal(size=5)
        change = terms(angle, 2) @ known + 0.002 / np.sqrt(weight) * rng.normal(size=len(angle))
        waves = fit_harmonics(angle, change, weight)
        off = waves.coefficients[:5] - known
        sd = np.sqrt(np.diag(waves.covariance)[:5])
        inside.append(np.abs(off) < 1.96 * sd)
        spread.append(off / sd)
    assert 0.93 <= np.mean(inside) <= 0.97
    np.testing.assert_allclose(np.std(spread, axis=0), 1.0, atol=0.12)


def test_pieces_that_changed_grossly_do_not_count(rng):
    angle = ring(1.0)
    change = 0.005 * np.cos(2 * angle) + 3e-4 * rng.normal(size=len(angle))
    change[40:45] += 0.05
    waves = fit_harmonics(angle, change, np.ones(len(angle)))
    assert waves.coefficients[3] == pytest.approx(0.005, abs=4 * np.sqrt(waves.covariance[3, 3]))


def test_without_extension_order_one_is_a_shift_and_every_order_keeps_the_mid_line():
    angle = ring(1.0)
    radial, along = terms(angle, 4), moved_along(angle, 4)
    outwards = np.stack([np.sin(angle), np.cos(angle)], axis=1)
    onwards = np.stack([np.cos(angle), -np.sin(angle)], axis=1)
    for column, shift in ((1, [0, 1]), (2, [1, 0])):
        moved = radial[:, [column]] * outwards + along[:, [column]] * onwards
        np.testing.assert_allclose(moved, np.tile(shift, (len(angle), 1)), atol=1e-12)
    step = 1e-6
    stretch = (moved_along(angle + step, 4) - moved_along(angle - step, 4)) / (2 * step) + radial
    np.testing.assert_allclose(stretch[:, 1:], 0.0, atol=1e-8)
