# SPDX-License-Identifier: MIT
"""Seams between the set-ups of one epoch: found where they are, not found where they are not."""

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.epoch import Epoch
from scanstrain.io import read_scan
from scanstrain.registration.seams import Seam, find_seams, seam_warnings
from scanstrain.registration.setups import align_setups

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
SAMPLES = Path(__file__).parents[2] / "sample_clouds"
SHIFT, TURN = np.array([0.0, 1.5e-3, 0.0]), np.array([3e-4, 0.0, 0.0])


def set_ups(rng, make, *, bounds=(0.0, 0.0), steps=((TURN, SHIFT),), overlap=0.6, **options):
    """Points along x from set-ups side by side, each after the first out of place by a step; and the clean places.

    `bounds` are the middles of the overlaps as shares of the length, each as wide as `overlap` of it.
    """
    points = make(rng, **options)
    x = points[:, 0] / np.ptp(points[:, 0])
    setup = np.ones(len(points), np.uint16)
    for number, middle in enumerate(bounds[: len(steps)], start=2):
        either = rng.random(len(points)) < 0.5
        setup[(x > middle + overlap / 2) | ((x > middle - overlap / 2) & either)] = number
    placed = points.copy()
    for number, (turn, shift) in enumerate(steps, start=2):
        mine = setup == number
        placed[mine] = Rotation.from_rotvec(turn).apply(points[mine]) + shift
    return Epoch(points=placed, origin=np.zeros(3), setup=setup, label="March"), points


def wall(rng, n=40_000, **options):
    return SCENES["wall"](rng, n, relief=0.01, noise=0.001, **options)


def large_wall(rng):
    """So that a radian at its far end is not about a metre."""
    return wall(rng, spacing=0.02)


def lining(rng, n=80_000):
    return SCENES["lining"](rng, n, noise=0.001)


def expected(seam, turn=TURN, shift=SHIFT):
    """Rotation and translation at the pivot that undo a step, to first order."""
    return -np.r_[turn, shift + np.cross(turn, seam.pivot)]


def across(points):
    return np.tile([0.0, 1.0, 0.0], (len(points), 1))


@pytest.mark.parametrize(
    ("make", "normals"), [(large_wall, across), (lining, SCENES["lining_normals"])], ids=["wall", "lining"]
)
def test_a_seam_is_measured_said_and_closed(make, normals):
    epoch, clean = set_ups(np.random.default_rng(4), make)
    [seam] = find_seams(epoch)
    assert (seam.first, seam.second) == (1, 2)
    assert seam.compared
    assert seam.significant
    off = np.r_[seam.rotation, seam.translation] - expected(seam)
    # Weak motions are held at zero and carry a standard error of centimetres.
    assert (np.abs(off) < 3 * np.sqrt(np.diag(seam.covariance))).all()
    assert 1e-3 < seam.offset_n < 1.7e-3
    assert seam.offset_n_sd < 2e-4
    assert seam.offset == pytest.approx(1.6e-3, abs=5e-4)
    [said] = seam_warnings((seam,), "March")
    assert said.startswith(f"March: set-ups 1 and 2 disagree by {seam.offset_n * 1e3:.1f} mm along the surface normal")
    closed = align_setups(epoch, (seam,))
    apart = relative(closed.points, clean, epoch.setup, normals)
    assert np.sqrt((apart**2).mean()) < 1e-4
    assert np.sqrt((relative(epoch.points, clean, epoch.setup, normals) ** 2).mean()) > 1e-3


def relative(points, clean, setup, normals):
    """Normal offset of the second set-up's points against where the first set-up's motion would put them."""
    first = setup == 1
    T = Rotation.align_vectors(points[first] - points[first].mean(axis=0), clean[first] - clean[first].mean(axis=0))[0]
    placed = T.apply(clean[~first] - clean[first].mean(axis=0)) + points[first].mean(axis=0)
    return ((points[~first] - placed) * normals(clean[~first])).sum(axis=1)


