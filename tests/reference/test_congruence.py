# SPDX-License-Identifier: MIT
"""The test of congruence against a worked example, and the certainty of a rigid motion against closed forms."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.strain.bodies import body_motion
from scanstrain.strain.congruence import congruence_test, judge

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
NORMAL_ONLY = np.array([False, False, True, *[False] * 4, *[True] * 5])
S = 2e-3


def test_worked_example_of_two_epochs():
    """Computed by hand from T = d' Q^-1 d / (h s0^2); the F quantile is tabulated."""
    d, Q = np.array([1.2, -0.4, 2.9]), np.array([[2.0, 1, 0], [1, 2, 0], [0, 0, 2]])
    (s1, f1), (s2, f2) = (0.8, 12), (0.9, 8)
    pooled = (f1 * s1**2 + f2 * s2**2) / (f1 + f2)
    assert pooled == pytest.approx(0.708, abs=1e-12)
    found = congruence_test(d, Q, variance=pooled, dof=f1 + f2)
    assert found.rank == 3
    assert found.statistic == pytest.approx(2.6326114, abs=5e-8)
    assert found.p == pytest.approx(0.0780423, abs=5e-8)
    # the 95 % point of F(3, 20) in any table: 3.098
    assert judge(3 * 3.0983912, 3, dof=20).p == pytest.approx(0.05, abs=1e-7)


@pytest.mark.parametrize(("dof", "point"), [(3, 7.814728), (10, 18.307038), (30, 43.772972), (100, 124.342113)])
def test_a_known_variance_gives_the_chi_square_table(dof, point):
    assert judge(point, dof).p == pytest.approx(0.05, abs=1e-7)


@pytest.mark.parametrize(
    ("dofs", "point"), [((2, 8), 4.458970), ((3, 10), 3.708265), ((6, 60), 2.254053), ((1, 30), 4.170877)]
)
def test_an_estimated_variance_gives_the_f_table(dofs, point):
    assert judge(point * dofs[0], dofs[0], dof=dofs[1]).p == pytest.approx(0.05, abs=2e-7)


def test_singular_cofactors_count_their_rank_and_units_do_not_matter():
    """Differences in a network without a datum: the pseudo-inverse tests what they are free to show."""
    A = np.array([[1.0, -1, 0], [0, 1, -1], [-1, 0, 1]])
    e = np.array([0.5, -1.5, 2.0])
    d, Q = A @ e, A @ A.T
    found = congruence_test(d, Q)
    assert found.rank == 2
    assert found.statistic == pytest.approx(((e - e.mean()) ** 2).sum() / 2, rel=1e-9)
    units = np.array([1.0, 1e-3, 1e6])
    scaled = congruence_test(d * units, Q * np.outer(units, units))
    assert scaled.rank == 2


def rigid(position, frame):
    """Motion of a body of still gauges that see the normal displacement alone, 10 000 of them, 2 mm each."""
    field = FIELDS["affine_field"](
        position, frame, sd=np.full(12, S), observable=NORMAL_ONLY, gauge_length=1e-4, gauge_spacing=1e-4
    )
    return body_motion(field, name="body", gauges=np.ones(len(position), bool))


def test_plane_10_by_6_m():
    """Information of point-to-plane rows per point: a^2/12 = 8.333, b^2/12 = 3, 1, and nothing else: rank 3."""
    x, z = np.meshgrid((np.arange(125) - 62) * 0.08, (np.arange(80) - 39.5) * 0.075, indexing="ij")
    position = np.stack([x.ravel(), 0 * x.ravel(), z.ravel()], axis=1)
    motion = rigid(position, np.stack([[-1.0, 0, 0], [0, 0, 1], [0, 1, 0]], axis=1))
    assert motion.still.rank == 3
    n = len(position)
    assert motion.shift_sd == pytest.approx(S / np.sqrt(n), rel=1e-3)
    assert motion.lean_sd == pytest.approx(S / np.sqrt(3.0 * n), rel=1e-3)
    assert motion.yaw_sd == pytest.approx(S / np.sqrt(8.333 * n), rel=1e-3)
    words = {direction.description for direction in motion.weak_directions}
    assert words == {
        "slide in the wall's plane along x",
        "slide in the wall's plane along z",
        "turn in the wall's plane",
    }


def test_cylinder_of_20_m():
    """Transverse shift 0.0283 mm, pitch and yaw 4.899 urad, and rank 4: slide and roll show nothing."""
    t, y = np.meshgrid(np.arange(100) * 2 * np.pi / 100, (np.arange(100) - 49.5) * 0.2, indexing="ij")
    t, y = t.ravel(), y.ravel()
    zero = 0 * t
    hoop = np.stack([-np.sin(t), zero, np.cos(t)], axis=1)
    along, inward = np.tile([0.0, 1, 0], (len(t), 1)), -np.stack([np.cos(t), zero, np.sin(t)], axis=1)
    motion = rigid(np.c_[-3 * inward[:, 0], y, -3 * inward[:, 2]], np.stack([hoop, along, inward], axis=-1))
    assert motion.still.rank == 4
    sd = np.sqrt(np.diag(motion.covariance))
    np.testing.assert_allclose(sd[[3, 5]], 0.0283e-3, rtol=2e-3)
    np.testing.assert_allclose(sd[[0, 2]], 4.899e-6, rtol=2e-3)
    words = [direction.description for direction in motion.weak_directions]
    assert words == ["slide along the tunnel axis", "roll about the tunnel axis"]
    assert all(np.isinf(direction.sd) for direction in motion.weak_directions)
    assert np.isnan([motion.shift, motion.lean]).all()
    assert motion.yaw_sd == pytest.approx(4.899e-6, rel=2e-3)
