# SPDX-License-Identifier: MIT
"""The compiled local fit: exact on exact rows, and the same as its twin in NumPy on noisy ones."""

from __future__ import annotations

import numpy as np
import pytest

from scanstrain.cells import group, tangents, voxel_keys
from scanstrain.neighbourhood import fit
from scanstrain.neighbourhood.fit import ROUNDS, TUKEY, TUKEY_INFLATE, TUKEY_SHRINK, fit_gauges
from scanstrain.neighbourhood.solve import accumulate, inverse

RADIUS = 0.3
LOOSE = 1e9
"""Standard deviation of a prior that says nothing [m]."""
TANGENTIAL = [0, 1, 3, 4, 5, 6]


def test_normal_equations_are_those_of_numpy():
    rng = np.random.default_rng(0)
    rows, rhs, w = rng.standard_normal((12, 601)), rng.standard_normal(601), rng.random(601)
    N, b = np.zeros((14, 14)), np.zeros(14)
    accumulate(rows, rhs, w, N, b)
    np.testing.assert_allclose(np.tril(N)[:12, :12], np.tril((rows * w) @ rows.T), rtol=1e-11, atol=1e-11)
    np.testing.assert_allclose(b[:12], (rows * w) @ rhs, rtol=1e-11, atol=1e-11)
    assert not b[12:].any()


def test_inverse_of_a_lower_triangle_is_the_inverse():
    half = np.random.default_rng(1).standard_normal((20, 8))
    A, out = half.T @ half, np.empty((8, 8))
    assert inverse(np.tril(A), 8, out)
    np.testing.assert_allclose(out, np.linalg.inv(A), rtol=1e-9, atol=1e-12)
    assert not inverse(-np.eye(4), 4, np.empty((4, 4)))


def test_constants_of_the_weight_are_its_gaussian_integrals():
    """By drawing: the weighted variance, and the variance of a weighted mean against what its weights claim."""
    r = np.random.default_rng(2).standard_normal(4_000_000)
    r = np.clip(r, -TUKEY, TUKEY)
    w, slope = (1 - (r / TUKEY) ** 2) ** 2, (1 - (r / TUKEY) ** 2) * (1 - 5 * (r / TUKEY) ** 2)
    assert pytest.approx((w * r * r).sum() / w.sum(), abs=3e-3) == TUKEY_SHRINK
    assert pytest.approx(((w * r) ** 2).mean() / slope.mean() ** 2 * w.mean(), abs=3e-3) == TUKEY_INFLATE


