# SPDX-License-Identifier: MIT
"""The test of single observations against hand-computed values and the constants of the literature.

Line fit of four weighted observations: worked in rational arithmetic by hand. Critical value 3.29 and the
non-centrality 17.07 at 0.1 % and 80 %: Baarda 1968, Teunissen 2024.
"""

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.registration.adjustment import adjust, critical_value

DESIGN = np.c_[np.ones(4), np.arange(4.0)]
OBSERVED = np.array([1.0, 2.1, 2.9, 4.2])
SD = np.array([0.1, 0.1, 0.2, 0.1])


def test_a_weighted_line():
    done = adjust(DESIGN, OBSERVED, np.diag(SD**2))
    np.testing.assert_allclose(done.estimate, [1.00645161, 1.05645161], atol=5e-9)
    np.testing.assert_allclose(done.covariance, [[0.00709677, -0.00290323], [-0.00290323, 0.00209677]], atol=5e-9)
    assert done.total == pytest.approx(1.40322581, abs=5e-9)
    np.testing.assert_allclose(done.redundancy, [0.29032258, 0.66129032, 0.90322581, 0.14516129], atol=5e-9)
    np.testing.assert_allclose(done.w, [-0.11974, 0.45618, -1.15404, 0.63500], atol=5e-6)
    np.testing.assert_allclose(done.detectable, [0.76689, 0.50813, 0.86957, 1.08454], atol=2e-5)


def test_the_largest_w_names_the_blunder():
    done = adjust(DESIGN, OBSERVED + np.array([0, 0.8, 0, 0]), np.diag(SD**2))
    assert done.total == pytest.approx(49.66129, abs=5e-6)
    np.testing.assert_allclose(done.w, [-6.34605, 6.96176, -2.24019, -3.09034], atol=5e-6)
    assert np.abs(done.w).argmax() == 1


@pytest.mark.parametrize(("alpha", "value"), [(0.001, 3.2905267), (0.01, 2.5758293), (0.05, 1.9599640)])
def test_critical_values(alpha, value):
    assert critical_value(alpha) == pytest.approx(value, abs=5e-8)


@pytest.mark.parametrize(("alpha", "delta"), [(0.001, 4.1321480), (0.05, 2.8015852)])
def test_detectable_bias_of_an_observation_that_all_others_check(alpha, delta):
    """Each of n equal observations of one value has redundancy 1 - 1 / n."""
    n = 400
    done = adjust(np.ones((n, 1)), np.zeros(n), np.eye(n), alpha=alpha)
    np.testing.assert_allclose(done.detectable, delta / np.sqrt(1 - 1 / n), atol=1e-6)


def test_nothing_checks_an_observation_that_alone_fixes_an_unknown():
    done = adjust(np.array([[1.0, 0], [1, 0], [0, 1]]), np.array([1.0, 1.2, 3]), np.eye(3))
    assert np.isnan(done.w[2])
    assert np.isinf(done.detectable[2])
    assert done.redundancy[2] == pytest.approx(0, abs=1e-12)


def test_turning_correlated_observations_changes_nothing_but_their_own_tests():
    """A fit does not depend on the axes in which its observations are written."""
    rng = np.random.default_rng(1)
    A, y = rng.normal(size=(9, 3)), rng.normal(size=9)
    C = np.diag(rng.uniform(0.5, 2, 9))
    Q = np.linalg.qr(rng.normal(size=(9, 9)))[0]
    plain, turned = adjust(A, y, C), adjust(Q @ A, Q @ y, Q @ C @ Q.T)
    np.testing.assert_allclose(turned.estimate, plain.estimate, atol=1e-12)
    np.testing.assert_allclose(turned.covariance, plain.covariance, atol=1e-12)
    assert turned.total == pytest.approx(plain.total)
    assert turned.redundancy.sum() == pytest.approx(6)


def test_unknowns_that_nothing_fixes_are_refused():
    with pytest.raises(OptionError, match="fix 2 unknowns"):
        adjust(np.ones((4, 2)), OBSERVED, np.eye(4))