def test_where_there_is_no_seam_none_is_found():
    """Twenty draws: at a level of 1 % two or more are improbable (1.7 %)."""
    seams = [
        find_seams(set_ups(np.random.default_rng(seed), wall, n=25_000, steps=((0 * TURN, 0 * SHIFT),))[0])
        for seed in range(20)
    ]
    assert all(seam.compared for [seam] in seams)
    assert sum(seam.significant for [seam] in seams) <= 1
    assert sum(len(seam_warnings(each, "March")) for each in seams) == 0


def test_simulated_set_ups_of_a_registered_scan_agree():
    """Other beams, other incidence, other shadows: two stations before the yard wall."""
    [seam] = find_seams(read_scan(SAMPLES / "wall_2031-03-05.laz"))
    assert seam.compared
    assert seam.offset_n < 5e-5
    assert seam_warnings((seam,), "March") == ()


def test_three_set_ups_in_a_row():
    steps = ((TURN, SHIFT), (0 * TURN, np.array([0, -1e-3, 0])))
    epoch, clean = set_ups(
        np.random.default_rng(5), wall, n=80_000, bounds=(-0.2, 0.2), steps=steps, overlap=0.3, aspect=4.0
    )
    seams = find_seams(epoch)
    assert [(seam.first, seam.second) for seam in seams] == [(1, 2), (1, 3), (2, 3)]
    assert [seam.compared for seam in seams] == [True, False, True]
    assert seams[1].note == "they overlap too little"
    assert np.isnan([seams[1].offset, seams[1].p, *seams[1].translation]).all()
    assert not seams[1].significant
    assert len(seam_warnings(seams, "March")) == 2
    closed = align_setups(epoch, seams)
    apart = relative(closed.points, clean, epoch.setup, across)
    assert np.sqrt((apart**2).mean()) < 1.5e-4
    assert np.sqrt((relative(epoch.points, clean, epoch.setup, across) ** 2).mean()) > 1e-3


def test_set_ups_that_do_not_overlap_are_named():
    rng = np.random.default_rng(6)
    points = np.concatenate([wall(rng, 8_000), wall(rng, 8_000) + np.array([5, 0, 0])])
    epoch = Epoch(points=points, origin=np.zeros(3), setup=np.repeat(np.array([3, 7], np.uint16), 8_000))
    [seam] = find_seams(epoch)
    assert not seam.compared
    [said] = seam_warnings((seam,), "March")
    assert said == "March: set-ups 3, 7 could not be checked: they share too little of the surface with any other"


def test_one_set_up_has_no_seam():
    points = wall(np.random.default_rng(7), 2_000)
    epoch = Epoch(points=points, origin=np.zeros(3))
    assert find_seams(epoch) == ()
    assert find_seams(replace(epoch, setup=np.full(2_000, 4, np.uint16))) == ()
    assert seam_warnings((), "March") == ()


def test_an_overlap_that_is_no_surface_is_not_compared():
    """A bush: points fill the voxels, but no planes."""
    rng = np.random.default_rng(8)
    points = rng.uniform(-1, 1, (60_000, 3))
    epoch = Epoch(points=points, origin=np.zeros(3), setup=rng.integers(1, 3, len(points)).astype(np.uint16))
    [seam] = find_seams(epoch)
    assert seam.note in ("they overlap too little", "their overlap is too small or too rough to be registered")


def test_a_seam_below_the_scatter_is_not_worth_a_warning():
    nothing = np.zeros(3)
    seam = Seam(
        first=1, second=2, points=1000, note="", rotation=nothing, translation=nothing, pivot=nothing,
        covariance=np.eye(6), weak_directions=(), offset=2e-4, angle=1e-5, offset_n=1e-4, offset_n_sd=1e-5,
        scatter=3e-4, p=1e-9,
    )  # fmt: skip
    assert seam.significant
    assert seam_warnings((seam,), "March") == ()
    assert len(seam_warnings((replace(seam, offset_n=4e-4),), "March")) == 1
    assert seam_warnings((replace(seam, offset_n=4e-4, p=0.02),), "March") == ()


def test_progress_reaches_one():
    heard = []
    find_seams(set_ups(np.random.default_rng(9), wall, n=25_000)[0], progress=heard.append)
    assert heard == [1.0]
