# SPDX-License-Identifier: MIT
"""What must not change, and what must change in a known way: rigid motion, frames, reversal, units, order."""

from __future__ import annotations

import runpy
from pathlib import Path

import numpy as np
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from scanstrain.attributes import ATTRIBUTES
from scanstrain.linalg import rotation_matrix
from scanstrain.strain import compute_strain
from scanstrain.strain.measures import MEASURES, almansi, green_lagrange, hencky
from scanstrain.strain.surface import map_surface, principal, surface_strain

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
FINITE = ("green_lagrange", "hencky", "biot")


def numbers(shape, size):
    return arrays(np.float64, shape, elements=st.floats(-size, size, allow_subnormal=False))


VECTOR = numbers(3, 3.0)
GRADIENT = numbers((3, 2), 0.2)
F_SPACE = numbers((3, 3), 0.15).map(lambda H: np.eye(3) + H)


@given(F_SPACE, VECTOR)
def test_a_superposed_rotation_leaves_reference_measures_unchanged(F, w):
    Q = rotation_matrix(w)
    for name in FINITE:
        np.testing.assert_allclose(MEASURES[name](Q @ F), MEASURES[name](F), atol=1e-12, err_msg=name)


@given(GRADIENT, VECTOR)
def test_a_superposed_rotation_leaves_every_surface_measure_unchanged(gradient, w):
    Q = rotation_matrix(w)
    B = np.eye(3)[:, :2] + gradient
    turned = Q @ B - np.eye(3)[:, :2]
    before, after = map_surface(gradient[None]), map_surface(turned[None])
    for name in MEASURES:
        np.testing.assert_allclose(surface_strain(after, name), surface_strain(before, name), atol=1e-12, err_msg=name)
    np.testing.assert_allclose(after.rotation, Q @ before.rotation, atol=1e-11)
    np.testing.assert_allclose(after.area, before.area, atol=1e-12)


@given(F_SPACE, VECTOR)
def test_turning_the_frame_turns_the_tensor(F, w):
    Q = rotation_matrix(w)
    for name in MEASURES:
        measure = MEASURES[name]
        np.testing.assert_allclose(measure(Q @ F @ Q.T), Q @ measure(F) @ Q.T, atol=1e-12, err_msg=name)


@given(F_SPACE)
def test_exchanging_the_epochs(F):
    back = np.linalg.inv(F)
    np.testing.assert_allclose(green_lagrange(F), -almansi(back), atol=1e-13)
    np.testing.assert_allclose(np.linalg.eigvalsh(hencky(back)), -np.linalg.eigvalsh(hencky(F))[::-1], atol=1e-12)


@given(GRADIENT)
def test_exchanging_the_epochs_of_a_surface_turns_hencky_strain_round(gradient):
    forward = map_surface(gradient[None])
    U = forward.stretch[0]
    back = np.zeros((1, 3, 2))
    back[0, :2] = np.linalg.inv(U) - np.eye(2)
    np.testing.assert_allclose(
        principal(surface_strain(map_surface(back), "hencky")),
        [-p for p in principal(surface_strain(forward, "hencky"))[::-1]],
        atol=1e-12,
    )


@given(F_SPACE)
def test_measures_agree_to_first_order(F):
    H = F - np.eye(3)
    for name in MEASURES:
        E = MEASURES[name](np.eye(3) + 1e-6 * H)
        np.testing.assert_allclose(E, 0.5e-6 * (H + H.T), atol=2e-12, err_msg=name)


def random_field(seed, *, scale=1.0, rotation=None, shift=0.0, order=slice(None), a_turn=0.0):
    """One field; seen in other units, in turned axes, in another order, or with other tangents in the same plane."""
    rng = np.random.default_rng(seed)
    g = 12
    position, frame = rng.normal(size=(g, 3)), FIELDS["random_frames"](rng, g)
    u, grad = rng.normal(0, 1e-3, (g, 3)), rng.normal(0, 3e-3, (g, 3, 2))
    hess, shape = rng.normal(0, 1e-2, (g, 3)), rng.normal(0, 0.3, (g, 3))
    units = np.array([1e-3] * 3 + [1e-4] * 6 + [1e-3] * 3)
    A = rng.normal(size=(g, 12, 12)) * units[:, None]
    S = A @ np.swapaxes(A, 1, 2)
    c, s = np.cos(a_turn), np.sin(a_turn)
    q = np.array([[c, -s], [s, c]])  # new tangents are the old ones times q
    turn = np.zeros((12, 12))
    T3 = np.eye(3)
    T3[:2, :2] = q.T
    turn[:3, :3] = T3
    turn[3:9, 3:9] = np.kron(T3, q.T)
    turn[9:, 9:] = [[c * c, 2 * s * c, s * s], [-s * c, c * c - s * s, s * c], [s * s, -2 * s * c, c * c]]
    to_units = np.diag([scale] * 3 + [1.0] * 6 + [1 / scale] * 3)
    values = np.concatenate([u, grad.reshape(g, 6), hess], axis=1) @ (to_units @ turn).T
    S = to_units @ turn @ S @ (to_units @ turn).T
    Q = np.eye(3) if rotation is None else rotation
    frame = Q @ frame @ np.block([[q, np.zeros((2, 1))], [np.zeros((1, 2)), np.eye(1)]])
    return FIELDS["affine_field"](
        (scale * position @ Q.T + shift)[order], frame[order], displacement=values[order, :3],
        gradient=values[order, 3:9].reshape(-1, 3, 2), hessian=values[order, 9:],
        shape=((shape @ turn[9:, 9:].T) / scale)[order], covariance=S[order],
        gauge_length=0.6 * scale, gauge_spacing=0.15 * scale,
    )  # fmt: skip


