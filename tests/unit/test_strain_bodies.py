# SPDX-License-Identifier: MIT
"""A body's own motion told from its deformation, on fields of exactly known motion."""

import runpy
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from scanstrain.errors import OptionError
from scanstrain.strain.bodies import LEVEL, body_motion
from scanstrain.strain.body_words import name_motions

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
LENGTH = 0.6
SD = 1e-4
NORMAL_ONLY = np.array([False, False, True, *[False] * 4, *[True] * 5])
EVERYTHING = np.ones(12, bool)
FACING_US = np.stack([[1.0, 0, 0], [0, 0, 1], [0, -1, 0]], axis=1)
"""Columns along x, upward, and -y: the wall's free side."""


def grid(columns=12, rows=8, step=LENGTH):
    """Gauges on a wall in y = 0 about the origin."""
    x, z = np.meshgrid(
        (np.arange(columns) - (columns - 1) / 2) * step, (np.arange(rows) - (rows - 1) / 2) * step, indexing="ij"
    )
    return np.stack([x.ravel(), 0 * x.ravel(), z.ravel()], axis=1)


def moved(position, w, t, pivot=(0, 0, 0)):
    """Displacement of places by a finite rotation about a pivot and a translation."""
    arm = position - np.asarray(pivot)
    return Rotation.from_rotvec(w).apply(arm) - arm + t


def field_of(position, displacement, *, frame=FACING_US, rng=None, observable=NORMAL_ONLY, step=LENGTH, sd=SD):
    """Gauges that report a displacement in local axes, with noise where `rng` is given."""
    frame = np.broadcast_to(frame, (len(position), 3, 3))
    u = np.einsum("gik,gi->gk", frame, displacement)
    if rng is not None:
        u = u + rng.normal(0, sd, u.shape)
    return FIELDS["affine_field"](
        position, frame, displacement=u, sd=np.full(12, sd), observable=observable, gauge_length=LENGTH,
        gauge_spacing=step,
    )  # fmt: skip


def body(field, registration=None, **options):
    return body_motion(field, name="wall", gauges=np.ones(len(field), bool), registration=registration, **options)


def test_a_wall_that_leans_as_a_block():
    position = grid()
    motion = body(field_of(position, moved(position, [1e-3, 0, 0], [0, -2e-3, 0])))
    assert motion.verdict == "moved as one body"
    # The free side is -y, and a turn about +x takes the top to -y.
    assert motion.lean == pytest.approx(1e-3, rel=1e-6)
    assert motion.shift == pytest.approx(2e-3, rel=1e-6)
    assert motion.yaw == pytest.approx(0, abs=1e-12)
    np.testing.assert_allclose(motion.normal, [0, -1, 0], atol=1e-12)
    np.testing.assert_allclose(motion.rotation, [1e-3, 0, 0], atol=1e-9)
    np.testing.assert_allclose(motion.translation, [0, -2e-3, 0], atol=1e-9)
    assert motion.residual_rms < 1e-8
    assert motion.rigid.p > 0.999


def test_a_wall_that_turns_about_the_vertical():
    position = grid()
    motion = body(field_of(position, moved(position, [0, 0, 5e-4], [0, 0, 0])))
    assert motion.yaw == pytest.approx(5e-4, rel=1e-6)
    assert abs(motion.lean) < 1e-9


def test_a_wall_that_bends_about_its_middle_has_no_motion_of_its_own():
    position = grid()
    x = position[:, 0]
    bend = 2e-4 * (x**2 - (x**2).mean())
    motion = body(field_of(position, np.outer(bend, [0, -1, 0])))
    assert motion.verdict == "deformed"
    assert max(abs(motion.shift), abs(motion.lean), abs(motion.yaw)) < 1e-12
    assert motion.residual_rms == pytest.approx(np.sqrt((bend**2).mean()), rel=1e-6)
    assert motion.largest_residual == pytest.approx(bend.max(), rel=1e-6)
    assert abs(motion.largest_place[0]) == pytest.approx(x.max())
    # What the motion of a bent wall is depends on where one looks: more than gauges of 0.1 mm alone would leave open.
    assert motion.shift_sd == pytest.approx(np.sqrt((bend**2).mean() / len(x)), rel=0.1)