class Patch:
    """Cells and rows of a few gauges on a rough, textured patch, with a motion that is exactly affine + quadratic."""

    def __init__(self, gauges=3, cells=900, seed=0, textured=True):
        rng = np.random.default_rng(seed)
        normal = np.array([0.48, -0.6, 0.64])
        self.frame = np.column_stack([np.array(tangents(*normal)).reshape(2, 3).T, normal])
        self.centre = np.column_stack([rng.uniform(-0.2, 0.2, (gauges, 2)), np.zeros(gauges)]) @ self.frame.T
        local = np.column_stack([rng.uniform(-0.6, 0.6, (cells, 2)), rng.normal(0, 2e-3, cells)])
        self.position = local @ self.frame.T
        slope = np.column_stack([rng.normal(0, 0.3, (cells, 2)), np.ones(cells)])
        self.slope = slope @ self.frame.T
        self.moved = rng.normal(0, 1e-3, (cells, 3))
        self.grey = rng.normal(0, 1.0, cells)
        self.grey_slope = (np.column_stack([rng.normal(0, 30.0, (cells, 2)), np.zeros(cells)])) @ self.frame.T
        self.variance = np.stack([rng.uniform(1, 3, cells) * 1e-7, rng.uniform(1, 3, cells) * 1e-3] * 2, axis=1) * [
            1.0,
            1.0,
            1.3,
            1.3,
        ]
        self.count = rng.integers(1, 5, cells).astype(float)
        self.valid = rng.random(cells) > 0.05
        self.gain, self.offset, self.textured = 1.1, 0.2, textured
        self.values = rng.normal(0, 1e-3, 12)
        self.match()

    def motion(self, g, values):
        """Displacement of every cell by scaled unknowns about gauge `g`; the tilt takes the height along."""
        x = (self.position - self.centre[g]) @ self.frame / RADIUS
        v = values
        u = np.stack(
            [
                v[0] + v[3] * x[:, 0] + v[4] * x[:, 1] - v[7] * x[:, 2],
                v[1] + v[5] * x[:, 0] + v[6] * x[:, 1] - v[8] * x[:, 2],
                v[2] + v[7] * x[:, 0] + v[8] * x[:, 1] + v[9] * x[:, 0] ** 2 / 2
                + v[10] * x[:, 0] * x[:, 1] + v[11] * x[:, 1] ** 2 / 2,
            ],
            axis=1,
        )  # fmt: skip
        return u @ self.frame.T

    def match(self):
        """Misfits and intensities that one motion about gauge 0 explains exactly."""
        short = self.moved - self.motion(0, self.values)
        self.misfit = np.einsum("ci,ci->c", self.slope, short)
        self.own_grey = self.gain * (self.grey - np.einsum("ci,ci->c", self.grey_slope, short)) + self.offset

    def table(self):
        """The observations in the columns that the fit reads."""
        table = np.zeros((len(self.position), fit.COLUMNS))
        for column, values in (
            (fit.POSITION, self.position),
            (fit.NORMAL, np.broadcast_to(self.frame[:, 2], self.position.shape)),
            (fit.COUNT, self.count),
            (fit.VALID, self.valid),
            (fit.MOVED, self.moved),
            (fit.MISFIT, self.misfit),
            (fit.SLOPE, self.slope),
            (fit.GREY, self.grey),
            (fit.GREY_SLOPE, self.grey_slope),
            (fit.VARIANCE, self.variance),
            (fit.OWN_GREY, self.own_grey),
        ):
            columns = np.reshape(values, (len(table), -1))
            table[:, column : column + columns.shape[1]] = columns
        return table

    def run(self, *, weak_prior=LOOSE, required=0.0, nuisance=LOOSE, hold=LOOSE, start=None, min_cells=30):
        order, key, begin = group(voxel_keys(self.position, RADIUS))
        g = len(self.centre)
        frame = np.broadcast_to(self.frame, (g, 3, 3)).copy()
        held = np.zeros((g, 12)) if start is None else start.copy()
        values, covariance = np.empty((g, 12)), np.zeros((g, 12, 12))
        data_sd, info = np.full((g, 12), np.inf), np.zeros((g, 6))
        fit_gauges(
            self.centre, frame, np.zeros((g, 3)), RADIUS, 0.1, weak_prior, np.full(12, float(required)),
            np.full(12, float(nuisance)), hold, min_cells, 5000, self.textured, key, begin, self.table()[order],
            np.full(g, self.gain), held, values, covariance, data_sd, info, np.zeros((0, 5)), np.zeros(g + 1, np.int64),
        )  # fmt: skip
        return {"values": values, "held": held, "covariance": covariance, "data_sd": data_sd, "info": info}


def test_patch_test_exact_rows_give_the_exact_motion():
    """The engineer's patch test: an affine motion with a quadratic normal part comes back to rounding."""
    patch = Patch()
    result = patch.run()
    np.testing.assert_allclose(result["values"][0], patch.values, atol=1e-10 * RADIUS)
    assert (result["info"][0, 3:5] < 1e-6).all()


def test_patch_test_holds_from_every_gauge():
    """An affine motion of all points is the same motion seen from any place."""
    patch = Patch()
    patch.values[9:] = 0.0
    patch.match()
    values = patch.run()["values"]
    for g in range(3):
        np.testing.assert_allclose(
            patch.motion(g, values[g]), patch.motion(0, patch.values), atol=1e-10 * RADIUS, err_msg=str(g)
        )


