# SPDX-License-Identifier: MIT
"""From two sides to opening, slip, step and hinge angle: signs, errors, tests, means."""

import numpy as np
import pytest
from scipy.stats import chi2

from scanstrain.neighbourhood.joint_jumps import OVERLAP, Side, jumps_between
from scanstrain.neighbourhood.result import Status

U1, U2, UN, GN1 = 0, 1, 2, 7
FRAME = np.eye(3)


def side(values, *, sd=1.0, observable=True, status=Status.FINE):
    k = len(values)
    seen = np.broadcast_to(observable, (k, 12)) & (status == Status.FINE)
    return Side(
        np.asarray(values, float),
        np.broadcast_to(np.eye(12) * sd**2, (k, 12, 12)),
        seen,
        np.full(k, status, np.uint8),
        np.full(k, 99),
    )


def between(right, left):
    k = len(right.values)
    along = np.arange(k, dtype=float)
    return jumps_between("j", along, np.zeros((k, 3)), np.broadcast_to(FRAME, (k, 3, 3)), right, left)


def unknowns(k=1, **named):
    values = np.zeros((k, 12))
    for name, value in named.items():
        values[:, {"u1": U1, "u2": U2, "un": UN, "gn1": GN1}[name]] = value
    return values


@pytest.mark.parametrize(
    ("right", "left", "jump"),
    [
        ({"u1": 1.0}, {"u1": 0.5}, [0.5, 0, 0, 0]),  # the right side moves to the right
        ({"u2": 1.0}, {"u2": -1.0}, [0, 2, 0, 0]),
        ({"un": 1.0}, {}, [0, 0, 1, 0]),
        ({"gn1": -1.0}, {"gn1": 2.0}, [0, 0, 0, 3]),  # a roof towards the free side
    ],
)
def test_signs_of_a_jump(right, left, jump):
    result = between(side(unknowns(**right)), side(unknowns(**left)))
    np.testing.assert_allclose(result.values, [jump])


def test_a_rotation_common_to_both_sides_is_no_jump():
    both = unknowns(u1=1.0, u2=2.0, un=3.0, gn1=4.0)
    result = between(side(both), side(both))
    np.testing.assert_array_equal(result.values, np.zeros((1, 4)))
    assert result.significance[0] == result.mean_significance == 1.0


def test_errors_of_both_sides_add():
    result = between(side(unknowns(), sd=3.0), side(unknowns(), sd=4.0))
    np.testing.assert_allclose(result.sd, np.full((1, 4), 5.0))


def test_what_one_side_does_not_support_is_no_number():
    seen = np.ones(12, bool)
    seen[[U1, U2]] = False
    result = between(side(unknowns(un=3.0), observable=seen), side(unknowns()))
    np.testing.assert_array_equal(np.isnan(result.values), [[True, True, False, False]])
    np.testing.assert_array_equal(np.isnan(result.sd), [[True, True, False, False]])
    np.testing.assert_array_equal(np.isnan(result.mean), [True, True, False, False])
    assert result.significance[0] == pytest.approx(chi2.sf(9.0 / 2.0, 2))
    assert result.reason(0) == "opening and slip: the data do not support it"


def test_a_side_without_a_fit_gives_nothing_and_says_why():
    result = between(side(unknowns()), side(unknowns(), status=Status.NO_OVERLAP))
    assert np.isnan(result.values).all()
    assert np.isnan(result.significance).all()
    assert np.isnan(result.mean_significance)
    assert result.reason(0) == "left side: the current epoch does not show this place"


def test_the_whole_joint_is_tested_by_halves_that_share_no_point():
    values = unknowns(4)
    values[[0, 2], UN] = 5.0
    result = between(side(values), side(unknowns(4)))
    assert result.mean_significance == pytest.approx(2 * chi2.sf(2 * 5.0**2 / 2, 8))
    assert result.significance[1] == 1.0


def test_means_weigh_by_variance_and_count_shared_points():
    result = between(side(unknowns(2, un=1.0)), side(unknowns(2)))
    assert result.mean[2] == 1.0
    assert result.mean_sd[2] == pytest.approx(np.sqrt(2.0) * np.sqrt((1 + OVERLAP[2]) / 2))


def test_overlap_is_that_of_half_discs():
    """Least squares on a fine grid of points: an affine and a quadratic fit, one radius apart along the edge."""
    n = 150
    x, y = (c.ravel() for c in np.meshgrid((np.arange(n) + 0.5) / n, (np.arange(-n, n) + 0.5) / n, indexing="ij"))
    disc = x**2 + y**2 < 1
    x1, y1 = x[disc], y[disc]
    affine = np.array([np.ones_like(x1), x1, y1])
    quadratic = np.vstack([affine, x1 * x1, x1 * y1, y1 * y1])
    expected = []
    for design, row in ((affine, 0), (affine, 0), (quadratic, 0), (quadratic, 1)):
        weights = np.zeros(x.shape)
        weights[disc] = np.linalg.solve(design @ design.T, design)[row]
        grid = weights.reshape(n, 2 * n)
        expected.append((grid[:, n:] * grid[:, :-n]).sum() / (grid**2).sum())
    np.testing.assert_allclose(OVERLAP, expected, atol=0.02)