def test_lean_and_bulge_together():
    position = grid()
    bulge = 3e-3 * np.exp(-((position[:, 0] - 0.9) ** 2 + position[:, 2] ** 2) / 0.5)
    motion = body(field_of(position, moved(position, [1e-3, 0, 0], [0, 0, 0]) + np.outer(bulge, [0, -1, 0])))
    assert motion.verdict == "deformed and moved"
    assert motion.lean == pytest.approx(1e-3, rel=0.02)
    np.testing.assert_allclose(motion.largest_place, position[bulge.argmax()])
    assert motion.largest_residual == pytest.approx(bulge.max() - motion.shift, rel=0.1)


def test_a_still_body_is_called_still_and_a_false_word_is_as_rare_as_stated():
    position, rng = grid(6, 5), np.random.default_rng(3)
    verdicts = Counter(body(field_of(position, 0 * position, rng=rng)).verdict for _ in range(400))
    wrong = 400 - verdicts["still"]
    # Two tests at 2.5 %: binomial standard deviation 1.1 %.
    assert wrong / 400 < 2 * LEVEL + 0.025
    assert wrong > 4


@pytest.mark.parametrize("size", [(4, 3), (7, 6), (12, 8)])
def test_standard_errors_cover_93_to_97_percent(size):
    position, rng = grid(*size), np.random.default_rng(5)
    truth = moved(position, [5e-4, 0, -3e-4], [0, -1e-3, 0])
    z = []
    for _ in range(250):
        motion = body(field_of(position, truth, rng=rng))
        z.append(
            [
                (motion.shift - 1e-3) / motion.shift_sd,
                (motion.lean - 5e-4) / motion.lean_sd,
                (motion.yaw + 3e-4) / motion.yaw_sd,
            ]
        )
    # 750 nearly independent numbers: binomial standard deviation 0.8 %.
    assert 0.93 <= (np.abs(z) < 1.96).mean() <= 0.975


def test_overlapping_gauges_do_not_count_twice():
    """Gauges a quarter of their length apart, each the mean of what lies under it: neighbours share most of it."""
    fine, rng = 0.075, np.random.default_rng(7)
    position = grid(30, 20, LENGTH / 4)
    x, z = np.meshgrid(np.arange(-2.7, 2.7, fine), np.arange(-1.95, 1.95, fine), indexing="ij")
    points = np.stack([x.ravel(), z.ravel()], axis=1)
    under = np.linalg.norm(points[None] - position[:, None, [0, 2]], axis=2) < LENGTH / 2
    mean = under / under.sum(axis=1, keepdims=True)
    noise = SD * np.sqrt(np.median(under.sum(axis=1)))
    found, verdicts = [], Counter()
    for _ in range(120):
        un = mean @ rng.normal(0, noise, len(points))
        motion = body(field_of(position, np.outer(un, [0, -1, 0]), step=LENGTH / 4))
        found.append([motion.shift / motion.shift_sd, motion.lean / motion.lean_sd, motion.yaw / motion.yaw_sd])
        verdicts[motion.verdict] += 1
    assert motion.gauges == 600
    assert 36 <= motion.independent <= 44
    # 360 numbers: binomial standard deviation 1.1 %.
    assert 0.92 <= (np.abs(found) < 1.96).mean() <= 0.98
    assert verdicts["still"] > 0.9 * 120


def test_an_error_of_the_registration_is_added_once_and_at_the_right_place():
    """10 000 gauges do not average it away; a tilt of the datum shifts a body that stands far from its pivot."""
    position = grid() + np.array([20.0, 0, 0])
    S = np.diag([1e-5, 1e-5, 2e-5, 1e-4, 1e-4, 1e-4]) ** 2
    field = field_of(position, 0 * position, sd=1e-7)
    motion = body(field, FIELDS["registration"](S))
    # shift along y at x = 20 m: translation of 0.1 mm, and a turn about z of 20 urad over 20 m, 0.4 mm
    assert motion.shift_sd == pytest.approx(np.hypot(1e-4, 4e-4), rel=1e-3)
    assert motion.lean_sd == pytest.approx(1e-5, rel=1e-2)
    assert motion.yaw_sd == pytest.approx(2e-5, rel=1e-2)
    assert motion.verdict == "still"


def test_what_the_registration_left_open_stays_open_where_the_body_shows_it():
    """A textured wall sees its own slide; a datum that is known to 0.1 m along x does not allow to state it."""
    position = grid()
    field = field_of(position, 0 * position + [0.05, 0, 0], observable=EVERYTHING)
    free = body(field)
    assert free.translation[0] == pytest.approx(0.05)
    assert free.weak_directions == ()
    S = np.diag([1e-6, 1e-6, 1e-6, 0.1, 1e-5, 1e-5]) ** 2
    motion = body(field, FIELDS["registration"](S))
    assert [direction.description for direction in motion.weak_directions] == ["slide in the wall's plane along x"]
    assert motion.weak_directions[0].sd == pytest.approx(0.1, rel=1e-3)
    np.testing.assert_allclose(motion.translation, 0, atol=1e-9)
    assert motion.verdict == "still"
    assert np.isfinite([motion.shift, motion.lean, motion.yaw]).all()


