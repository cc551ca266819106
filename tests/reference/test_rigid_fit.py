# SPDX-License-Identifier: MIT
"""The closed-form rigid fit against published and independently computed values.

The reflection trap is the set-up of Umeyama 1991 (inputs seen in several public tests; numbers recomputed with c = 1),
the 3-D case is a closed form, the covariance is the textbook one of a centred point set.
"""

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.errors import OptionError, RegistrationError
from scanstrain.registration import rigid_fit

POINTS = np.array([[0, 0, 0], [10, 0, 0], [0, 6, 0], [0, 0, 4], [10, 6, 4]], float)
R_TRUE = np.array(
    [
        [0.85286853, -0.51120416, -0.10623361],
        [0.49240388, 0.85516270, -0.16197278],
        [0.17364818, 0.08583165, 0.98106026],
    ]
)
SHIFT = np.array([100, -50, 7.5])


def exact_rotation():
    """Rz(30) Ry(-10) Rx(5) to full precision; R_TRUE is the printed form."""
    return Rotation.from_euler("xyz", [5, -10, 30], degrees=True).as_matrix()


def test_a_mirrored_set_gives_a_rotation_and_no_reflection():
    source = np.array([[0, 0], [1, 0], [0, 2]], float)
    target = np.array([[0, 0], [-1, 0], [0, 2]], float)
    T, residuals = rigid_fit(source, target)
    np.testing.assert_allclose(T[:2, :2], [[0.83205029, 0.55470020], [-0.55470020, 0.83205029]], atol=1e-8)
    np.testing.assert_allclose(T[:2, 2], [-0.98048356, 0.29686654], atol=1e-8)
    assert (residuals**2).sum() / 3 == pytest.approx(0.61975499, abs=1e-8)


def test_a_mirrored_solid_gives_a_rotation_and_no_reflection():
    T, residuals = rigid_fit(POINTS, POINTS * [1, 1, -1])
    assert np.linalg.det(T[:3, :3]) == pytest.approx(1.0)
    assert np.abs(residuals).max() > 0.1


def test_exact_motion_in_space():
    R = exact_rotation()
    np.testing.assert_allclose(R, R_TRUE, atol=5e-9)
    T, residuals = rigid_fit(POINTS, POINTS @ R.T + SHIFT)
    np.testing.assert_allclose(T[:3, :3], R, atol=1e-12)
    np.testing.assert_allclose(T[:3, 3], SHIFT, atol=1e-11)
    np.testing.assert_allclose(T[:3, :3] @ POINTS[-1] + T[:3, 3], [105.03652596, -40.59287619, 13.67571273], atol=1e-8)
    assert np.abs(residuals).max() < 1e-12


def test_agrees_with_scipy_on_noisy_weighted_points():
    rng = np.random.default_rng(5)
    target = POINTS @ exact_rotation().T + SHIFT + rng.normal(0, 0.02, POINTS.shape)
    w = rng.uniform(0.5, 2, len(POINTS))
    T, residuals = rigid_fit(POINTS, target, w)
    centre = [np.average(each, axis=0, weights=w) for each in (POINTS, target)]
    expected, rssd = Rotation.align_vectors(target - centre[1], POINTS - centre[0], weights=w)
    np.testing.assert_allclose(T[:3, :3], expected.as_matrix(), atol=1e-12)
    assert np.sqrt((w[:, None] * residuals**2).sum()) == pytest.approx(rssd, rel=1e-9)


def test_uniform_stretch_stays_in_the_residuals():
    """A similarity fit would report 500 ppm of scale and no residual at all."""
    T, residuals = rigid_fit(POINTS, 1.0005 * POINTS)
    np.testing.assert_allclose(T[:3, :3], np.eye(3), atol=1e-12)
    np.testing.assert_allclose(residuals, 0.0005 * (POINTS - POINTS.mean(axis=0)), atol=1e-12)


def test_scatter_of_the_fit_is_that_of_the_textbook():
    """Sd of rotation s sqrt(diag((sum |x|^2 I - x x')^-1)) = 256.2, 171.1, 157.2 urad and 0.894 mm for s = 2 mm."""
    rng = np.random.default_rng(11)
    centred = POINTS - POINTS.mean(axis=0)
    fits = [rigid_fit(centred, centred + rng.normal(0, 0.002, centred.shape))[0] for _ in range(2000)]
    turns = np.array([Rotation.from_matrix(T[:3, :3]).as_rotvec() for T in fits])
    # 2000 draws know a standard deviation to 1.6 %.
    np.testing.assert_allclose(turns.std(axis=0) * 1e6, [256.2, 171.1, 157.2], rtol=0.06)
    np.testing.assert_allclose(np.array([T[:3, 3] for T in fits]).std(axis=0) * 1e3, 0.894, rtol=0.06)


@pytest.mark.parametrize(
    ("source", "target", "weights"),
    [
        (POINTS[:, :1], POINTS[:, :1], None),
        (POINTS, POINTS[:-1], None),
        (POINTS, POINTS, np.ones(4)),
        (POINTS, POINTS, -np.ones(5)),
        (POINTS, POINTS, np.zeros(5)),
        (POINTS, np.full_like(POINTS, np.nan), None),
    ],
)
def test_wrong_input_is_refused(source, target, weights):
    with pytest.raises(OptionError, match="rigid_fit: required"):
        rigid_fit(source, target, weights)


@pytest.mark.parametrize("points", [np.outer(np.arange(3.0), [1, 2, 3]), np.ones((4, 3)), POINTS[:1]])
def test_points_on_one_line_do_not_fix_a_rotation(points):
    with pytest.raises(RegistrationError, match="span"):
        rigid_fit(points, points + 1.0)
