# SPDX-License-Identifier: MIT
"""The whole path on the demonstration scans, file to file, against what really happened there.

The scans are simulated as a scanner sees them: two set-ups, noise that grows with incidence, shadows, things that
stand before the structure, a wrong datum. Clear gauges see the structure alone; the others are judged with them
where the text says so.
"""

from __future__ import annotations

import runpy
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.outputs import write_result
from scanstrain.synthetic import truth, truth_at

MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
rms, coverage, mean_and_error = MEASURES["rms"], MEASURES["coverage"], MEASURES["mean_and_error"]
IN_PLANE = (
    "disp_x",
    "disp_y",
    "disp_z",
    "strain_1",
    "strain_2",
    "strain_xy",
    "strain_u",
    "shear_uv",
    "dilation",
    "spin",
)
PATCH = 0.6
STRUCTURE, FLOOR = 6, 2
UNMOVED_CORNERS = {"wall": (4.0, 8.0), "adit": (4.6, 8.0)}
"""From here on along the wall (q1) or the adit (q2) nothing moved [m]: TRUTH.md."""


def test_normal_displacement_reaches_the_bound(sample_run):
    error, _ = sample_run.errors.of("un", sample_run.clear)
    bound = sample_run.bounds[sample_run.clear, 0]
    assert len(error) == sample_run.clear.sum() > 500
    # No unbiased method gets below 1; one that does hides a prior.
    assert 0.9 < rms(error) / rms(bound) < 1.5


def test_normal_displacement_intervals_cover_the_truth(sample_run):
    for where in (sample_run.clear, sample_run.errors.inside):
        assert coverage(*sample_run.errors.of("un", where)) >= 0.90


def test_normal_displacement_is_given_nearly_everywhere_on_the_structure(sample_run):
    given = np.isfinite(sample_run.result.points["disp_n"][sample_run.reference_class == STRUCTURE])
    assert given.mean() > 0.98


def test_tilt_and_curvature_are_those_of_the_patch(sample_run):
    """Against the quadratic that the exact displacement has over each patch: what a perfect gauge would show."""
    clear = np.flatnonzero(sample_run.clear)
    perfect = perfect_gauges(sample_run.sample.scene, sample_run.errors.material[clear], PATCH / 2)
    field = sample_run.result.field
    along = np.einsum(
        "gia,gib->gab", sample_run.errors.truth["axes"][clear], field.frame[clear][:, :, :2]
    )  # gauge tangents in the structure's own axes
    slope = np.einsum("gab,ga->gb", along, perfect[:, 1:3])
    error = field.gradient[clear, 2] - slope
    datum = sample_run.result.registration.covariance[:3, :3]
    turn = np.einsum("gik,ij,gjk->gk", field.frame[clear], datum, field.frame[clear])
    sd = np.sqrt(np.einsum("gii->gi", field.covariance)[clear][:, 7:9] + turn[:, [1, 0]])
    assert rms(error) / rms(sample_run.bounds[clear, 1:3]) < 1.5
    assert coverage(error, sd) >= 0.90


def perfect_gauges(scene, material, radius):
    """Quadratic (w, w1, w2, w11, w12, w22) of the exact normal displacement over each patch, in material axes."""
    x, y = np.stack(np.meshgrid(*[np.linspace(-radius, radius, 17)] * 2), axis=-1).reshape(-1, 2).T
    disc = np.hypot(x, y) <= radius
    x, y = x[disc], y[disc]
    solve = np.linalg.pinv(np.stack([np.ones(len(x)), x, y, x * x / 2, x * y, y * y / 2], axis=1))
    places = material[:, None, :] + np.stack([x, y], axis=1)
    exact = truth_at(scene, places.reshape(-1, 2))
    # The displacement vector along the normal of the gauge, as a gauge sees it, not along each place's own normal.
    normal = scene.surface.frames(material)[:, :, 2]
    moved = exact["displacement"].reshape(*places.shape[:2], 3)
    return np.einsum("gni,gi,kn->gk", moved, normal, solve)