def test_tangents_seen_in_few_places_fix_the_motion_in_the_plane():
    position = grid()
    observable = np.tile(NORMAL_ONLY, (len(position), 1))
    observable[::5] = True
    truth = moved(position, [1e-3, 2e-3, -1e-3], [3e-3, 1e-3, -2e-3])
    motion = body(field_of(position, truth, observable=observable))
    assert motion.weak_directions == ()
    np.testing.assert_allclose(motion.rotation, [1e-3, 2e-3, -1e-3], atol=1e-9)
    pivot = moved(motion.pivot[None], [1e-3, 2e-3, -1e-3], [3e-3, 1e-3, -2e-3])[0]
    np.testing.assert_allclose(motion.translation, pivot, atol=1e-9)


def test_large_rotations_are_no_deformation():
    """0.1 rad: first order alone would leave 20 mm of "deformation" at the ends."""
    position = grid()
    frames = FIELDS["random_frames"](np.random.default_rng(1), len(position))
    motion = body(field_of(position, moved(position, [0.05, -0.06, 0.07], [0.2, 0, 0]), frame=frames,
                           observable=EVERYTHING))  # fmt: skip
    assert motion.verdict == "moved as one body"
    np.testing.assert_allclose(motion.rotation, [0.05, -0.06, 0.07], atol=1e-9)
    assert motion.residual_rms < 1e-9


def test_a_slanted_wall_is_described_in_its_own_directions():
    turn = Rotation.from_euler("z", 30, degrees=True).as_matrix()
    position = grid()
    normal = turn @ [0, -1, 0]
    lean = 1e-3 * np.cross([0, 0, 1], normal)
    field = field_of(position @ turn.T, moved(position @ turn.T, lean, 1e-3 * normal), frame=turn @ FACING_US)
    motion = body(field)
    assert motion.lean == pytest.approx(1e-3, rel=1e-6)
    assert motion.shift == pytest.approx(1e-3, rel=1e-6)
    assert [direction.description for direction in motion.weak_directions] == [
        "slide in the wall's plane along (0.87, 0.50, 0.00)",
        "slide in the wall's plane along z",
        "turn in the wall's plane",
    ]


def test_a_floor_does_not_lean():
    position = grid()[:, [0, 2, 1]]
    motion = body(field_of(position, moved(position, [1e-3, 0, 0], [0, 0, 2e-3]), frame=np.eye(3)))
    assert motion.shift == pytest.approx(2e-3, rel=1e-6)
    assert np.isnan([motion.lean, motion.yaw]).all()
    assert motion.rotation[0] == pytest.approx(1e-3, rel=1e-6)
    assert [direction.description for direction in motion.weak_directions] == [
        "slide in the floor's plane along x",
        "slide in the floor's plane along y",
        "turn in the floor's plane",
    ]


@pytest.mark.parametrize("ovalises", [False, True])
def test_a_tunnel_ring_that_settles_and_one_that_ovalises(ovalises):
    theta = np.arange(40) * 2 * np.pi / 40
    ring = FIELDS["ring_field"](
        np.tile(theta, 5), radius=4.0, u0=2e-3 if ovalises else 0.0, sd=np.full(12, SD), observable=NORMAL_ONLY,
        gauge_length=LENGTH,
    )  # fmt: skip
    position = ring.position + np.repeat(np.arange(5) * 0.65, 40)[:, None] * [0, 1, 0]
    settled = np.einsum("gik,i->gk", ring.frame, [0, 0, -3e-3])
    un = np.where(np.isnan(ring.displacement), 0, ring.displacement) + settled
    motion = body(field_of(position, np.einsum("gik,gk->gi", ring.frame, un), frame=ring.frame))
    assert motion.verdict == ("deformed and moved" if ovalises else "moved as one body")
    np.testing.assert_allclose(motion.translation, [0, 0, -3e-3], atol=1e-6)
    words = [direction.description for direction in motion.weak_directions]
    assert words == ["slide along the tunnel axis", "roll about the tunnel axis"]
    if ovalises:
        # un = -u0 cos 2t: rms u0 / sqrt 2
        assert motion.residual_rms == pytest.approx(2e-3 / np.sqrt(2), rel=1e-3)