SCALARS = [
    a.name
    for a in ATTRIBUTES
    if not a.name.startswith(("disp_x", "disp_y", "disp_z", "rot_"))
    and a.name[-2:] not in ("xx", "yy", "zz", "xy", "xz", "yz")
]
OWN_AXES = ("strain_u", "strain_v", "shear_uv")


def assert_same(after, before, names, factor=1.0):
    for name in names:
        np.testing.assert_allclose(
            after.values[name], before.values[name] * factor, rtol=1e-6, atol=1e-11, err_msg=name
        )


@settings(max_examples=25)
@given(st.integers(0, 10_000), VECTOR)
def test_turned_file_axes_turn_vectors_and_tensors_and_nothing_else(seed, w):
    Q = rotation_matrix(w)
    before = compute_strain(random_field(seed), measure="hencky", thickness=0.2)
    after = compute_strain(random_field(seed, rotation=Q, shift=7.0), measure="hencky", thickness=0.2)
    assert_same(after, before, [name for name in SCALARS if name not in OWN_AXES and name != "observed"])
    for names in (("disp_x", "disp_y", "disp_z"), ("rot_x", "rot_y", "rot_z")):
        stack = [np.stack([r.values[n] for n in names], -1) for r in (before, after)]
        np.testing.assert_allclose(stack[1], stack[0] @ Q.T, atol=1e-13)


@settings(max_examples=25)
@given(st.integers(0, 10_000), st.floats(-3.0, 3.0))
def test_the_choice_of_tangents_does_not_matter(seed, a_turn):
    before = compute_strain(random_field(seed), measure="green_lagrange", structure="tunnel", axis=[0.3, 1, 0.2])
    after = compute_strain(
        random_field(seed, a_turn=a_turn), measure="green_lagrange", structure="tunnel", axis=[0.3, 1, 0.2]
    )
    usable = np.linalg.norm(np.cross(before.normal, [0.3, 1, 0.2]), axis=1) > 0.15
    for a in ATTRIBUTES:
        rows = usable if a.name in OWN_AXES else slice(None)
        np.testing.assert_allclose(
            after.values[a.name][rows], before.values[a.name][rows], rtol=1e-6, atol=1e-11, err_msg=a.name
        )


def with_scans_moved(field, P, Q):
    """The field of the same two scans, the reference turned by P and the current one by Q, both about the origin."""
    A = field.frame
    tangents = np.eye(3)[:, :2] + field.gradient
    gradient = np.swapaxes(P @ A, 1, 2) @ Q @ A @ tangents - np.eye(3)[:, :2]
    return FIELDS["affine_field"](
        field.position @ P.T, P @ A, displacement=field.displacement, gradient=gradient, hessian=field.hessian,
        shape=field.shape, covariance=field.covariance,
    )  # fmt: skip


def in_space(result):
    """Strain tensors (g, 3, 3) and rotations (g, 3, 3) in file axes."""
    E = np.stack([result.values[f"strain_{n}"] for n in ("xx", "xy", "xz", "xy", "yy", "yz", "xz", "yz", "zz")], -1)
    w = np.stack([result.values[f"rot_{n}"] for n in "xyz"], -1)
    return E.reshape(-1, 3, 3), np.stack([rotation_matrix(each) for each in w])


STILL = np.zeros(3)


@settings(max_examples=15, deadline=None)
@given(
    st.integers(0, 10_000), VECTOR, st.sampled_from(["reference", "current", "both"]), st.sampled_from(list(MEASURES))
)
def test_rigid_motion_of_either_scan_leaves_strain_as_it_is(seed, w, which, measure):
    """Stretches to 1e-9; the tensor turns with the reference, and the rotation is Q R P'."""
    P = rotation_matrix(w if which in ("reference", "both") else STILL)
    Q = rotation_matrix(STILL if which == "reference" else w[::-1] if which == "both" else w)
    field = random_field(seed)
    before = compute_strain(field, measure=measure)
    after = compute_strain(with_scans_moved(field, P, Q), measure=measure)
    for name in ("strain_1", "strain_2", "shear_max", "dilation"):
        np.testing.assert_allclose(after.values[name], before.values[name], rtol=0, atol=1e-9, err_msg=name)
    (E, R), (turned, composed) = in_space(before), in_space(after)
    np.testing.assert_allclose(turned, P @ E @ P.T, rtol=0, atol=1e-9)
    np.testing.assert_allclose(composed, Q @ R @ P.T, rtol=0, atol=1e-9)


@settings(max_examples=10)
@given(st.integers(0, 10_000))
def test_millimetres_give_the_same_strain(seed):
    before = compute_strain(random_field(seed), thickness=0.2)
    after = compute_strain(random_field(seed, scale=1000.0), thickness=200.0)
    assert after.measure == before.measure
    kinds = {a.name: a.unit for a in ATTRIBUTES}
    for unit, factor in (("1", 1.0), ("rad", 1.0), ("m", 1000.0), ("1/m", 1e-3)):
        for name in (n for n, u in kinds.items() if u == unit):
            expected = before.values[name] * factor
            np.testing.assert_allclose(after.values[name], expected, rtol=2e-6, atol=1e-13, err_msg=name)


@given(st.integers(0, 10_000), st.permutations(range(12)))
def test_the_order_of_gauges_does_not_matter(seed, order):
    before = compute_strain(random_field(seed), thickness=0.2)
    after = compute_strain(random_field(seed, order=list(order)), thickness=0.2)
    for name, values in before.values.items():
        np.testing.assert_allclose(after.values[name], values[list(order)], rtol=1e-12, err_msg=name)
