# SPDX-License-Identifier: MIT
"""The neighbourhood stage on hard input: the right status and count or the right refusal, never a made-up number."""

from __future__ import annotations

import os
import runpy
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial import cKDTree

from scanstrain.epoch import make_epoch
from scanstrain.errors import FitError, OptionError
from scanstrain.neighbourhood import fit_affine
from scanstrain.neighbourhood.result import Status
from scanstrain.synthetic import Linear, Scene, Wall, sample_epoch

MEASURES = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))
IN_PLANE = [0, 1, 3, 4, 5, 6]
NORMAL = [2, 7, 8, 9, 10, 11]
SPACING, GAUGE = 0.012, 0.4
MOTION = Linear(((1e-3, 2e-4), (-4e-4, -6e-4), (2e-3, -1e-3)), centre=(0.75, 0.75), offset=(0.0005, -0.001, 0.003))
SCENE = MEASURES["textured"](Wall(1.5, 1.5), MOTION)
BACK = np.array([0.0, -10.0, 0.0])
"""A place on the free side [m]."""


def fitted(reference, current, **options):
    # Strains of these small gauges count as given up to a vague 1 %.
    usual = {"gauge_length": GAUGE, "gauge_spacing": 0.15, "free_side": BACK, "required_strain_sd": 0.01}
    return fit_affine(reference, current, **usual | options)


@pytest.fixture(scope="module")
def pair():
    return tuple(
        sample_epoch(SCENE, deformed=deformed, spacing=SPACING, intensity_noise=30.0, seed=30 + deformed)
        for deformed in (False, True)
    )


@pytest.fixture(scope="module")
def field(pair):
    return fitted(*pair)


def with_points(epoch, points):
    """The epoch and some more points of middling intensity."""
    xyz = np.concatenate([epoch.points, points])
    grey = np.concatenate([epoch.intensity, np.full(len(points), 1500.0)])
    return make_epoch(xyz, origin=np.zeros(3), intensity=grey.astype(np.float32))


def all_values(field):
    return np.concatenate([field.displacement, field.gradient.reshape(len(field), 6), field.hessian], axis=1)


def assert_no_number(field, where):
    assert np.isnan(all_values(field)[where]).all()
    assert not field.observable[where].any()


def test_a_plain_pair_is_fine(field):
    errors = MEASURES["errors_of"](SCENE, field)
    assert (field.status == Status.FINE).mean() > 0.9
    for name in MEASURES["MOTION"]:
        error, sd = errors.of(name)
        assert len(error) > 30, name
        assert MEASURES["rms"](error / sd) < 1.5, name


def test_what_is_given_is_what_is_observable(field):
    np.testing.assert_array_equal(np.isfinite(all_values(field)), field.observable)
    frames = field.frame
    np.testing.assert_allclose(frames.transpose(0, 2, 1) @ frames, np.tile(np.eye(3), (len(field), 1, 1)), atol=1e-12)
    np.testing.assert_allclose(np.linalg.det(frames), 1.0)
    assert (frames[:, 1, 2] < 0).all()  # normals to the free side
    np.testing.assert_allclose(frames[:, 2, 1], 1.0, atol=1e-3)  # second tangent upwards
    fine = field.status == Status.FINE
    assert np.linalg.eigvalsh(field.covariance[fine]).min() > 0


def test_gauges_are_spread_evenly(field):
    nearest = cKDTree(field.position).query(field.position, k=2)[0][:, 1]
    assert nearest.min() > 0.8 * 0.15
    places = np.random.default_rng(0).uniform(0.05, 1.45, (500, 2))
    on_wall = np.stack([places[:, 0], np.zeros(500), places[:, 1]], axis=1)
    assert cKDTree(field.position).query(on_wall)[0].max() < 1.1 * 0.15


def test_an_island_of_few_points_has_too_few(pair):
    rng = np.random.default_rng(1)
    island = np.column_stack([rng.uniform(3.0, 3.1, 20), np.zeros(20), rng.uniform(0, 0.1, 20)])
    field = fitted(*(with_points(epoch, island) for epoch in pair))
    there = field.position[:, 0] > 2.5
    assert there.any()
    assert_no_number(field, there)
    assert np.isin(field.status[there], [Status.TOO_FEW_POINTS, Status.DEGENERATE]).all()