def test_only_the_gauges_of_the_zone_count():
    position = grid()
    left = position[:, 0] < 0
    u = np.where(left[:, None], [0, -1e-3, 0], [0, 5e-3, 0])
    field = field_of(position, u)
    parts = [body_motion(field, name=name, gauges=mask) for name, mask in (("left", left), ("right", ~left))]
    assert [part.name for part in parts] == ["left", "right"]
    assert [part.shift for part in parts] == pytest.approx([1e-3, -5e-3])
    assert [part.verdict for part in parts] == ["moved as one body"] * 2


@pytest.mark.parametrize("count", [0, 1, 2])
def test_of_fewer_than_three_gauges_nothing_is_said(count):
    position = grid()
    motion = body_motion(field_of(position, 0 * position), name="niche", gauges=np.arange(len(position)) < count)
    assert motion.verdict == "not known"
    assert motion.gauges == count
    assert np.isnan([motion.shift, motion.lean_sd, motion.still.p, *motion.pivot, *motion.covariance.ravel()]).all()


def test_gauges_that_see_nothing_or_have_no_fit_do_not_count():
    position = grid()
    field = FIELDS["affine_field"](
        position, FACING_US, sd=np.full(12, SD), observable=NORMAL_ONLY, gauge_length=LENGTH,
        status=np.arange(len(position)) % 2,
    )  # fmt: skip
    assert body(field).gauges == len(position) // 2
    blind = FIELDS["affine_field"](position, FACING_US, observable=~NORMAL_ONLY & False, gauge_length=LENGTH)
    assert body(blind).verdict == "not known"
    vague = field_of(position, 0 * position, sd=1.0)
    assert body(vague).verdict == "not known"


def test_a_small_zone_says_what_it_cannot_tell():
    """Three gauges within one gauge length are one observation: a shift, untested against bending."""
    position = grid()[:3] * [1, 1, 0.2]
    motion = body(field_of(position, 0 * position + [0, -4e-3, 0], step=0.15))
    assert motion.verdict == "not known"
    assert motion.independent == 1
    assert motion.shift == pytest.approx(4e-3)
    assert motion.shift_sd == pytest.approx(SD, rel=1e-3)
    assert np.isnan(motion.lean)


def test_standard_errors_that_are_estimates_make_the_tests_milder():
    position, rng = grid(), np.random.default_rng(2)
    field = field_of(position, np.outer(rng.normal(0, 1.15 * SD, len(position)), [0, -1, 0]))
    few, sure = body(field, error_dof=20), body(field)
    assert few.rigid.statistic == sure.rigid.statistic > 1
    assert few.rigid.p > sure.rigid.p


def test_scatter_beyond_the_standard_errors_counts():
    """Gauges that scatter twice as much as they claim: "deformed", but the lean's own error follows the scatter."""
    position, rng = grid(), np.random.default_rng(8)
    z = []
    for _ in range(200):
        noisy = rng.normal(0, 2 * SD, len(position))
        motion = body(field_of(position, np.outer(noisy, [0, -1, 0])))
        z.append([motion.shift / motion.shift_sd, motion.lean / motion.lean_sd])
    assert 0.91 <= (np.abs(z) < 1.96).mean() <= 0.985


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"gauges": np.ones(5, bool)}, "one bool a gauge"),
        ({"gauges": np.ones(96)}, "one bool a gauge"),
        ({"gauges": np.ones(96, bool), "error_dof": 0}, "above 0"),
        ({"gauges": np.ones(96, bool), "registration": FIELDS["registration"](np.full((6, 6), np.nan))}, "finite"),
    ],
)
def test_wrong_calls_are_refused(options, words):
    position = grid()
    with pytest.raises(OptionError, match=words):
        body_motion(field_of(position, 0 * position), name="wall", **options)


def test_mixed_motions_are_called_mixed():
    """A helix: a slide with a turn that belongs to it."""
    rng = np.random.default_rng(0)
    normals = rng.normal(size=(300, 3))
    normals /= np.linalg.norm(normals, axis=1, keepdims=True)
    helix = np.array([0, 0, 0.8, 0, 0, 0.6])[:, None]
    [(words, vector)] = name_motions(helix, normals)
    assert words == "a mixed motion, mostly turn about z"
    np.testing.assert_allclose(vector, helix[:, 0], atol=1e-12)
