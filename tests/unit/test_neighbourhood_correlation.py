# SPDX-License-Identifier: MIT
"""Noise that neighbours share: found in the scans, absent where there is none, and counted in the standard errors."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.distance import cdist
from scipy.special import erf

from scanstrain.neighbourhood import fit_affine
from scanstrain.neighbourhood.correlation import LADDER, PATCH, SQUARES, fit_components
from scanstrain.neighbourhood.sandwich import shared_middle
from scanstrain.neighbourhood.squares import REACH, quadratic_forms, spread, taps
from scanstrain.strain import compute_strain
from scanstrain.synthetic import Lining, Ovalisation, Scene, Still, Sum, Wall, sample_epoch

MEASURES = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))
GAUGE = 0.3
LENGTHS = GAUGE * np.array(LADDER)
ACROSS = int(PATCH * SQUARES)
WIDTH = GAUGE / SQUARES
SHARE, LENGTH = 0.2, 0.05
"""Share of the noise variance that neighbours share in the drawn scenes, and over which lag [m]."""


def disc():
    """Counts of the squares of a patch, about two points each, and places and numbers of those that hold any."""
    side = (np.arange(ACROSS) + 0.5) / ACROSS * 2 - 1
    x, y = np.meshgrid(side, side, indexing="ij")
    counts = np.where(np.hypot(x, y) < 1, np.random.default_rng(3).poisson(2.0, x.shape), 0).astype(float)
    where = np.flatnonzero(counts.ravel())
    return counts, np.stack([x.ravel(), y.ravel()], axis=1)[where], where


def forms(shared, patches, seed, bump=0.0, bumped=0):
    """Quadratic forms of drawn patches with unit noise per point and the shared covariance `shared(distance)`."""
    rng = np.random.default_rng(seed)
    counts, x, where = disc()
    A = np.stack([np.ones(len(x)), *x.T, x[:, 0] ** 2, x[:, 0] * x[:, 1], x[:, 1] ** 2], axis=1)
    c = counts.ravel()[where]
    root = np.linalg.cholesky(shared(cdist(x, x) * GAUGE * PATCH / 2) + 1e-9 * np.eye(len(x)))
    hat = np.eye(len(x)) - A @ np.linalg.solve(A.T * c @ A, A.T * c)
    q, T = np.zeros((patches, len(LENGTHS) + 1)), np.zeros((patches, len(LENGTHS) + 1, len(LENGTHS) + 1))
    design, residual = np.zeros((ACROSS**2, 6)), np.zeros(ACROSS**2)
    design[where] = A * c[:, None]
    for p in range(patches):
        y = rng.standard_normal(len(x)) / np.sqrt(c) + root @ rng.standard_normal(len(x))
        y += (p < bumped) * bump * np.exp(-20 * (x**2).sum(axis=1))
        residual[where] = c * (hat @ y)
        square = (ACROSS, ACROSS)
        quadratic_forms(
            design.reshape(*square, 6), residual.reshape(*square, 1), counts[..., None], WIDTH, LENGTHS, q[p], T[p]
        )
    return q, T


def gaussian(variance, length):
    """A covariance between the means of squares."""
    wide = length**2 + WIDTH**2 / 3
    return lambda d: variance * length**2 / wide * np.exp(-(d**2) / wide)


def test_spreading_keeps_the_integral_of_the_correlation():
    point, out = np.zeros((41, 41, 1)), np.empty((41, 41, 1))
    point[20, 20] = 1.0
    spread(point, taps(0.05, 0.01), out)
    # The integral of a Gaussian, cut off at REACH along both axes, over the area of a square.
    assert out.sum() == pytest.approx(np.pi * (0.05 / 0.01 * erf(REACH)) ** 2, rel=0.01)


@pytest.mark.parametrize("length", LENGTHS)
def test_the_middle_of_the_sandwich_is_the_sum_over_all_pairs(length):
    rng = np.random.default_rng(1)
    x = rng.uniform(-1, 1, (1500, 2))
    x = x[np.hypot(*x.T) < 1]
    rows = np.stack([np.ones(len(x)), *x.T, x[:, 0] * x[:, 1]])
    w, unit = rng.uniform(1, 3, len(x)), rng.uniform(0.5, 2, len(x))
    place = np.minimum((x + 1) / 2 * SQUARES, SQUARES - 1).astype(np.int64)
    found = shared_middle(rows, w, unit, place, SQUARES, WIDTH, np.array([length]), np.array([0.3]))
    a = rows * w * np.sqrt(unit)
    exact = 0.3 * a @ np.exp(-((cdist(x, x) * GAUGE / 2 / length) ** 2)) @ a.T
    size = np.sqrt(np.outer(np.diag(exact), np.diag(exact)))
    # Rows stand in squares, not at their places, and a row's own noise is spread over its square.
    np.testing.assert_allclose(found / size, exact / size, atol=0.06)


def test_effective_number_of_a_mean_is_the_area_over_that_of_the_correlation():
    """Far smaller than the patch, a Gaussian correlation leaves n_eff = area / (pi length^2), less a rim."""
    side = (np.arange(200) + 0.5) / 200
    x = np.stack(np.meshgrid(side, side), axis=-1).reshape(-1, 2)
    one, place = np.ones((1, len(x))), (x * 100).astype(np.int64)
    total = shared_middle(one, one[0], one[0], place, 100, 0.01, np.array([0.02]), np.array([1.0]))[0, 0]
    # Rim of a square of side s: the integral of one axis is sqrt(pi) l - l^2 / s (closed form).
    assert len(x) ** 2 / total == pytest.approx(1 / (np.sqrt(np.pi) * 0.02 - 0.02**2) ** 2, rel=0.02)


@pytest.mark.parametrize("seed", range(2))
def test_independent_noise_is_called_independent(seed):
    part = fit_components(*forms(lambda d: 0 * d, 60, seed))
    assert not part.shared.any()
    assert part.own == pytest.approx(1.0, abs=0.02)


@pytest.mark.parametrize("length", [0.03, 0.05, 0.1])
def test_shared_noise_is_found_though_the_fit_takes_most_of_a_long_one(length):
    part = fit_components(*forms(gaussian(0.5, length), 60, 11))
    # What counts for a mean: variance times area of the correlation.
    area = (part.shared * LENGTHS**2).sum() / (0.5 * length**2)
    assert area == pytest.approx(1.0, abs=0.2)
    assert part.shared.sum() == pytest.approx(0.5, abs=0.1)


def test_exponential_correlation_is_matched_by_nested_ones():
    """The variance of a mean over a gauge, against the sum over all pairs of the true correlation."""
    part = fit_components(*forms(lambda d: 0.5 * np.exp(-d / 0.02), 60, 12))
    x = np.random.default_rng(2).uniform(-GAUGE / 2, GAUGE / 2, (1500, 2))
    d = cdist(*[x[np.hypot(*x.T) < GAUGE / 2]] * 2)
    found = sum(v * np.exp(-((d / length) ** 2)) for v, length in zip(part.shared, LENGTHS, strict=True))
    assert found.mean() == pytest.approx(0.5 * np.exp(-d / 0.02).mean(), rel=0.2)


def test_a_few_patches_that_deform_do_not_pass_for_noise():
    clean = fit_components(*forms(gaussian(0.5, 0.05), 40, 13))
    some = fit_components(*forms(gaussian(0.5, 0.05), 40, 13, bump=20.0, bumped=6))
    assert (some.shared * LENGTHS**2).sum() == pytest.approx((clean.shared * LENGTHS**2).sum(), rel=0.1)


def test_too_few_patches_say_nothing():
    assert not fit_components(*forms(gaussian(0.5, 0.05), 5, 14)).shared.any()


def no_change(scene, **noise):
    pair = [
        sample_epoch(scene, deformed=False, spacing=0.01, intensity_noise=30.0, seed=70 + k, **noise) for k in (0, 1)
    ]
    field = fit_affine(*pair, gauge_length=GAUGE, gauge_spacing=GAUGE / 2, required_strain_sd=0.02)
    return field, MEASURES["errors_of"](scene, field)


@pytest.mark.parametrize(
    "scene", [Scene(Wall(2.4, 2.4)), MEASURES["textured"](Wall(2.4, 2.4), Still())], ids=["bare", "textured"]
)
def test_no_change_under_shared_noise_is_seldom_called_a_change(scene):
    field, errors = no_change(scene, correlated_share=SHARE, correlation_length=LENGTH)
    shared = field.correlation.height
    assert shared.share == pytest.approx(SHARE, abs=0.05)
    assert shared.length == pytest.approx(LENGTH, abs=0.01)
    p = compute_strain(field).values["significance"][errors.inside]
    # Some 250 overlapping gauges; with the noise taken for independent 50-80 % fall below.
    assert np.mean(p[np.isfinite(p)] < 0.05) < 0.1
    z = np.concatenate([np.divide(*errors.of(name)) for name in ("un", "gn1", "gn2")])
    assert 0.7 < np.mean(z**2) < 1.3


def test_independent_noise_changes_no_standard_error():
    field, _ = no_change(Scene(Wall(1.5, 1.5)))
    assert field.correlation.height.share == 0.0
    assert set(field.correlation.factor) == {1.0}


@pytest.mark.parametrize("motion", [Still(), Sum((Ovalisation(5e-3),))], ids=["still", "ovalised"])
def test_slides_that_a_bare_lining_does_not_show_are_not_shared_noise(motion):
    """Every gauge holds a slide of its own by chance; on a curved surface they differ in height, too."""
    scene = Scene(Lining(0.9, 0.8), motion)
    pair = [sample_epoch(scene, deformed=bool(k), spacing=0.012, seed=70 + k) for k in (0, 1)]
    field = fit_affine(*pair, gauge_length=GAUGE, gauge_spacing=GAUGE / 2)
    assert field.correlation.height.share == 0.0
    assert set(field.correlation.factor) == {1.0}
