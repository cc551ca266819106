# SPDX-License-Identifier: MIT
"""The way back to points: exactness for linear fields, sheets, gaps, and the kernel against a plain NumPy twin."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import OptionError
from scanstrain.neighbourhood.result import PARAMETERS, Status
from scanstrain.strain import blend_to_points, compute_strain
from scanstrain.strain.points import FROM_NEAREST, GROUPS, KERNEL_SPACINGS

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
affine_field = FIELDS["affine_field"]
SPACING, LENGTH = 0.15, 0.6
FLOOR = np.eye(3)
IN_PLANE = ("g11", "g12", "g21", "g22")


@pytest.fixture
def rng():
    return np.random.default_rng(31)


def plane_grid(nx=12, ny=10, jitter=0.2, seed=1):
    x, y = np.meshgrid(np.arange(nx) * SPACING, np.arange(ny) * SPACING, indexing="ij")
    xy = np.stack([x.ravel(), y.ravel()], 1)
    xy = xy + np.random.default_rng(seed).uniform(-jitter, jitter, xy.shape) * SPACING
    return np.column_stack([xy, np.zeros(len(xy))])


def linear_plane(*, strained=True, bent=1.0, **options):
    """Displacement and gradients that change linearly along the plane (each by itself, as a field of gauges)."""
    p = plane_grid()
    x, y = p[:, 0], p[:, 1]
    gradient = np.zeros((len(p), 3, 2))
    gradient[:, 0, 0] = 1e-3 + 4e-4 * x - 2e-4 * y
    gradient[:, 1, 1] = -5e-4 + 1e-4 * x + 3e-4 * y
    gradient[:, 0, 1] = gradient[:, 1, 0] = 2e-4 - 1e-4 * x
    gradient *= strained
    displacement = np.stack([1e-3 * x, 2e-3 - 1e-3 * y, 5e-3 + 2e-3 * x + 1e-3 * y], -1)
    hessian = bent * np.stack([2e-3 + 1e-3 * y, 0 * x, -1e-3 + 1e-3 * x], -1)
    return affine_field(
        p, FLOOR, displacement=displacement, gradient=gradient, hessian=hessian,
        gauge_length=LENGTH, gauge_spacing=SPACING, **options,
    )  # fmt: skip


def strain_of(field, **options):
    return compute_strain(field, measure="small", **options)


def inner(rng, count=400):
    return np.column_stack([rng.uniform(0.25, 1.35, count), rng.uniform(0.25, 1.05, count), np.zeros(count)])


def test_linear_fields_come_back_exactly_inside(rng):
    points = inner(rng)
    x, y = points[:, 0], points[:, 1]
    out = blend_to_points(strain_of(linear_plane(bent=0.0), thickness=0.2), points, np.tile([0.0, 0.0, 1.0], (400, 1)))
    expected = {
        "disp_x": 1e-3 * x,
        "disp_y": 2e-3 - 1e-3 * y,
        "disp_z": 5e-3 + 2e-3 * x + 1e-3 * y,
        "disp_n": 5e-3 + 2e-3 * x + 1e-3 * y,
        "strain_xx": 1e-3 + 4e-4 * x - 2e-4 * y,
        "strain_yy": -5e-4 + 1e-4 * x + 3e-4 * y,
        "strain_xy": 2e-4 - 1e-4 * x,
    }
    for name, value in expected.items():
        np.testing.assert_allclose(out[name], value, rtol=2e-6, atol=3e-9, err_msg=name)
    assert (out["status"] == 0).all()
    bent = blend_to_points(strain_of(linear_plane(strained=False), thickness=0.2), points)
    np.testing.assert_allclose(bent["curv_1"], 1e-3 - 1e-3 * x, rtol=2e-6, atol=3e-9)
    np.testing.assert_allclose(bent["curv_2"], -2e-3 - 1e-3 * y, rtol=2e-6, atol=3e-9)
    np.testing.assert_allclose(bent["bend_1"], 0.1 * (1e-3 - 1e-3 * x), rtol=2e-6, atol=3e-10)


def test_a_bowed_displacement_comes_back_exactly_too(rng):
    """Between gauges a bulge stands higher than a plane through their values; second derivatives tell how much."""
    p, points = plane_grid(), inner(rng)

    def bulge(q):
        x, y = q[:, 0], q[:, 1]
        return 3e-3 + 1e-3 * x - 2e-3 * y - 4e-3 * x**2 + 1.5e-3 * y**2 + 2e-3 * x * y

    displacement = np.column_stack([np.zeros((len(p), 2)), bulge(p)])
    field = affine_field(
        p, FLOOR, displacement=displacement, hessian=[-8e-3, 2e-3, 3e-3], gauge_length=LENGTH, gauge_spacing=SPACING
    )
    found = blend_to_points(strain_of(field), points)["disp_n"]
    np.testing.assert_allclose(found, bulge(points), rtol=2e-6, atol=1e-9)
    blind = blend_to_points(replace(strain_of(field), bowing=None), points)["disp_n"]
    assert np.abs(blind - bulge(points)).max() > 3e-5


def test_types_and_names_are_those_of_the_table(rng):
    out = blend_to_points(strain_of(linear_plane()), inner(rng, 5))
    assert list(out) == [a.name for a in ATTRIBUTES]
    for a in ATTRIBUTES:
        assert out[a.name].dtype == a.numpy_dtype, a.name
        assert out[a.name].shape == (5,), a.name


def test_every_attribute_has_one_way_to_the_points():
    ways = [*FROM_NEAREST, *(n for g in GROUPS for n in g), "status", "shear_max", "strain_1", "strain_2"]
    ways += ["strain_u", "strain_v", "shear_uv", *(f"strain_{c}" for c in ("xx", "yy", "zz", "xy", "xz", "yz"))]
    assert sorted(ways) == sorted(a.name for a in ATTRIBUTES)


def cylinder(radius=3.0, arc=1.5, width=1.5, seed=2):
    angle, y = np.meshgrid(np.arange(0, arc, SPACING / radius), np.arange(0, width, SPACING), indexing="ij")
    rng = np.random.default_rng(seed)
    t = angle.ravel() + rng.uniform(-0.2, 0.2, angle.size) * SPACING / radius
    y = y.ravel() + rng.uniform(-0.2, 0.2, angle.size) * SPACING
    zero = np.zeros_like(t)
    out = np.stack([np.cos(t), zero, np.sin(t)], -1)
    hoop = np.stack([-np.sin(t), zero, np.cos(t)], -1)
    return t, radius * out + np.outer(y, [0, 1, 0]), np.stack([hoop, np.tile([0.0, 1, 0], (len(t), 1)), -out], -1)


def turned_tangents(frame, rng):
    """Every gauge with its own arbitrary pair of tangents: nothing may depend on it."""
    a = rng.uniform(-np.pi, np.pi, len(frame))
    c, s = np.cos(a)[:, None], np.sin(a)[:, None]
    a1, a2 = c * frame[..., 0] + s * frame[..., 1], -s * frame[..., 0] + c * frame[..., 1]
    return np.stack([a1, a2, frame[..., 2]], -1), np.stack([np.stack([c, s], -1), np.stack([-s, c], -1)], 1)[:, :, 0]


@pytest.mark.parametrize("structure", ["tunnel", "free"])
def test_hoop_strain_of_a_lining_follows_the_lining(structure, rng):
    t, position, frame = cylinder()
    frame, q = turned_tangents(frame, rng)
    E = np.diag([8e-4, -3e-4])
    gradient = np.zeros((len(t), 3, 2))
    gradient[:, :2] = q @ E @ np.swapaxes(q, 1, 2)
    result = strain_of(
        affine_field(position, frame, gradient=gradient, gauge_length=LENGTH, gauge_spacing=SPACING),
        structure=structure,
    )
    angle, y = rng.uniform(0.1, 1.3, 300), rng.uniform(0.3, 1.1, 300)
    points = 3.0 * np.stack([np.cos(angle), 0 * angle, np.sin(angle)], -1) + np.outer(y, [0, 1, 0])
    out = blend_to_points(result, points)
    np.testing.assert_allclose(out["strain_1"], 8e-4, rtol=1e-5)
    np.testing.assert_allclose(out["strain_2"], -3e-4, rtol=1e-5)
    hoop = np.stack([-np.sin(angle), 0 * angle, np.cos(angle)], -1)
    T = tensor(out)
    np.testing.assert_allclose(np.einsum("ni,nij,nj->n", hoop, T, hoop), 8e-4, rtol=1e-3)


def test_a_floor_whose_gauges_have_tangents_of_their_own(rng):
    position = plane_grid()
    frame, q = turned_tangents(np.tile(FLOOR, (120, 1, 1)), rng)
    E = np.array([[8e-4, 2e-4], [2e-4, -3e-4]])
    gradient = np.zeros((120, 3, 2))
    gradient[:, :2] = q @ E @ np.swapaxes(q, 1, 2)
    field = affine_field(position, frame, gradient=gradient, gauge_length=LENGTH, gauge_spacing=SPACING)
    out = blend_to_points(strain_of(field), inner(rng))
    for name, expected in (("xx", 8e-4), ("xy", 2e-4), ("yy", -3e-4), ("zz", 0.0), ("xz", 0.0), ("yz", 0.0)):
        np.testing.assert_allclose(out[f"strain_{name}"], expected, rtol=1e-5, atol=1e-10, err_msg=name)


def test_errors_stay_positive_and_principal_changes_in_order_beside_odd_gauges(rng):
    position = plane_grid()
    odd = rng.random(120) < 0.2
    hessian = np.zeros((120, 3))
    hessian[odd] = [1.0, 0.0, -1.0]
    covariance = np.tile(np.eye(12) * 1e-12, (120, 1, 1))
    covariance[odd] *= 1e8
    field = affine_field(
        position, FLOOR, hessian=hessian, covariance=covariance, gauge_length=LENGTH, gauge_spacing=SPACING
    )
    points = np.column_stack([rng.uniform(-0.1, 1.75, 3000), rng.uniform(-0.1, 1.45, 3000), np.zeros(3000)])
    out = blend_to_points(strain_of(field), points)
    assert (out["curv_1"] >= out["curv_2"]).all()
    for name in ("disp_n_sd", "tilt_sd", "spin_sd", "curv_sd", "strain_1_sd", "strain_2_sd"):
        assert (out[name] >= 0.7e-6).all(), name


def tensor(out):
    return np.stack(
        [np.stack([out[f"strain_{'xyz'[min(i, j)]}{'xyz'[max(i, j)]}"] for j in range(3)], -1) for i in range(3)],
        -2,
    ).astype(float)


def noisy_cylinder(rng, **options):
    t, position, frame = cylinder()
    g = len(t)
    A = rng.normal(size=(g, 12, 12)) * 1e-4
    field = affine_field(
        position, frame, displacement=rng.normal(0, 1e-3, (g, 3)), gradient=rng.normal(0, 1e-3, (g, 3, 2)),
        hessian=rng.normal(0, 1e-3, (g, 3)), covariance=A @ np.swapaxes(A, 1, 2), points=np.arange(g),
        gauge_length=LENGTH, gauge_spacing=SPACING, **options,
    )  # fmt: skip
    return strain_of(field, structure="tunnel", thickness=0.3)


def near_cylinder(rng, count=300):
    angle, y, r = rng.uniform(-0.2, 1.7, count), rng.uniform(-0.4, 1.9, count), 3 + rng.normal(0, 0.01, count)
    out = np.stack([np.cos(angle), 0 * angle, np.sin(angle)], -1)
    return r[:, None] * out + np.outer(y, [0, 1, 0]), -out


def test_written_tensor_and_principal_values_agree(rng):
    points, normals = near_cylinder(rng)
    out = blend_to_points(noisy_cylinder(rng), points, normals)
    given = np.isfinite(out["strain_1"])
    assert given.any()
    roots = np.linalg.eigvalsh(tensor(out)[given])
    smallest = np.argmin(np.abs(roots), axis=1)
    kept = np.sort(np.array([np.delete(r, k) for r, k in zip(roots, smallest, strict=True)]), axis=1)
    np.testing.assert_allclose(np.take_along_axis(roots, smallest[:, None], 1), 0.0, atol=1e-9)
    np.testing.assert_allclose(kept[:, 1], out["strain_1"][given], atol=1e-9)
    np.testing.assert_allclose(kept[:, 0], out["strain_2"][given], atol=1e-9)
    np.testing.assert_allclose(out["shear_max"], out["strain_1"] - out["strain_2"], rtol=1e-4, atol=1e-9)
    assert (out["curv_1"][given] >= out["curv_2"][given]).all()


def twin(result, points, normals):
    """The same rule in plain NumPy, one point at a time: local linear least squares through `lstsq`."""
    valid = np.flatnonzero(result.status == 0)
    kernel, half = KERNEL_SPACINGS * SPACING, LENGTH / 2
    names = [n for group in GROUPS[1:] for n in group] + ["dilation", "strain_1_sd", "strain_2_sd"]
    groups = [*GROUPS[1:], GROUPS[0]]
    out = {n: np.full(len(points), np.nan) for n in (*names, "strain_u", "strain_v", "shear_uv")}
    nearest = np.full(len(points), -1)
    for k, q in enumerate(points):
        d = q - result.position[valid]
        dist = np.linalg.norm(d, axis=1)
        off = np.abs(np.einsum("gi,gi->g", d, result.normal[valid]))
        ok = off <= max(0.5 * SPACING, 0.1 * LENGTH) + dist**2 / (4 * LENGTH)
        ok &= result.normal[valid] @ normals[k] > 0.7071
        ok &= dist < max(kernel, half)
        if not ok.any() or dist[ok].min() > half:
            continue
        near = valid[ok][np.argmin(dist[ok])]
        nearest[k] = near
        around = valid[ok & (dist < kernel) & (result.normal[valid] @ result.normal[near] > 0.7071)]
        for group in groups:
            if not np.isfinite(result.values[group[0]][near]):
                continue
            use = np.array([j for j in around if np.isfinite(result.values[group[0]][j])], dtype=int)
            weight = None
            if len(use) >= 4:
                r = result.position[use] - q
                w = np.sqrt((1 - (r**2).sum(1) / kernel**2) ** 2)
                X = np.column_stack([np.ones(len(use)), r @ result.axes[near]])
                omega = np.linalg.lstsq(X * w[:, None], np.diag(w), rcond=None)[0][0]
                weight = omega if (omega**2).sum() <= 1 else None
            if weight is None:
                use, weight = np.array([near]), np.ones(1)
            for n in group:
                values = result.values[n][use]
                out[n][k] = weight @ values
                if n == "disp_n" and len(use) > 1:
                    # each gauge's own second derivatives over its distance, in its own tangents
                    for j, omega in zip(use, weight, strict=True):
                        left, _, right = np.linalg.svd(result.axes[near].T @ result.axes[j])
                        d = (left @ right).T @ (result.axes[near].T @ (result.position[j] - q))
                        uu, vv, uv = result.bowing[j]
                        out[n][k] -= omega * (uu * d[0] ** 2 + vv * d[1] ** 2 + 2 * uv * d[0] * d[1]) / 2
                if n.endswith("_sd") or n == "tilt":
                    out[n][k] = np.clip(out[n][k], values.min(), values.max())
            if group is GROUPS[0]:
                total = np.zeros((2, 2))
                for j, omega in zip(use, weight, strict=True):
                    m = result.axes[near].T @ result.axes[j]
                    left, _, right = np.linalg.svd(m)
                    v = result.values
                    E = np.array([[v["strain_u"][j], v["shear_uv"][j]], [v["shear_uv"][j], v["strain_v"][j]]])
                    total += omega * (left @ right) @ E @ (left @ right).T
                out["strain_u"][k], out["strain_v"][k], out["shear_uv"][k] = total[0, 0], total[1, 1], total[0, 1]
    for a, b in (("curv_1", "curv_2"), ("bend_1", "bend_2")):
        out[a], out[b] = np.fmax(out[a], out[b]), np.fmin(out[a], out[b])
    return out, nearest


def test_the_kernel_agrees_with_its_plain_twin(rng):
    t = cylinder()[0]
    observable = np.ones((len(t), 12), bool)
    observable[rng.random(len(t)) < 0.25, 3:7] = False
    observable[rng.random(len(t)) < 0.1, 9:] = False
    observable[rng.random(len(t)) < 0.1, 0] = False
    status = np.where(rng.random(len(t)) < 0.2, Status.JOINT, Status.FINE)
    result = noisy_cylinder(rng, observable=observable, status=status)
    points, normals = near_cylinder(rng)
    out = blend_to_points(result, points, normals)
    expected, nearest = twin(result, points, normals)
    for name, values in expected.items():
        np.testing.assert_allclose(out[name], values, rtol=1e-5, atol=1e-9, err_msg=name)
    for name in FROM_NEAREST:
        served = nearest >= 0
        np.testing.assert_allclose(out[name][served], result.values[name][nearest[served]], rtol=1e-6, atol=1e-30)
    assert 0.1 < np.isnan(out["strain_1"]).mean() < 0.9
    assert ((out["status"] == 0) == (nearest >= 0)).all()


def test_threads_and_blocks_change_nothing(rng, monkeypatch):
    points, normals = near_cylinder(rng, 1000)
    result = noisy_cylinder(rng)
    whole = blend_to_points(result, points, normals)
    monkeypatch.setattr("scanstrain.strain.points.BLOCK", 37)
    parts = blend_to_points(result, points, normals)
    for name in whole:
        np.testing.assert_array_equal(parts[name], whole[name], err_msg=name)


def test_beyond_half_a_gauge_length_there_is_nothing():
    p = np.array([[0.0, 0, 0]])
    result = strain_of(affine_field(p, FLOOR, displacement=1e-3, gauge_length=LENGTH, gauge_spacing=SPACING))
    x = np.array([0.0, 0.1, 0.25, 0.28, 0.299, 0.301, 1.0, -0.299, -0.301])
    out = blend_to_points(result, np.column_stack([x, 0 * x, 0 * x]))
    inside = np.abs(x) < 0.3
    np.testing.assert_array_equal(np.isfinite(out["disp_n"]), inside)
    np.testing.assert_array_equal(out["status"], np.where(inside, Status.FINE, Status.OUTSIDE))
    np.testing.assert_array_equal(out["gauge_points"], np.where(inside, 500, 0))
    np.testing.assert_allclose(out["disp_n"][inside], 1e-3, rtol=1e-6)


def test_a_point_without_value_says_why_the_gauge_beside_it_failed():
    p = np.array([[0.0, 0, 0], [1.0, 0, 0]])
    field = affine_field(p, FLOOR, status=[Status.FINE, Status.NO_OVERLAP], gauge_length=LENGTH, gauge_spacing=SPACING)
    out = blend_to_points(strain_of(field), np.array([[0.9, 0, 0], [0.05, 0, 0], [0.5, 0, 0]]))
    np.testing.assert_array_equal(out["status"], [Status.NO_OVERLAP, Status.FINE, Status.OUTSIDE])
    np.testing.assert_array_equal(np.isfinite(out["disp_n"]), [False, True, False])


def test_two_faces_of_a_thin_wall_do_not_mix(rng):
    # faces 0.05 m apart move against each other; the points know their normals
    front = plane_grid()
    p = np.concatenate([front, front + np.array([SPACING / 2, SPACING / 2, -0.05])])
    frames = np.concatenate([np.tile(FLOOR, (120, 1, 1)), np.tile(np.diag([1.0, -1.0, -1.0]), (120, 1, 1))])
    u = np.zeros((240, 3))
    u[:120, 2], u[120:, 2] = 1e-3, 4e-3
    result = strain_of(affine_field(p, frames, displacement=u, gauge_length=LENGTH, gauge_spacing=SPACING))
    on_front = inner(rng, 200) + np.column_stack([np.zeros((200, 2)), rng.uniform(-0.02, 0.02, 200)])
    points = np.concatenate([on_front, on_front - np.array([0, 0, 0.05])])
    normals = np.repeat([[0.0, 0, 1], [0.0, 0, -1]], 200, axis=0)
    out = blend_to_points(result, points, normals)
    np.testing.assert_allclose(out["disp_n"], np.repeat([1e-3, 4e-3], 200), rtol=1e-5)


def test_a_thing_in_front_of_the_wall_gets_nothing_even_without_normals(rng):
    points = inner(rng, 100) + np.array([0, 0, 0.2])
    out = blend_to_points(strain_of(linear_plane()), points)
    assert (out["status"] == Status.OUTSIDE).all()
    assert np.isnan(out["disp_n"]).all()


def test_a_component_is_given_only_where_the_nearest_gauge_has_it(rng):
    p = plane_grid(jitter=0.0)
    left = p[:, 0] < 0.8
    observable = np.ones((len(p), 12), bool)
    observable[np.ix_(left, [PARAMETERS.index(n) for n in IN_PLANE])] = False
    gradient = np.zeros((len(p), 3, 2))
    gradient[:, 0, 0] = 1e-3 * p[:, 0]
    field = affine_field(
        p, FLOOR, displacement=1e-3, gradient=gradient, observable=observable,
        gauge_length=LENGTH, gauge_spacing=SPACING,
    )  # fmt: skip
    points = inner(rng, 300)
    out = blend_to_points(strain_of(field), points)
    has = points[:, 0] > 0.825  # half way between the columns at 0.75 and 0.90
    np.testing.assert_array_equal(np.isfinite(out["strain_xx"]), has)
    np.testing.assert_array_equal(np.isfinite(out["strain_1"]), has)
    assert np.isfinite(out["disp_n"]).all()
    deep = points[:, 0] > 1.2
    np.testing.assert_allclose(out["strain_xx"][deep], 1e-3 * points[deep, 0], rtol=1e-5)


def test_points_outside_of_the_gauges_are_not_extrapolated(rng):
    # a steep linear field: beyond the last row the value of the nearest gauge, not the line carried on
    x = np.full(50, 1.65 + 0.1)
    points = np.column_stack([x, rng.uniform(0.3, 1.0, 50), 0 * x])
    result = strain_of(linear_plane())
    out = blend_to_points(result, points)
    assert out["disp_n"].max() <= result.values["disp_n"].max() + 1e-7
    assert np.isfinite(out["disp_n"]).all()


def test_nothing_in_nothing_out():
    result = strain_of(linear_plane())
    assert all(len(v) == 0 for v in blend_to_points(result, np.empty((0, 3))).values())
    failed = strain_of(linear_plane(status=np.full(120, Status.EDGE)))
    out = blend_to_points(failed, np.array([[0.5, 0.5, 0.0], [50.0, 0, 0]]))
    np.testing.assert_array_equal(out["status"], [Status.EDGE, Status.OUTSIDE])
    assert np.isnan(out["tilt"]).all()


def test_wrong_shapes_are_refused():
    result = strain_of(linear_plane())
    with pytest.raises(OptionError, match="points"):
        blend_to_points(result, np.zeros((4, 2)))
    with pytest.raises(OptionError, match="point_normals"):
        blend_to_points(result, np.zeros((4, 3)), np.zeros((3, 3)))