def test_a_line_of_points_is_no_surface(pair):
    rng = np.random.default_rng(2)
    lines = [np.column_stack([np.linspace(3, 4.5, 400), rng.normal(0, 5e-4, (400, 2))]) for _ in range(2)]
    field = fitted(*(with_points(epoch, line) for epoch, line in zip(pair, lines, strict=True)))
    there = field.position[:, 0] > 2.5
    assert there.any()
    assert_no_number(field, there)
    assert (field.status[there] != Status.FINE).all()


def test_a_place_that_only_the_reference_shows_has_no_overlap(pair):
    reference, current = pair
    seen = current.points[:, 0] < 0.9
    half = replace(current, points=current.points[seen], intensity=current.intensity[seen])
    field = fitted(reference, half)
    blind = field.position[:, 0] > 0.9 + 0.06
    assert blind.sum() > 20
    assert_no_number(field, blind)
    assert (field.status[blind] == Status.NO_OVERLAP).mean() > 0.95
    whole = (field.position[:, 0] > 0.2) & (field.position[:, 0] < 0.7)
    assert (field.status[whole] == Status.FINE).all()


def test_no_overlap_anywhere_fails_with_counts(pair):
    reference, current = pair
    with pytest.raises(FitError, match="no_overlap"):
        fitted(reference, replace(current, points=current.points + np.array([0.0, 1.0, 0.0])))


@pytest.mark.parametrize("which", ["constant in one", "constant in both", "missing in one", "saturated"])
def test_intensity_that_says_nothing_is_not_used(pair, which):
    def dull(epoch):
        if which.startswith("constant"):
            return replace(epoch, intensity=np.full(len(epoch), 200.0, np.float32))
        if which == "saturated":
            return replace(epoch, intensity=np.minimum(epoch.intensity, 500.0).astype(np.float32))
        return replace(epoch, intensity=None)

    reference, current = pair
    scene_pair = (dull(reference) if which in ("constant in both", "saturated") else reference, dull(current))
    field, without = fitted(*scene_pair), fitted(*pair, use_intensity=False)
    assert (field.status == Status.FINE).mean() > 0.9
    np.testing.assert_array_equal(field.observable, without.observable)
    np.testing.assert_allclose(all_values(field), all_values(without), atol=1e-9)


def test_a_bare_wall_gives_nothing_in_plane():
    scene = Scene(Wall(1.5, 1.5), MOTION)
    field = fitted(
        *(
            sample_epoch(scene, deformed=deformed, spacing=SPACING, intensity_noise=30.0, seed=50 + deformed)
            for deformed in (False, True)
        )
    )
    assert not field.observable[:, IN_PLANE].any()
    assert field.observable[:, NORMAL][field.status == Status.FINE].all()


def test_duplicate_points_are_no_new_information(pair):
    twice = [
        replace(epoch, points=np.repeat(epoch.points, 2, axis=0), intensity=np.repeat(epoch.intensity, 2))
        for epoch in pair
    ]
    once, doubled = (fitted(*epochs, resolution=SPACING) for epochs in (pair, twice))
    distance, same = cKDTree(doubled.position).query(once.position)
    kept = distance < 1e-6
    assert kept.sum() > 30
    both = once.observable[kept] & doubled.observable[same[kept]]
    assert both.sum() > 0.98 * once.observable[kept].sum()
    sd, sd_doubled = (np.sqrt(np.einsum("gii->gi", f.covariance)) for f in (once, doubled))
    sd, sd_doubled = sd[kept], sd_doubled[same[kept]]
    assert np.median((sd_doubled / sd)[both]) == pytest.approx(1.0, abs=0.05)
    apart = all_values(doubled)[same[kept]] - all_values(once)[kept]
    # Local densities, and with them weights, are judged a little otherwise.
    assert MEASURES["rms"]((apart / sd)[both]) < 0.5


