# SPDX-License-Identifier: MIT
"""The network over the seams: worked by hand."""

import numpy as np
import pytest

from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError
from scanstrain.registration.seams import Seam
from scanstrain.registration.setups import align_setups, setup_corrections

SD = 1e-4


def seam(first, second, translation, rotation=(0, 0, 0), *, pivot=(0, 0, 0), sd=SD, note=""):
    """A seam with independent errors, `sd` [m] and [rad]."""
    covariance = np.eye(6) * np.square(np.broadcast_to(sd, 6))
    return Seam(
        first=first, second=second, points=1000, note=note, rotation=np.array(rotation, float),
        translation=np.array(translation, float), pivot=np.array(pivot, float), covariance=covariance,
        weak_directions=(), offset=0.0, angle=0.0, offset_n=0.0, offset_n_sd=0.0, scatter=0.0, p=0.0,
    )  # fmt: skip


def epoch(*counts):
    """Points about the origin, `counts[k]` of set-up k + 1."""
    rng = np.random.default_rng(1)
    setup = np.repeat(np.arange(1, len(counts) + 1), counts).astype(np.uint16)
    points = rng.normal(size=(len(setup), 3))
    return Epoch(points=points - points.mean(axis=0), origin=np.zeros(3), setup=setup)


def test_the_largest_set_up_is_held_and_the_other_follows():
    one, two = setup_corrections(epoch(50, 90), (seam(1, 2, [0, 3e-3, 0], [0, 0, 1e-3]),))
    assert (one.number, one.points, one.held_by, two.held_by) == (1, 50, 2, 2)
    # The seam takes 2 to 1; as 2 is held, 1 goes the other way.
    np.testing.assert_allclose(one.translation, [0, -3e-3, 0], atol=1e-15)
    np.testing.assert_allclose(one.rotation, [0, 0, -1e-3], atol=1e-15)
    np.testing.assert_allclose(one.covariance, np.eye(6) * SD**2, rtol=1e-9, atol=1e-22)
    np.testing.assert_array_equal(np.r_[two.rotation, two.translation, two.covariance.ravel()], 0)


def test_a_pivot_far_away_is_taken_into_account():
    """A turn of 1 mrad about z at x = 10 m moves the origin by -10 mm along y, and its error by as much."""
    _, two = setup_corrections(epoch(90, 50), (seam(1, 2, [0, 0, 0], [0, 0, 1e-3], pivot=[10, 0, 0]),))
    np.testing.assert_allclose(two.translation, [0, -10e-3, 0], atol=1e-15)
    assert np.sqrt(two.covariance[4, 4]) == pytest.approx(SD * np.sqrt(101))


def test_a_chain_adds_up_and_its_errors_too():
    found = setup_corrections(epoch(90, 50, 50), (seam(1, 2, [1e-3, 0, 0]), seam(2, 3, [2e-3, 0, 0])))
    assert [each.translation[0] for each in found] == pytest.approx([0, 1e-3, 3e-3])
    assert [np.sqrt(each.covariance[3, 3]) for each in found] == pytest.approx([0, SD, SD * np.sqrt(2)])


def test_a_loop_shares_its_misclosure():
    """1 + 1 against 2.3 mm: each of three equal seams takes a third of 0.3 mm."""
    seams = (seam(1, 2, [1e-3, 0, 0]), seam(2, 3, [1e-3, 0, 0]), seam(1, 3, [2.3e-3, 0, 0]))
    found = setup_corrections(epoch(90, 50, 50), seams)
    assert [each.translation[0] for each in found] == pytest.approx([0, 1.1e-3, 2.2e-3])
    assert np.sqrt(found[2].covariance[3, 3]) == pytest.approx(SD * np.sqrt(2 / 3))


def test_what_one_seam_does_not_show_another_may():
    """Set-ups 1 and 2 share a wall that does not show a slide along x, but both share a corner with 3."""
    vague = np.r_[np.full(3, SD), 0.03, SD, SD]
    lone = setup_corrections(epoch(90, 50), (seam(1, 2, [0, 1e-3, 0], sd=vague),))
    np.testing.assert_allclose(lone[1].translation, [0, 1e-3, 0], atol=1e-12)
    seams = (seam(1, 2, [0, 1e-3, 0], sd=vague), seam(1, 3, [0, 0, 0]), seam(2, 3, [-4e-3, -1e-3, 0]))
    found = setup_corrections(epoch(90, 50, 50), seams)
    np.testing.assert_allclose(found[1].translation, [4e-3, 1e-3, 0], atol=1e-6)
    assert np.sqrt(found[1].covariance[3, 3]) == pytest.approx(SD * np.sqrt(2), rel=1e-3)


def test_groups_without_a_common_seam_each_keep_their_largest():
    seams = (seam(1, 2, [1e-3, 0, 0]), seam(3, 4, [0, 2e-3, 0]), seam(2, 3, np.full(3, np.nan), note="too little"))
    found = setup_corrections(epoch(90, 50, 40, 60, 10), seams)
    assert [each.held_by for each in found] == [1, 1, 4, 4, 5]
    assert found[2].translation[1] == pytest.approx(-2e-3)
    assert found[1].translation[0] == pytest.approx(1e-3)


def test_only_points_of_moved_set_ups_move_and_they_stay_rigid():
    scan = epoch(90, 50)
    after = align_setups(scan, (seam(1, 2, [0, 3e-3, 0], [0, 0, 0.05]),))
    np.testing.assert_array_equal(after.points[:90], scan.points[:90])
    first, second = scan.points[90:], after.points[90:]
    c, s = np.cos(0.05), np.sin(0.05)
    np.testing.assert_allclose(second, first @ np.array([[c, s, 0], [-s, c, 0], [0, 0, 1]]) + [0, 3e-3, 0], atol=1e-12)
    assert after.setup is scan.setup


def test_without_seams_nothing_moves():
    scan = epoch(90, 50)
    np.testing.assert_array_equal(align_setups(scan, ()).points, scan.points)


def test_wrong_calls_are_refused():
    scan = epoch(90, 50)
    with pytest.raises(OptionError, match="set-up numbers"):
        align_setups(Epoch(points=scan.points, origin=scan.origin), ())
    with pytest.raises(OptionError, match="seams of this epoch"):
        align_setups(scan, (seam(1, 8, [0, 0, 0]),))