def test_patch_test_without_texture_needs_relief_only():
    patch = Patch(textured=False)
    result = patch.run()
    np.testing.assert_allclose(result["values"][0], patch.values, atol=1e-9 * RADIUS)
    assert np.isnan(result["info"][:, 4]).all()


def test_points_counted_are_those_of_matched_cells_in_the_disc():
    patch = Patch()
    info = patch.run()["info"]
    for g, centre in enumerate(patch.centre):
        near = np.hypot(*((patch.position - centre) @ patch.frame[:, :2]).T) <= RADIUS
        assert info[g, 0] == near.sum()
        assert info[g, 1] == (near & patch.valid).sum()
        assert info[g, 2] == patch.count[near & patch.valid].sum()


def test_too_few_cells_give_no_numbers():
    result = Patch().run(min_cells=2000)
    assert np.isnan(result["values"]).all()
    assert np.isinf(result["data_sd"]).all()


def noisy(seed=3, **options):
    patch = Patch(seed=seed, **options)
    rng = np.random.default_rng(100 + seed)
    n = len(patch.position)
    patch.misfit += rng.normal(0, np.sqrt(patch.variance[:, 2]))
    patch.own_grey += rng.normal(0, np.sqrt(patch.variance[:, 3]))
    gross = rng.random(n) < 0.05
    patch.misfit[gross] += rng.choice([-1, 1], gross.sum()) * 0.02
    patch.own_grey[gross] += 3.0
    return patch


SPENT = (6, 8)
"""Unknowns that each kind of row has to pay for: six normal ones; six tangential ones, gain and offset."""


def twin(patch, g, *, weak_prior, nuisance, hold, start):
    """The fit of one gauge in NumPy, from its description: rows, weights, variance factors, priors, covariance."""
    local = (patch.position - patch.centre[g]) @ patch.frame
    near = (np.hypot(local[:, 0], local[:, 1]) <= RADIUS) & patch.valid
    x = local[near] / RADIUS
    one, zero = np.ones(len(x)), np.zeros(len(x))

    def derivatives(direction, normal_part):
        s = direction @ patch.frame
        affine = [s[:, 0], s[:, 1], s[:, 2]]
        affine += [s[:, 0] * x[:, 0], s[:, 0] * x[:, 1], s[:, 1] * x[:, 0], s[:, 1] * x[:, 1]]
        affine += [s[:, 2] * x[:, 0] - s[:, 0] * x[:, 2], s[:, 2] * x[:, 1] - s[:, 1] * x[:, 2]]
        bend = [s[:, 2] * x[:, 0] ** 2 / 2, s[:, 2] * x[:, 0] * x[:, 1], s[:, 2] * x[:, 1] ** 2 / 2]
        return np.stack(affine + (bend if normal_part else [zero] * 3), axis=1)

    slope, moved = patch.slope[near], patch.moved[near]
    A = np.column_stack([derivatives(slope, True), zero, zero])
    a = np.einsum("ci,ci->c", slope, moved) - patch.misfit[near]
    gain, grey, e = patch.gain, patch.grey[near], patch.grey_slope[near]
    B = np.column_stack([derivatives(gain * e, False), grey - grey.mean(), one])
    b = patch.own_grey[near] - gain * grey + gain * np.einsum("ci,ci->c", e, moved)
    groups = [(A, a, patch.variance[near, 0], patch.variance[near, 2])]
    if patch.textured:
        groups.append((B, b, patch.variance[near, 1], patch.variance[near, 3]))
    n = 14 if patch.textured else 12
    solution, scales = np.r_[start, 0.0, 0.0], [1.0] * len(groups)
    for turn in range(ROUNDS):
        N, y = np.zeros((14, 14)), np.zeros(14)
        for k, (M, m, variance, spread) in enumerate(groups):
            r = (m - M @ solution) / np.sqrt(spread)
            scale = (1.4826 * np.median(np.abs(r))) ** 2 if turn == 0 else scales[k]
            w = np.clip(1 - r**2 / (TUKEY**2 * scale), 0, None) ** 2
            scales[k] = (w * r * r).sum() / (w.sum() - SPENT[k]) / TUKEY_SHRINK
            N += (M * (w / variance / scales[k])[:, None]).T @ M
            y += (M * (w / variance / scales[k])[:, None]).T @ m
        N[np.arange(12), np.arange(12)] += weak_prior**-2
        H, z = N.copy(), y.copy()
        H[TANGENTIAL, TANGENTIAL] += hold**-2
        z[TANGENTIAL] += start[TANGENTIAL] / hold**2
        solution[:n] = np.linalg.solve(H[:n, :n], z[:n])
    data_sd = np.sqrt(np.diag(np.linalg.inv(N[:n, :n]))[:12] * TUKEY_INFLATE)
    N[np.arange(12), np.arange(12)] += nuisance**-2
    inverse = np.linalg.inv(N[:n, :n])
    return solution[:12], (inverse @ y[:n])[:12], inverse[:12, :12] * TUKEY_INFLATE, data_sd, scales