@pytest.mark.parametrize("thickness", [0.5, 0.3, 0.15])
def test_two_sheets_are_never_mixed(thickness):
    """The faces of a slab, gauges of 400 mm: the front moves by +5 mm, the back by -3 mm, both along -y."""
    moves, pair = {0.0: -5e-3, thickness: -3e-3}, []
    rng = np.random.default_rng(4)
    for deformed in (False, True):
        sheets = []
        for y, move in moves.items():
            q = rng.uniform(0, 1.5, (15_000, 2))
            height = y + deformed * move + rng.normal(0, 5e-4, len(q))
            sheets.append(np.stack([q[:, 0], height, q[:, 1]], axis=1))
        pair.append(make_epoch(np.concatenate(sheets), origin=np.zeros(3)))
    try:
        field = fitted(*pair)
    except FitError:
        assert thickness < GAUGE / 2  # too near for supports to tell them apart: nothing may be said
        return
    inner = ((field.position[:, [0, 2]] > 0.3) & (field.position[:, [0, 2]] < 1.2)).all(axis=1)
    fine = inner & (field.status == Status.FINE)
    if thickness > GAUGE:
        assert fine.sum() > 0.95 * inner.sum() > 30
    front = field.position[:, 1] < thickness / 2
    for sheet, move in ((front, 5e-3), (~front, 3e-3)):
        np.testing.assert_allclose(field.displacement[sheet & fine, 2], move, atol=3e-4)
    assert_no_number(field, field.status != Status.FINE)


@pytest.mark.parametrize("resolution", [SPACING, None], ids=["given resolution", "own resolution"])
def test_order_of_points_does_not_matter(pair, resolution):
    rng = np.random.default_rng(5)
    mixed = []
    for epoch in pair:
        order = rng.permutation(len(epoch))
        mixed.append(replace(epoch, points=epoch.points[order], intensity=epoch.intensity[order]))
    one, other = (fitted(*epochs, resolution=resolution) for epochs in (pair, mixed))
    np.testing.assert_array_equal(other.status, one.status)
    np.testing.assert_array_equal(other.observable, one.observable)
    np.testing.assert_allclose(all_values(other), all_values(one), atol=1e-8)
    np.testing.assert_allclose(other.covariance, one.covariance, rtol=1e-4, atol=1e-16)


@pytest.mark.parametrize(
    ("options", "said"),
    [
        ({"gauge_length": 0.03}, "more than 8 point spacings"),
        ({"gauge_length": 3.0}, "no more than the object"),
    ],
)
def test_lengths_that_do_not_fit_are_refused(pair, options, said):
    with pytest.raises(OptionError, match=said):
        fitted(*pair, **options)


def test_a_fit_that_needs_more_points_than_there_are_fails(pair):
    with pytest.raises(FitError, match="too_few_points"):
        fitted(*pair, min_points=10_000_000)


def test_progress_runs_up_to_one(pair):
    heard = []
    fitted(*pair, progress=lambda phrase, share: heard.append((phrase, share)))
    shares = [share for _, share in heard]
    assert shares == sorted(shares)
    assert shares[0] >= 0.0
    assert shares[-1] == 1.0
    assert all(phrase for phrase, _ in heard)


RUN = """
import hashlib, sys
import numpy as np
from scanstrain.neighbourhood import fit_affine
from scanstrain.epoch import make_epoch
stored = np.load(sys.argv[1])
pair = [make_epoch(stored[f"p{k}"], origin=np.zeros(3), intensity=stored[f"i{k}"]) for k in (0, 1)]
field = fit_affine(*pair, gauge_length=0.4, gauge_spacing=0.15)
digest = hashlib.sha256()
for name in ("position", "frame", "displacement", "gradient", "hessian", "covariance", "observable", "status"):
    digest.update(np.ascontiguousarray(getattr(field, name)).tobytes())
print(digest.hexdigest())
"""


def test_any_number_of_threads_gives_the_same_bytes(pair, tmp_path):
    np.savez(
        tmp_path / "pair.npz",
        **{f"{k}{i}": v for i, e in enumerate(pair) for k, v in (("p", e.points), ("i", e.intensity))},
    )
    digests = []
    for threads in ("1", "2"):
        done = subprocess.run(
            [sys.executable, "-W", "ignore", "-c", RUN, str(tmp_path / "pair.npz")],
            env={**os.environ, "NUMBA_NUM_THREADS": threads},
            capture_output=True, text=True, timeout=300, check=False,
        )  # fmt: skip
        assert done.returncode == 0, done.stderr
        digests.append(done.stdout.strip())
    assert len(digests[0]) == 64
    assert digests[0] == digests[1]
