# SPDX-License-Identifier: MIT
"""Weak motions: ranks and eigenvalues of known surfaces (closed forms after Gelfand et al. 2003), and their names."""

import numpy as np
import pytest

from scanstrain.linalg import at_least
from scanstrain.registration.match import Metric, Rows
from scanstrain.registration.weak import complement, name_directions, reach, separate, split


def rows_of(places, normals, arm=1.0, tilt=0.0, rng=None):
    """Exact rows of places and unit normals about the centroid; with `tilt` both normals are noisy [rad]."""
    x = (places - places.mean(axis=0)) / arm
    m = len(places)
    pair = [normals + (rng.normal(0, tilt, normals.shape) if tilt else 0) for _ in range(2)]
    mean, half = (pair[0] + pair[1]) / 2, (pair[0] - pair[1]) / 2
    made = [np.c_[np.cross(x, n), n, -(x * n).sum(axis=1)] for n in (mean, half)]
    zero = np.zeros(m)
    rows = Rows(made[0], made[1], zero, zero + 0.002, places, normals, np.arange(m))
    return rows, Metric(places.mean(axis=0), arm)


def cylinder(radius=3.0, length=20.0, ovality=0.0):
    t, s = np.meshgrid(np.arange(200) * 2 * np.pi / 200, (np.arange(200) + 0.5) / 200 * length, indexing="ij")
    t, s = t.ravel(), s.ravel()
    r, dr = radius * (1 + ovality * np.cos(2 * t)), -2 * radius * ovality * np.sin(2 * t)
    n = np.c_[0 * s, r * np.cos(t) + dr * np.sin(t), r * np.sin(t) - dr * np.cos(t)]
    return np.c_[s, r * np.cos(t), r * np.sin(t)], n / np.linalg.norm(n, axis=1, keepdims=True)


def plane(a=10.0, b=6.0):
    x, z = np.meshgrid((np.arange(200) + 0.5) / 200 * a, (np.arange(120) + 0.5) / 120 * b, indexing="ij")
    return np.c_[x.ravel(), 0 * x.ravel(), z.ravel()], np.tile([0.0, 1, 0], (x.size, 1))


def divided(rows):
    a = rows.row[:, :6]
    return np.linalg.eigvalsh(a.T @ a / len(a))


@pytest.mark.parametrize(
    ("surface", "expected"),
    [
        (cylinder(), [0, 0, 0.5, 0.5, 20**2 / 24, 20**2 / 24]),
        (plane(), [0, 0, 0, 1, 6**2 / 12, 10**2 / 12]),
        (cylinder(ovality=0.01), [0, 0.0018, 0.5, 0.5, 16.667, 16.667]),
    ],
)
def test_eigenvalues_of_known_surfaces(surface, expected):
    rows, _ = rows_of(*surface)
    # The closed form of the oval is of first order in the ovality.
    np.testing.assert_allclose(divided(rows), expected, rtol=0.025, atol=1e-5)


def split_of(rows, metric, sigma=0.002, budget=0.002):
    a, b = rows.row[:, :6], rows.half[:, :6]
    full = a.T @ a / sigma**2
    return split(full, full - b.T @ b / sigma**2, variance=1.0, places=rows.place, metric=metric, budget=budget)


@pytest.mark.parametrize("tilt", [0.0, 0.01])
@pytest.mark.parametrize(
    ("surface", "weak"), [(cylinder(), 2), (plane(), 3), (cylinder(ovality=0.01), 1)], ids=["round", "plane", "oval"]
)
def test_rank_survives_noise_of_the_normals(surface, weak, tilt):
    """10 mrad of noise give every weak direction a sum that alone would look like a standard error near 1 mm."""
    rows, metric = rows_of(*surface, arm=10.0, tilt=tilt, rng=np.random.default_rng(1))
    strong, held = split_of(rows, metric)
    assert held.shape == (6, weak)
    np.testing.assert_allclose(np.c_[strong, held].T @ np.c_[strong, held], np.eye(6), atol=1e-12)


def test_noise_of_the_normals_would_look_like_information():
    """The case above is a real trap: without the correction the same cylinder passes for fixed."""
    rows, metric = rows_of(*cylinder(), arm=10.0, tilt=0.01, rng=np.random.default_rng(1))
    full = rows.row[:, :6].T @ rows.row[:, :6] / 0.002**2
    strong, _ = split(full, full, variance=1.0, places=rows.place, metric=metric, budget=0.002)
    assert strong.shape == (6, 6)


def named(surface, arm=10.0):
    rows, metric = rows_of(*surface, arm=arm, tilt=0.002, rng=np.random.default_rng(2))
    _, weak = split_of(rows, metric)
    weak = separate(weak)
    found = name_directions(weak, rows, np.ones(len(rows.place), bool), np.full(weak.shape[1], 0.1))
    return [each.description for each in found], found


def test_names_in_a_tunnel():
    words, found = named(cylinder())
    assert words == ["slide along the tunnel axis", "roll about the tunnel axis"]
    np.testing.assert_allclose(np.abs(found[0].vector), [0, 0, 0, 1, 0, 0], atol=0.02)


def test_names_on_a_wall_and_on_a_floor():
    assert named(plane())[0] == [
        "slide in the wall's plane along x",
        "slide in the wall's plane along z",
        "turn in the wall's plane",
    ]
    x, n = plane()
    swap = [0, 2, 1]
    assert named((x[:, swap], n[:, swap]))[0] == [
        "slide in the floor's plane along x",
        "slide in the floor's plane along y",
        "turn in the floor's plane",
    ]


def test_two_walls_are_no_tunnel():
    x, n = plane()
    words, _ = named((np.r_[x, x[:, [1, 0, 2]]], np.r_[n, n[:, [1, 0, 2]]]))
    assert words == ["slide along z"]


def test_reach_of_a_roll_is_the_radius():
    places = cylinder()[0]
    metric = Metric(places.mean(axis=0), 10.0)
    unit = np.eye(6)[:, [0, 3]]
    np.testing.assert_allclose(reach(unit, places, metric), [0.3, 1.0], rtol=1e-9)


def test_complement_and_floor():
    basis = np.linalg.qr(np.random.default_rng(0).normal(size=(6, 6)))[0]
    rest = complement(basis[:, :2])
    np.testing.assert_allclose(rest.T @ basis[:, :2], 0, atol=1e-14)
    rng = np.random.default_rng(1)
    A, B = (m @ m.T for m in rng.normal(size=(2, 6, 6)))
    raised = at_least(A, B)
    for floor in (A, B):
        assert np.linalg.eigvalsh(raised - floor)[0] > -1e-9 * np.trace(A + B)
    np.testing.assert_allclose(at_least(A, 1e-9 * np.eye(6) * np.linalg.eigvalsh(A)[0]), A, rtol=1e-9)


@pytest.mark.parametrize(("agreed", "weak"), [(0.9, 0), (0.3, 1)])
def test_what_the_epochs_do_not_agree_on_is_weak_however_sharp(agreed, weak):
    """A standard error of 0.1 mm from normals that are mostly noise."""
    full = np.eye(6) * 1e8
    shared = full * np.r_[1, 1, 1, 1, 1, agreed]
    metric = Metric(np.zeros(3), 1.0)
    _, held = split(full, shared, variance=1.0, places=cylinder()[0] / 20, metric=metric, budget=0.002)
    assert held.shape == (6, weak)
