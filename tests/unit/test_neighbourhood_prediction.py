# SPDX-License-Identifier: MIT
"""Smooth surface, covariance and best linear prediction against closed forms and direct linear systems."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.cells import make_cells
from scanstrain.neighbourhood.covariance import (
    FAMILIES,
    Covariance,
    fit_correlation,
    local_covariance,
    measure_structure,
)
from scanstrain.neighbourhood.level import Level, make_surface
from scanstrain.neighbourhood.pairs import GREY, HEIGHT, count_pairs
from scanstrain.neighbourhood.predict import krige, lookup
from scanstrain.neighbourhood.smooth import smooth_surface, support_cells
from scanstrain.neighbourhood.solve import back_rows, reduce_rows, solve_in_place
from scanstrain.synthetic import RandomField, Scene, Wall, jittered_grid, sample_epoch

LENGTH, SILL, NOISE = 0.03, 4.0, 0.5


def test_solving_in_place_is_a_cholesky_solution():
    rng = np.random.default_rng(0)
    half = rng.standard_normal((9, 6))
    A, b = half.T @ half, rng.standard_normal(6)
    x = b.copy()
    assert solve_in_place(A.copy(), x, 6)
    np.testing.assert_allclose(x, np.linalg.solve(A, b), rtol=1e-10)
    assert not solve_in_place(-np.eye(3), np.ones(3), 3)


def test_one_pass_over_the_upper_triangle_factors_and_solves():
    rng = np.random.default_rng(1)
    half, right = rng.standard_normal((30, 11)), rng.standard_normal((11, 3))
    K = half.T @ half
    work, x = np.hstack([np.triu(K), right]), np.empty((3, 11))
    assert reduce_rows(work, 11, 3)
    upper = np.linalg.cholesky(K).T
    np.testing.assert_allclose(np.triu(work[:, :11]), upper, rtol=1e-10, atol=1e-10)
    np.testing.assert_allclose(work[:, 11:], np.linalg.solve(upper.T, right), rtol=1e-10, atol=1e-10)
    back_rows(work, 11, x)
    np.testing.assert_allclose(x.T, np.linalg.solve(K, right), rtol=1e-9, atol=1e-10)
    assert not reduce_rows(np.hstack([-np.eye(6), np.ones((6, 1))]), 6, 1)


@pytest.mark.parametrize("radius", [1.9, -4.0])
def test_smooth_surface_of_a_cylinder(radius):
    """Frame, foot point and curvature 1/R. The mean of a cell of width w lies w^2/(24 R) inside the arc."""
    rng = np.random.default_rng(1)
    arc, along = rng.uniform(-0.9, 0.9, 40_000), rng.uniform(-1, 1, 40_000)
    points = np.stack([radius * np.sin(arc / radius), along, radius * (1 - np.cos(arc / radius))], axis=1)
    cells = make_cells(points, 0.05)
    turn = np.linspace(-0.4, 0.4, 9) / radius
    places = np.stack([radius * np.sin(turn), np.linspace(-0.5, 0.5, 9), radius * (1 - np.cos(turn))], axis=1)
    exact = np.stack([-np.sin(turn), np.zeros(9), np.cos(turn)], axis=1)
    crooked = exact + rng.normal(0, 0.05, (9, 3))
    found = smooth_surface(places, crooked / np.linalg.norm(crooked, axis=1, keepdims=True), cells)
    normal = found.frame[:, :, 2]
    np.testing.assert_allclose(np.einsum("mi,mi->m", normal, exact), 1.0, atol=2e-6)
    np.testing.assert_allclose(
        np.einsum("mji,mjk->mik", found.frame, found.frame), np.tile(np.eye(3), (9, 1, 1)), atol=1e-12
    )
    k11, k12, k22 = found.curvature.T
    principal = np.linalg.eigvalsh(np.stack([k11, k12, k12, k22], axis=1).reshape(-1, 2, 2))
    np.testing.assert_allclose(principal[:, 1] if radius > 0 else principal[:, 0], 1 / radius, rtol=0.02)
    np.testing.assert_allclose(principal[:, 0] if radius > 0 else principal[:, 1], 0.0, atol=0.01 / abs(radius))
    off = np.hypot(found.origin[:, 0], found.origin[:, 2] - radius) - abs(radius)
    np.testing.assert_allclose(off, 0.0, atol=1.5 * cells.resolution**2 / (24 * abs(radius)))
    assert (found.support > 50).all()


def test_smooth_surface_leaves_stray_points_out():
    rng = np.random.default_rng(2)
    points = np.column_stack([rng.uniform(-1, 1, (20_000, 2)), rng.normal(0, 5e-4, 20_000)])
    stray = rng.random(20_000) < 0.02
    points[stray, 2] += rng.uniform(0.05, 0.1, int(stray.sum()))
    cells = make_cells(points, 0.02)
    places = np.zeros((1, 3))
    found = smooth_surface(places, np.array([[0.0, 0.0, 1.0]]), cells)
    assert abs(found.origin[0, 2]) < 5e-4
    assert np.hypot(*found.frame[0, :2, 2]) < 0.02


@pytest.mark.parametrize("family", FAMILIES)
def test_correlation_of_an_exact_variogram_is_found(family):
    lag = np.linspace(0.004, 0.06, 10)
    share = np.linspace(1.0, 0.8, 10)
    gamma = NOISE * share + SILL * (1 - FAMILIES[family](lag / LENGTH))
    found, length = fit_correlation(lag, share, gamma, 1 / gamma**2 / lag)
    # Near the origin the families resemble one another; what counts is the function over the lags in use.
    ours, exact = FAMILIES[found](lag / length), FAMILIES[family](lag / LENGTH)
    np.testing.assert_allclose(ours, exact, atol=0.02)
    assert found == family
    assert length == pytest.approx(LENGTH, rel=0.06)


@pytest.mark.parametrize("family", FAMILIES)
def test_table_holds_correlation_and_slope(family):
    model = Covariance(family, LENGTH, np.ones(1), np.ones(1))
    table, step = model.table(0.1)
    r = np.linspace(0.002, 0.09, 40)
    small = 1e-6
    value = [lookup(table, 0, x * x, step) for x in r]
    slope = [lookup(table, 1, x * x, step) * x for x in r]
    exact = (FAMILIES[family]((r + small) / LENGTH) - FAMILIES[family]((r - small) / LENGTH)) / (2 * small)
    np.testing.assert_allclose(value, FAMILIES[family](r / LENGTH), atol=2e-3)
    np.testing.assert_allclose(slope, exact, atol=0.02 / LENGTH)
    assert lookup(table, 0, 0.0, step) == 1.0
    assert lookup(table, 0, 1.0, step) == 0.0


@pytest.fixture(scope="module")
def kriged():
    """Forty places with values, solved by the product and by a direct ordinary kriging system."""
    rng = np.random.default_rng(3)
    xy = rng.uniform(-0.05, 0.05, (40, 2))
    share = 1.0 / rng.integers(1, 4, 40)
    values = 100.0 + rng.normal(0, 2, 40)
    table, step = Covariance("matern52", LENGTH, np.ones(1), np.ones(1)).table(0.15)
    weights, work = np.empty(64), np.empty((64, 69))
    probe = 0.01
    offset, variance, _, _ = krige(
        xy[:, 0].copy(), xy[:, 1].copy(), values, share, 40, table, step, NOISE, SILL, probe, weights, work
    )

    def ours(places):
        r2 = ((places[:, None] - xy) ** 2).sum(axis=2)
        k = np.array([[lookup(table, 0, x, step) for x in row] for row in r2])
        return offset + k @ weights[:40]

    return xy, share, values, ours, variance, probe


def ordinary_kriging(xy, share, values, places):
    """Prediction and its variance by the textbook system with a Lagrange multiplier (Matheron 1963)."""

    def covariance(a, b):
        return SILL * FAMILIES["matern52"](np.linalg.norm(a[:, None] - b, axis=2) / LENGTH)

    n = len(xy)
    system = np.ones((n + 1, n + 1))
    system[:n, :n] = covariance(xy, xy) + NOISE * np.diag(share)
    system[n, n] = 0.0
    right = np.vstack([covariance(xy, places), np.ones(len(places))])
    solution = np.linalg.solve(system, right)
    return solution[:n].T @ values, SILL - (solution * right).sum(axis=0)


def test_prediction_is_ordinary_kriging(kriged):
    xy, share, values, ours, *_ = kriged
    places = np.random.default_rng(4).uniform(-0.04, 0.04, (30, 2))
    expected, _ = ordinary_kriging(xy, share, values, places)
    # The constant has a wide prior instead of a multiplier (1 % of its weight), the correlation comes from a table.
    np.testing.assert_allclose(ours(places), expected, atol=0.02)


def test_prediction_variance_is_that_of_ordinary_kriging(kriged):
    xy, share, values, _, variance, probe = kriged
    probes = probe * np.array([[-1.0, -1], [-1, 1], [1, -1], [1, 1]])
    _, expected = ordinary_kriging(xy, share, values, probes)
    assert variance == pytest.approx(expected.mean(), rel=0.02)


def measured_covariances(cells, smooth):
    pairs = count_pairs(cells, smooth, gate=0.01, region_width=0.2, stride=1)
    return [local_covariance(pairs, kind, measure_structure([pairs], kind)) for kind in (HEIGHT, GREY)]


def test_measured_covariance_of_known_noise_and_texture():
    """Noise of height and intensity, and the sill of both, of a wall drawn with known ones."""
    wall = Wall(3.0, 3.0)
    relief = RandomField((3.0, 3.0), rms=1e-3, correlation_length=0.05, seed=5)
    texture = RandomField((3.0, 3.0), rms=200.0, correlation_length=0.04, seed=6)
    rng = np.random.default_rng(7)
    q = jittered_grid(wall, 0.008, rng)
    normal = wall.frames(q)[:, :, 2]
    points = wall.points(q) + (relief(q) + rng.normal(0, 5e-4, len(q)))[:, None] * normal
    grey = 1500 + texture(q) + rng.normal(0, 30.0, len(q))
    cells = make_cells(points, 0.008, intensity=grey)
    smooth = smooth_surface(cells.centre, cells.normal, support_cells(cells.position, 0.15))
    height, intensity = measured_covariances(cells, smooth)
    assert np.sqrt(np.median(height.noise)) == pytest.approx(5e-4, rel=0.1)
    assert np.sqrt(np.median(intensity.noise)) == pytest.approx(30.0, rel=0.2)
    # The correlation at half a correlation length, which the sill and the family share between them.
    at = 0.02
    rise = intensity.sill * (1 - FAMILIES[intensity.family](at / intensity.length))
    assert np.sqrt(np.median(rise)) == pytest.approx(np.sqrt(200.0**2 * (1 - np.exp(-((at / 0.04) ** 2)))), rel=0.15)


def test_even_reflectance_shows_no_structure():
    wall = Wall(3.0, 3.0)
    rng = np.random.default_rng(8)
    q = jittered_grid(wall, 0.01, rng)
    points = wall.points(q) + rng.normal(0, 5e-4, (len(q), 1)) * wall.frames(q)[:, :, 2]
    cells = make_cells(points, 0.01, intensity=1500 + rng.normal(0, 30.0, len(q)))
    smooth = smooth_surface(cells.centre, cells.normal, support_cells(cells.position, 0.15))
    _, intensity = measured_covariances(cells, smooth)
    assert (intensity.sill == 0).mean() > 0.98
    assert np.sqrt(np.median(intensity.noise)) == pytest.approx(30.0, rel=0.05)


@pytest.mark.parametrize("spacing", [0.006, 0.01])
def test_heights_of_two_epochs_differ_as_much_as_expected(spacing):
    """What both predictions miss of the same relief drops out: without that a third too much is expected."""
    wall = Wall(1.2, 1.2)
    scene = Scene(wall, relief=RandomField((1.2, 1.2), rms=0.001, correlation_length=0.05, seed=3))
    epochs = [sample_epoch(scene, deformed=False, spacing=spacing, seed=50 + k) for k in (0, 1)]
    ours, theirs = (make_surface(e.points, None, spacing, 0.075, 0.15) for e in epochs)
    gauges = smooth_surface(np.zeros((1, 3)), np.array([[0.0, 1.0, 0.0]]), support_cells(ours.cells.position, 0.15))
    rows = Level(ours, theirs, gauges, 0.15, 0.15).comparison.rows(np.zeros((len(ours.cells), 3)), 0.01)
    assert rows.valid.mean() > 0.9
    ratio = np.mean(rows.misfit[rows.valid] ** 2) / np.mean(rows.variance[rows.valid, 2])
    assert ratio == pytest.approx(1.0, abs=0.13)