def test_registration_is_right_where_nothing_moved(sample_run):
    sample, registration = sample_run.sample, sample_run.result.registration
    a0, a1, b0, b1 = sample.scene.surface.bounds
    start, end = UNMOVED_CORNERS[sample.name[:4]]
    sides = ((start, end), (b0, b1)) if sample.name.startswith("wall") else ((a0, a1), (start, end))
    corners = np.array([[u, v] for u in sides[0] for v in sides[1]])
    assert not truth_at(sample.scene, corners)["displacement"].any()
    places = sample.scene.points(corners, deformed=False) + np.asarray(sample.scene.origin)
    off = apart(registration.file_matrix(), sample.file_matrix(), places)
    assert np.linalg.norm(off, axis=1).max() < 2e-4
    sd = np.sqrt(np.einsum("nii->ni", registration.displacement_covariance(places - registration.origin)))
    assert (np.abs(off) < 4 * sd + 5e-6).all()
    assert not registration.weak_directions


def apart(T, T_exact, places):
    """Difference [m] of two motions at places given in file coordinates."""
    return places @ (T - T_exact)[:3, :3].T + (T - T_exact)[:3, 3]


def test_strain_is_unbiased_and_its_intervals_cover_where_it_is_given(sample_run):
    for name in ("g11", "g12", "g21", "g22"):
        error, sd = sample_run.errors.of(name, sample_run.clear)
        # Errors that count what both epochs miss let fewer gauges of the rough adit pass the usual 1e-3.
        assert len(error) > 0.2 * sample_run.clear.sum(), name
        assert coverage(error, sd) >= 0.85, name
        seen = sample_run.clear & np.isfinite(sample_run.result.field.gradient[:, int(name[1]) - 1, int(name[2]) - 1])
        mean, its_error = mean_and_error(error, sample_run.errors.material[seen], PATCH)
        assert abs(mean) < 3 * its_error, name


def test_strain_attributes_follow_the_truth(wall):
    """The stretched part of the wall: +1500 microstrain over q1, nothing upwards."""
    values, exact = wall.result.strain.values, wall.errors.truth
    core = wall.clear & np.isfinite(values["strain_u"])
    stretched = core & (exact["strain_u"] > 1.2e-3)
    assert stretched.sum() > 20
    for name in ("strain_u", "strain_v", "shear_uv", "spin"):
        mean, its_error = mean_and_error((values[name] - exact[name])[core], wall.errors.material[core], PATCH)
        assert abs(mean) < 3 * its_error, name
    assert values["strain_u"][stretched].mean() == pytest.approx(exact["strain_u"][stretched].mean(), rel=0.15)


@pytest.mark.parametrize("name", IN_PLANE)
def test_floors_without_texture_show_nothing_in_plane(sample_run, name):
    floor = sample_run.reference_class == FLOOR
    assert floor.sum() > 10_000
    assert np.isnan(sample_run.result.points[name][floor]).mean() >= 0.99


def test_little_is_discovered_where_nothing_moved(sample_run):
    """Of the discoveries on the structure at most a tenth are false; of the floors next to nothing is one."""
    result, errors, scene = sample_run.result, sample_run.errors, sample_run.sample.scene
    angle = np.arange(8) * np.pi / 4
    rim = PATCH / 2 * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    places = np.concatenate([errors.material[:, None], errors.material[:, None] + rim], axis=1)
    moved = truth_at(scene, places.reshape(-1, 2))["displacement"].reshape(*places.shape[:2], 3)
    still = ~moved.any(axis=(1, 2))
    found = (result.strain.values["discovery"] == 1) & errors.inside
    assert found[~still].sum() > 0.8 * (errors.inside & ~still).sum()
    assert (found & still).sum() < 0.1 * found.sum()
    assert result.points["discovery"][sample_run.reference_class == FLOOR].mean() < 0.05


def test_the_written_cloud_tells_the_truth_point_by_point(wall, tmp_path):
    folder = tmp_path / "out"
    write_result(wall.result, folder)
    las = laspy.read(folder / "strain.laz")
    scene = wall.sample.scene
    exact = truth(scene, las.xyz - np.asarray(scene.origin))
    core = np.asarray(las.classification == STRUCTURE) & exact["on_structure"]
    core &= MEASURES["within"](scene.surface, exact["material"], PATCH / 2)
    given, sd = np.asarray(las["disp_n"])[core], np.asarray(las["disp_n_sd"])[core]
    assert np.isfinite(given).mean() > 0.98
    error = given - exact["disp_n"][core]
    seen = np.isfinite(error)
    assert coverage(error[seen], sd[seen]) >= 0.90
    assert np.median(np.abs(error[seen])) < 1e-4