@pytest.mark.parametrize("textured", [True, False])
def test_the_fit_is_its_numpy_twin(textured):
    patch = noisy(textured=textured)
    start = np.random.default_rng(9).normal(0, 2e-4, (3, 12))
    options = {"weak_prior": 10.0, "nuisance": 0.02, "hold": 0.005}
    result = patch.run(start=start, **options)
    for g in range(3):
        held, values, covariance, data_sd, scales = twin(patch, g, start=start[g], **options)
        np.testing.assert_allclose(result["held"][g], held, rtol=1e-8, atol=1e-13)
        np.testing.assert_allclose(result["values"][g], values, rtol=1e-8, atol=1e-13)
        np.testing.assert_allclose(result["covariance"][g], covariance, rtol=1e-7, atol=1e-18)
        np.testing.assert_allclose(result["data_sd"][g], data_sd, rtol=1e-8)
        np.testing.assert_allclose(result["info"][g, 3 : 3 + len(scales)], scales, rtol=1e-8)


def test_what_is_observed_is_not_bounded_and_the_rest_is():
    """Bounds apply to an unknown just where its standard error from the data alone exceeds what is required."""
    patch = noisy()
    free, bounded = patch.run(), patch.run(nuisance=1e-9)
    limit = 1.5 * free["data_sd"].max()
    np.testing.assert_array_equal(patch.run(required=limit, nuisance=1e-9)["values"], free["values"])
    assert (np.abs(bounded["values"]) < 1e-6).all()
    np.testing.assert_array_equal(bounded["data_sd"], free["data_sd"])


def test_gross_errors_do_not_reach_the_result():
    patch = noisy()
    result = patch.run()
    sd = np.sqrt(np.diag(result["covariance"][0]))
    assert (np.abs(result["values"][0] - patch.values) < 4.5 * sd).all()
    assert 0.8 < result["info"][0, 3] < 1.25


@pytest.mark.parametrize("cells", [2000, 400], ids=["some 390 cells a gauge", "some 80 cells a gauge"])
def test_stated_errors_are_those_that_happen(cells):
    """Three hundred gauges with noise of their own: mean squared error over stated variance, for all unknowns."""
    ratios = []
    for seed in range(300):
        patch = Patch(gauges=1, cells=cells, seed=seed)
        rng = np.random.default_rng(1000 + seed)
        patch.variance[:, :2] = patch.variance[:, 2:]
        patch.misfit += rng.normal(0, np.sqrt(patch.variance[:, 2]))
        patch.own_grey += rng.normal(0, np.sqrt(patch.variance[:, 3]))
        result = patch.run()
        error = result["values"][0] - patch.values
        ratios.append(error**2 / np.diag(result["covariance"][0]))
    np.testing.assert_allclose(np.mean(ratios, axis=0), 1.0, atol=5 * np.sqrt(2 / 300))
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.1)
