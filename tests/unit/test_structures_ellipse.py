# SPDX-License-Identifier: MIT
"""The ellipse by orthogonal distance: exact where data are, honest where they are not."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import least_squares

from scanstrain.structures.ellipse import direct_ellipse, fit_ellipse, ovality_gradient


@pytest.fixture
def rng():
    return np.random.default_rng(5)


def ellipse_points(turn, *, a, b, lean, centre=(0.0, 0.0)):
    """Places at the angles `turn` of an ellipse, in the textbook's form: semi-axes and the angle of the longer one."""
    x, y = a * np.cos(turn), b * np.sin(turn)
    c, s = np.cos(lean), np.sin(lean)
    return centre[0] + c * x - s * y, centre[1] + s * x + c * y


@pytest.mark.parametrize(("a", "b", "lean"), [(3.0, 3.0, 0.0), (3.02, 2.98, 0.4), (3.02, 2.98, 1.9), (4.0, 2.5, -0.7)])
@pytest.mark.parametrize("share", [1.0, 0.6])
def test_an_exact_ellipse_is_recovered_from_any_arc(a, b, lean, share):
    x, y = ellipse_points(np.linspace(-np.pi, np.pi, 150) * share, a=a, b=b, lean=lean, centre=(0.3, -0.2))
    for parameters in (direct_ellipse(x, y, np.ones(150)), fit_ellipse(x, y, np.ones(150)).parameters):
        cx, cy, m, p, q = parameters
        np.testing.assert_allclose([cx, cy], [0.3, -0.2], atol=1e-6)
        np.testing.assert_allclose([m + np.hypot(p, q), m - np.hypot(p, q)], [a, b], atol=1e-6)
        if a > b:
            assert np.sin(np.arctan2(q, p) / 2 - lean) == pytest.approx(0.0, abs=1e-6)


def test_ovality_is_the_difference_of_diameters_over_their_mean():
    x, y = ellipse_points(np.linspace(-np.pi, np.pi, 150), a=3.03, b=2.97, lean=0.3)
    ellipse = fit_ellipse(x, y, np.ones(150))
    assert ellipse.ovality == pytest.approx(0.02, rel=1e-9)
    assert ellipse.mean_diameter == pytest.approx(6.0, rel=1e-9)
    steps = 1e-6 * np.eye(5)
    slope = [(2 * np.hypot(*p[3:]) / p[2] - 0.02) / 1e-6 for p in ellipse.parameters + steps]
    np.testing.assert_allclose(ovality_gradient(ellipse.parameters), slope, atol=1e-5)


def test_the_fit_is_that_of_a_general_optimiser_on_distances_to_a_dense_curve(rng):
    turn = rng.uniform(-2.0, 2.0, 80)
    x, y = ellipse_points(turn, a=3.1, b=2.8, lean=0.5)
    x, y = x + 0.02 * rng.normal(size=80), y + 0.02 * rng.normal(size=80)

    def distances(parameters):
        a, b, lean, cx, cy = parameters[:5]
        fx, fy = ellipse_points(parameters[5:], a=a, b=b, lean=lean, centre=(cx, cy))
        return np.r_[x - fx, y - fy]

    start = np.r_[3.1, 2.8, 0.5, 0, 0, turn]
    other = least_squares(distances, start, xtol=1e-14, ftol=1e-14, gtol=1e-14).x
    cx, cy, m, p, q = fit_ellipse(x, y, np.ones(80)).parameters
    np.testing.assert_allclose([m + np.hypot(p, q), m - np.hypot(p, q), cx, cy], other[[0, 1, 3, 4]], atol=2e-5)


def test_gross_errors_do_not_count(rng):
    turn = np.linspace(-np.pi, np.pi, 190) * 0.7
    x, y = ellipse_points(turn, a=3.01, b=2.99, lean=0.0)
    x, y = x + 3e-4 * rng.normal(size=190), y + 3e-4 * rng.normal(size=190)
    x[60:66] *= 0.98
    y[60:66] *= 0.98
    ellipse = fit_ellipse(x, y, np.ones(190))
    assert ellipse.mean_diameter == pytest.approx(6.0, abs=4 * 2 * np.sqrt(ellipse.covariance[2, 2]))
    assert (ellipse.weight[60:66] == 0).all()


@pytest.mark.parametrize("share", [1.0, 0.6])
def test_intervals_of_the_mean_diameter_hold_and_it_is_unbiased(share, rng):
    turn, weight = np.linspace(-np.pi, np.pi, 190) * share, np.full(190, 40.0)
    x, y = ellipse_points(turn, a=3.01, b=2.99, lean=0.2)
    off, said = np.empty(500), np.empty(500)
    for k in range(500):
        noise = 0.002 / np.sqrt(40) * rng.normal(size=190)
        ellipse = fit_ellipse(x + noise * x / 3, y + noise * y / 3, weight)
        off[k], said[k] = ellipse.mean_diameter - 6.0, 2 * np.sqrt(ellipse.covariance[2, 2])
    assert 0.93 <= (np.abs(off) < 1.96 * said).mean() <= 0.97
    assert abs(off.mean()) < 4 * said.mean() / np.sqrt(500)
    # errors of the diameter grow where a part of the ring is hidden, and the leverage says so
    assert said.mean() == pytest.approx(off.std(), rel=0.1)


def test_too_few_places_or_a_line_give_no_ellipse(rng):
    t = np.linspace(0, 1, 9)
    assert fit_ellipse(np.cos(t), np.sin(t), np.ones(9)) is None
    t = np.linspace(0, 1, 50)
    assert fit_ellipse(t, 2 * t, np.ones(50)) is None
