# SPDX-License-Identifier: MIT
"""Epochs in another unit, with swapped or mirrored axes: named, and never registered by chance."""

import runpy
import sys
from pathlib import Path

import numpy as np
import pytest

from scanstrain.epoch import Epoch
from scanstrain.errors import OverlapError
from scanstrain.registration import disguise, register
from scanstrain.registration.mixups import axes_words, axis_orders, size, unit_words

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, epoch, motion, room, wall = (SCENES[name] for name in ("apply", "epoch", "motion", "room", "wall"))
SURVEY = np.array([482_310.0, 5_391_270.0, 312.0])


@pytest.fixture(scope="module")
def rooms():
    rng = np.random.default_rng(1)
    return room(rng, 24_000, noise=0.002), room(rng, 24_000, noise=0.002)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (lambda x: x * [1, 1, -1], "mirrored, z negated"),
        (lambda x: x[:, [0, 2, 1]], "mirrored, y and z exchanged"),
        (lambda x: apply(motion(40, 1.0), x * [1, -1, 1]), "mirrored, axes swapped"),
        (lambda x: x * 1000, "looks like the reference in millimetres"),
        (lambda x: x / 0.0254, "looks like the reference in inches"),
        (lambda x: x / 0.3048, "looks like the reference in feet"),
        (lambda x: x * 0.3048, "the reference looks like the current epoch in feet"),
    ],
)
def test_a_room_in_disguise_is_named(rooms, change, says):
    with pytest.raises(OverlapError, match=says):
        register(epoch(rooms[0]), epoch(change(rooms[1])))


@pytest.mark.parametrize("start", ["identity", "given"])
def test_no_start_lets_a_mirrored_room_through(rooms, start):
    with pytest.raises(OverlapError, match="y and z exchanged"):
        register(epoch(rooms[0]), epoch(rooms[1][:, [0, 2, 1]]), start=np.eye(4) if start == "given" else start)


def test_swapped_axes_are_found_without_open3d(rooms, monkeypatch):
    monkeypatch.setitem(sys.modules, "open3d", None)
    with pytest.raises(OverlapError, match="x negated"):
        register(epoch(rooms[0]), epoch(rooms[1] * [-1, 1, 1]), start="identity")


@pytest.mark.parametrize("order", [[1, 2, 0], "turned"])
def test_axes_that_keep_the_hand_are_a_motion_like_any_other(rooms, order):
    turned = rooms[1] * [1, -1, 1] if order == "turned" else rooms[1]
    turned = turned[:, [1, 0, 2]] if order == "turned" else turned[:, order]
    result = register(epoch(rooms[0]), epoch(turned))
    assert result.start == "coarse"
    assert np.abs(apply(result.T_ref_cur, turned) - rooms[1]).max() < 1e-3


@pytest.mark.parametrize(
    ("change", "says"),
    [
        (lambda x: x[:, [1, 0, 2]], "would with x and y exchanged"),
        (lambda x: x[:, [0, 2, 1]], "would with y and z exchanged"),
        (lambda x: x * [1, 1, -1], None),
        (lambda x: x / 0.3048, "looks like the reference in feet"),
        (lambda x: x * 1000, "looks like the reference in millimetres"),
    ],
)
def test_survey_coordinates_in_disguise_are_named(rooms, change, says):
    mine, theirs = Epoch(rooms[0], SURVEY), Epoch(change(rooms[1] + SURVEY) - SURVEY, SURVEY)
    with pytest.raises(OverlapError, match=says):
        register(mine, theirs)


def test_scans_of_other_places_are_not_called_disguised():
    rng = np.random.default_rng(2)
    with pytest.raises(OverlapError, match="10000 m") as caught:
        register(epoch(wall(rng)), epoch(wall(rng) + SURVEY))
    assert "reference with" not in str(caught.value)


def test_a_small_part_of_a_large_scan_is_no_other_unit():
    """Its size is less by the factor of an inch, its point spacing is not."""
    rng = np.random.default_rng(3)
    large = wall(rng, 150_000, aspect=40.0)
    part = large[(np.abs(large[:, 0] - 2) < 0.15) & (np.abs(large[:, 2]) < 0.15)]
    assert unit_words(size(large) / size(part), 1.2, "one", "other") == "one looks like other in inches"
    disguise.refuse_other_unit(epoch(large), epoch(part))
    with pytest.raises(OverlapError, match="inches"):
        disguise.refuse_other_unit(epoch(large), epoch(large * 0.0254))


def test_what_is_symmetric_is_not_called_mirrored():
    """A plain wall far from its place fits there mirrored as well as turned."""
    rng = np.random.default_rng(5)
    with pytest.raises(OverlapError, match="m apart"):
        register(epoch(wall(rng, 20_000)), epoch(wall(rng, 20_000) + np.array([50, 0, 0])))


def test_a_pose_that_fits_one_half_better_does_not_replace_the_one_that_both_are_close_in(monkeypatch):
    """Half of a plain wall has moved, and turned by half a turn the other half would fit exactly."""
    rng = np.random.default_rng(5)
    a, b = (wall(rng, 20_000) for _ in range(2))
    turned = np.diag([-1.0, 1, -1, 1])

    def turn(mine, theirs, *, mirrored):
        return 0.0 if mirrored else 1.0, turned @ np.linalg.inv(theirs[-1].T_grid_epoch)

    monkeypatch.setattr(disguise, "_by_axes", turn)
    moved = b[:, 0] < np.quantile(b[:, 0], 0.5)
    result = register(epoch(a), epoch(b + np.where(moved[:, None], [0, 0.02, 0], 0.0)))
    assert result.start == "identity"


def test_a_strongly_moved_wall_is_no_disguise():
    """60 mm of movement over a third: far from tight, and no mirror image fits better."""
    rng = np.random.default_rng(4)
    a, b = (wall(rng, relief=0.03) for _ in range(2))
    moved = b[:, 0] < np.quantile(b[:, 0], 0.35)
    result = register(epoch(a), epoch(b + np.where(moved[:, None], [0, 0.06, 0], 0.0)))
    error = (apply(result.T_ref_cur, b) - b)[~moved]
    assert np.abs(error).max() < 1e-3


def test_every_order_of_axes_is_there_once_and_has_words():
    both = [*axis_orders(mirrored=True), *axis_orders(mirrored=False)]
    assert len({(M + 0.0).tobytes() for M in both}) == len(both) == 48
    assert {round(np.linalg.det(M)) for M in axis_orders(mirrored=True)} == {-1}
    assert next(M for M in both if axes_words(M) is None).tolist() == np.eye(3).tolist()
    assert sum(axes_words(M) is None for M in both) == 1
    assert axes_words(motion(40, 0.0)[:3, :3]) is None


@pytest.mark.parametrize("ratio", [1.0, 2.0, 7.0, 250.0, 0.0])
def test_ratios_that_are_no_unit_have_no_words(ratio):
    assert unit_words(ratio, 1.1, "a", "b") is None
