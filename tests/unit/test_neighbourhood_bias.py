# SPDX-License-Identifier: MIT
"""The bias of a gauge against what least squares over its disc really makes of a known motion."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest
from scipy.special import erf, jv

from scanstrain.neighbourhood.bias import gauge_bias
from scanstrain.neighbourhood.joint_cuts import cuts_at
from scanstrain.neighbourhood.polynomials import leakage, moments

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
L, SPACING = 0.6, 0.15
RADIUS = L / 2
SIZE = 3.0
STEP = 0.02
"""Between points [m]."""
SD = np.array([1e-7] * 3 + [1e-6] * 6 + [1e-5] * 3)
"""Standard errors of (nearly) free of noise gauges."""


def cloud(step=STEP, *, hole=lambda x, y: np.zeros(len(x), bool)):
    """Points on a wall in the plane z = 0."""
    x, y = (each.ravel() for each in np.meshgrid(*[np.arange(step / 2, SIZE, step)] * 2, indexing="ij"))
    seen = ~hole(x, y)
    return np.stack([x[seen], y[seen], np.zeros(seen.sum())], axis=1)


def basis(d, order):
    x, y = d[:, 0], d[:, 1]
    columns = [np.ones(len(d)), x, y] + ([x * x / 2, x * y, y * y / 2] if order == 2 else [])
    return np.stack(columns, axis=1)


def measured(motion, points, *, sd=SD, noise=None):
    """A field whose gauges are least-squares fits of `motion(x, y)` to the points of their discs, and the fits."""
    x, y = (each.ravel() for each in np.meshgrid(*[np.arange(SPACING, SIZE, SPACING)] * 2, indexing="ij"))
    places = np.stack([x, y, np.zeros(len(x))], axis=1)
    fits, status = [], []
    for place in places:
        d = (points - place)[:, :2]
        inside = np.hypot(*d.T) < RADIUS
        d = d[inside]
        status.append(0 if len(d) > 0.35 * np.pi * (RADIUS / STEP) ** 2 else 3)
        u = motion(*(d + place[:2]).T)
        if noise is not None:
            u = u + noise[inside]
        plane, normal = (np.linalg.lstsq(basis(d, order), u, rcond=None)[0] for order in (1, 2))
        fits.append(np.r_[plane[0, :2], normal[0, 2], plane[1:, 0], plane[1:, 1], normal[1:, 2]])
    fits = np.array(fits)
    field = FIELDS["affine_field"](
        places, np.eye(3), displacement=fits[:, :3], gradient=fits[:, 3:9].reshape(-1, 3, 2), hessian=fits[:, 9:],
        sd=sd, status=status, gauge_length=L, gauge_spacing=SPACING, points=700,
    )  # fmt: skip
    return field, fits


def bump(width, peak=1e-3):
    """Uniaxial strain peak * exp(-4 ln 2 (x - middle)^2 / width^2) along x, and the strain itself."""
    b = 2 * np.sqrt(np.log(2)) / width

    def motion(x, y):
        u = peak * np.sqrt(np.pi) / (2 * b) * erf(b * (x - SIZE / 2))
        return np.stack([u, 0 * x, 0 * x], axis=1)

    return motion, lambda x: peak * np.exp(-((b * (x - SIZE / 2)) ** 2))


@pytest.mark.parametrize("width", [2 * L, 4 * L])
def test_the_bias_of_a_strain_bump_is_that_of_the_fit(width):
    motion, strain = bump(width)
    points = cloud()
    field, fits = measured(motion, points)
    true = fits[:, 3] - strain(field.position[:, 0])
    bias = gauge_bias(field, points)[:, 3]
    middle = np.abs(field.position - SIZE / 2)[:, :2].max(axis=1) < 0.05
    # transfer of an affine fit over a disc, 8 J2(k R) / (k R)^2, averaged over the spectrum of the bump
    k = np.linspace(1e-6, 8, 20001) * 2 * np.sqrt(2 * np.log(2)) / width
    spectrum = np.exp(-((k * width) ** 2) / (16 * np.log(2)))
    loss = 1 - np.average(8 * jv(2, k * RADIUS) / (k * RADIUS) ** 2, weights=spectrum)
    assert -true[middle].mean() / 1e-3 == pytest.approx(loss, rel=0.05)
    assert 0.5 < (bias[middle] / true[middle]).mean() < 2.0
    assert np.abs(bias[middle] / true[middle] - 1).max() < 0.5


def test_where_a_patch_is_one_sided_the_bias_is_larger_and_known():
    motion, strain = bump(4 * L)
    points = cloud(hole=lambda x, y: x < 1.0)
    field, fits = measured(motion, points)
    edge = np.isclose(field.position[:, 0], 1.05) & (np.abs(field.position[:, 1] - SIZE / 2) < 0.6)
    true = (fits[:, 3] - strain(field.position[:, 0]))[edge]
    bias = gauge_bias(field, points)[edge, 3]
    whole = np.abs(measured(motion, cloud())[1][:, 3] - strain(field.position[:, 0]))[edge]
    assert np.abs(true).min() > 5 * whole.max()
    # Within a factor of two: what gauges on one side show of the second order is half of what the fit misses.
    np.testing.assert_allclose(bias, true, rtol=0.52)


def test_the_bias_of_a_dome_is_that_of_the_fit():
    width = 0.6

    def motion(x, y):
        w = np.exp(-((x - SIZE / 2) ** 2 + (y - SIZE / 2) ** 2) / width**2)
        return np.stack([0 * x, 0 * x, w], axis=1) * 1e-3

    points = cloud()
    field, fits = measured(motion, points)
    x, y = (field.position[:, :2] - SIZE / 2).T
    w = 1e-3 * np.exp(-(x**2 + y**2) / width**2)
    truth = np.stack(
        [w, -2 * x * w / width**2, -2 * y * w / width**2, (4 * x**2 / width**4 - 2 / width**2) * w], axis=1
    )
    columns = [2, 7, 8, 9]
    true, bias = fits[:, columns] - truth, gauge_bias(field, points)[:, columns]
    inner = np.hypot(x, y) < 0.8
    for k in range(4):
        large = inner & (np.abs(true[:, k]) > 0.3 * np.abs(true[inner, k]).max())
        assert 0.5 < np.median(bias[large, k] / true[large, k]) < 2.0
        assert np.corrcoef(bias[inner, k], true[inner, k])[0, 1] > 0.95


def test_noise_alone_shows_no_bias_more_often_than_it_should():
    points = cloud()
    unit = np.sqrt(STEP**2 / (np.pi * RADIUS**2))  # standard error of a mean over a disc
    slope, bend = 2 * unit / RADIUS, np.sqrt(24) * unit / RADIUS**2
    sd = np.array([unit] * 2 + [2 * unit] + [slope] * 6 + [np.sqrt(3) * bend, bend, np.sqrt(3) * bend])
    noise = np.random.default_rng(5).normal(size=(len(points), 3))
    field, _ = measured(lambda x, y: np.zeros((len(x), 3)), points, sd=sd, noise=noise)
    bias = gauge_bias(field, points)
    inner = (np.abs(field.position[:, :2] - SIZE / 2) < 0.9).all(axis=1)
    # beyond one standard error: 32 % of a normal distribution
    assert 0.15 < (bias[inner] != 0).mean() < 0.45
    added = np.nanmean(bias[inner] ** 2, axis=0) / sd**2
    assert added.max() < 0.2


def test_a_rigid_motion_of_a_curved_surface_shows_no_bias():
    theta, y = (each.ravel() for each in np.meshgrid(np.arange(0, np.pi, 0.05), np.arange(0, 2, 0.15), indexing="ij"))
    radius = 3.0
    out = np.stack([np.cos(theta), 0 * theta, np.sin(theta)], axis=1)
    hoop = np.stack([-np.sin(theta), 0 * theta, np.cos(theta)], axis=1)
    frame = np.stack([hoop, np.tile([0.0, 1.0, 0.0], (len(theta), 1)), -out], axis=2)
    position = radius * out + y[:, None] * [0, 1, 0]
    w, t = np.array([2e-3, -1e-3, 3e-3]), np.array([1e-3, 2e-3, -1e-3])
    moved = np.einsum("gik,gi->gk", frame, np.cross(w, position) + t)
    turned = np.einsum("gik,gij->gkj", frame, np.cross(w, frame[:, :, :2], axisb=1, axisc=1))
    field = FIELDS["affine_field"](
        position, frame, displacement=moved, gradient=turned, shape=[1 / radius, 0, 0], sd=SD, gauge_length=L,
        gauge_spacing=SPACING,
    )  # fmt: skip
    bias = gauge_bias(field, position)
    assert np.nanmax(np.abs(bias) / SD) < 1e-3


def test_a_joint_between_the_gauges_is_no_bias():
    points = cloud()
    field, _ = measured(lambda x, y: np.zeros((len(x), 3)), points)
    jump = np.where(field.position[:, 0] > SIZE / 2 + 0.01, 1e-3, 0.0)
    field.displacement[:, 0] = jump
    ends = np.array([[[SIZE / 2 + 0.02, 0.0, 0.0], [SIZE / 2 + 0.02, SIZE, 0.0]]])
    cuts = cuts_at(field.position, field.frame, field.shape, L, ends, np.array([1e-3]))
    assert np.nanmax(np.abs(gauge_bias(field, points)[:, :2])) > 1e-5
    assert np.nanmax(np.abs(gauge_bias(field, points, cuts)[:, :2])) < 1e-9


def test_few_gauges_and_lonely_ones_support_no_statement():
    points = cloud()
    field, _ = measured(lambda x, y: np.zeros((len(x), 3)), points)
    lonely = FIELDS["affine_field"](field.position[:5], np.eye(3), sd=SD)
    assert np.isnan(gauge_bias(lonely, points)).all()


def test_leakage_of_a_full_disc_is_the_second_order_of_the_transfer_function():
    x, y = (each.ravel() for each in np.meshgrid(*[np.linspace(-1, 1, 401)] * 2))
    inside = np.hypot(x, y) <= 1
    moment = moments(x[inside], y[inside], np.zeros(inside.sum(), np.int64), 1, 6)
    leak = leakage(moment, 1, 3)[0]
    # u = x^3 has the strain 3 x^2, whose Laplacian is 6: 6 R^2 / 12
    np.testing.assert_allclose(leak[1, 3], 0.5, rtol=0.01)
    np.testing.assert_allclose(leak[0, 0], 0.25, rtol=0.01)  # the mean of x^2
