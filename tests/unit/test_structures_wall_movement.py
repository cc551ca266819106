# SPDX-License-Identifier: MIT
"""Lean, bands, panels and bulge from gauges, with standard errors that hold although gauges overlap."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.errors import OptionError
from scanstrain.linalg import cross_matrix
from scanstrain.structures import Wall, bulge_rows, bulge_units, measure_wall, wall_rows, wall_units
from scanstrain.structures.bulge import find_bulges, remainder
from scanstrain.structures.gauge_errors import datum_on, gauge_errors
from scanstrain.structures.wall_parts import FaceGauges, edges_of, measure_part

WALLS = runpy.run_path(str(Path(__file__).parents[1] / "structures_walls.py"))
LENGTH, HEIGHT, GAUGE, SPACING = 5.0, 4.0, 0.8, 0.2
right, up, normal = WALLS["axes"](0.3, 0.02)
WALL = Wall(np.array([5.0, 3, 1]), normal, right, up, LENGTH, HEIGHT, 0.05, 1e-5)
PLACES = WALLS["grid"](LENGTH, HEIGHT, SPACING)
SD = np.full(len(PLACES), 1e-4)


def measured(moved, sd=SD, offset=0.0, **options):
    positions = WALL.places(*PLACES.T) + np.outer(np.broadcast_to(offset, len(PLACES)), normal)
    return measure_wall(WALL, positions, moved, sd, gauge_length=GAUGE, gauge_spacing=SPACING, **options)


def rigid(shift, yaw, lean):
    return shift + yaw * PLACES[:, 0] + lean * PLACES[:, 1]


@pytest.fixture(scope="module")
def noisy():
    """Errors of gauges as fits to the same white noise of points make them: 500 draws, and their standard error."""
    places = WALLS["grid"](LENGTH, HEIGHT, SPACING, 0.1)
    fit = WALLS["gauge_operator"](places, LENGTH, HEIGHT, GAUGE, 0.05)
    rng = np.random.default_rng(3)
    sd = 1e-3 * np.sqrt(np.asarray(fit.multiply(fit).sum(axis=1)).ravel())
    return places, sd, (fit @ (1e-3 * rng.normal(size=(fit.shape[1], 500)))).T


def test_a_wall_that_tilts_leans_and_turns_alike_in_all_its_parts():
    result = measured(rigid(0.002, -0.0004, 0.0015), panel=([0.0, 2.4, 5.0], 2.0), bands=1.0)
    assert [len(result.of_kind(kind)) for kind in ("wall", "band", "panel")] == [1, 4 + 2 * 4, 4]
    for part in result.parts:
        assert part.values["lean_change"] == pytest.approx(0.0015, abs=1e-10)
        assert part.values["yaw_change"] == pytest.approx(-0.0004, abs=1e-10)
        middle = rigid(0.002, -0.0004, 0.0015)[
            (PLACES[:, 0] > part.left) & (PLACES[:, 0] < part.right)
            & (PLACES[:, 1] > part.bottom) & (PLACES[:, 1] < part.top)
        ]  # fmt: skip
        assert part.gauges == len(middle)
        assert part.area == pytest.approx((part.right - part.left) * (part.top - part.bottom))
        assert part.values["displacement"] == pytest.approx(middle.mean(), abs=1e-10)
    # only rounding remains
    assert all(abs(found.height) < 1e-12 for found in (result.bulge, result.hollow) if found is not None)


@pytest.mark.parametrize(
    "part",
    [
        lambda x, y: x > 0,
        lambda x, y: (y > 0.8) & (y < 1.6),
        lambda x, y: (abs(x - 2.5) < 1) & (abs(y - 2) < 0.6),
    ],
    ids=["wall", "band", "panel"],
)
def test_intervals_of_overlapping_gauges_cover(noisy, part):
    places, sd, draws = noisy
    errors = gauge_errors(*places.T, sd, gauge_length=GAUGE, datum=np.zeros((3, 3)))
    face, inside = FaceGauges(draws[0], sd, 0 * sd, errors, 0.0, GAUGE, SPACING), part(*places.T)
    names = ("displacement", "lean_change", "yaw_change")
    z = []
    for draw in draws:
        found = measure_part(replace(face, moved=draw), inside, "band", (0, 0), (0, 1, 0, 1))
        z.append([found.values[name] / found.errors[name] for name in names])
    # two standard errors of 500 draws are 2 % about 95 %
    assert (np.abs(z) < 1.96).mean() == pytest.approx(0.95, abs=0.02)
    assert np.std(z, axis=0) == pytest.approx(1.0, abs=0.12)


def test_overlap_counts_and_gauges_apart_do_not_share():
    errors = gauge_errors(*PLACES.T, SD, gauge_length=GAUGE, datum=np.zeros((3, 3)))
    mean = np.full((1, len(SD)), 1 / len(SD))
    apart = gauge_errors(*PLACES.T, SD, gauge_length=1e-3, datum=np.zeros((3, 3)))
    assert apart.noise_of(mean)[0, 0] == pytest.approx(1e-8 / len(SD))
    assert errors.noise_of(mean)[0, 0] > 3 * apart.noise_of(mean)[0, 0]
    assert np.linalg.eigvalsh(errors.noise.toarray())[0] > -1e-12 * 1e-8


def motion_covariance():
    root = np.random.default_rng(8).normal(size=(6, 6)) * np.r_[np.full(3, 1e-5), np.full(3, 3e-5)][:, None]
    return root @ root.T


def carried(places, covariance, pivot):
    J = np.concatenate([-cross_matrix(places - pivot), np.broadcast_to(np.eye(3), (len(places), 3, 3))], axis=2)
    return J @ covariance @ np.swapaxes(J, 1, 2)


def test_registration_error_is_one_motion_of_all_gauges():
    covariance, pivot = motion_covariance(), np.array([4.0, -2.0, 2.0])
    found = datum_on(WALL, lambda places: carried(places, covariance, pivot))
    # the same from the rigid motion itself: shift of the corner along the normal, turns about `up` and `right`
    arm = cross_matrix(WALL.origin - pivot)
    to_plane = np.stack([np.r_[-normal @ arm, normal], np.r_[-up, 0, 0, 0], np.r_[right, 0, 0, 0]])
    # w x right has the normal component -w . up, and w x up has w . right
    np.testing.assert_allclose(found, to_plane @ covariance @ to_plane.T, rtol=1e-6, atol=1e-16)


def test_registration_error_stands_in_movements_and_not_in_the_bulge():
    covariance, pivot = motion_covariance(), np.array([4.0, -2.0, 2.0])
    moved = 0.005 * np.exp(-((PLACES - [2.0, 2.2]) ** 2).sum(axis=1) / 0.5)
    free = measured(moved, panel=(2.5, 2.0))
    tied = measured(moved, panel=(2.5, 2.0), datum=lambda places: carried(places, covariance, pivot))
    for one, other in zip(free.parts, tied.parts, strict=True):
        assert one.values["displacement"] == other.values["displacement"]
        for k, name in ((1, "yaw_change"), (2, "lean_change")):
            added = other.errors[name] ** 2 - one.errors[name] ** 2
            motion = (up if k == 1 else right) @ covariance[:3, :3] @ (up if k == 1 else right)
            assert added == pytest.approx(motion, rel=1e-5)
        assert other.effective == pytest.approx(one.effective)
    assert tied.bulge.height_sd == pytest.approx(free.bulge.height_sd)


def test_the_reference_surface_has_its_own_lean_in_every_band():
    offset = 0.03 * (PLACES[:, 1] / HEIGHT) ** 2 + 0.002 * np.random.default_rng(1).normal(size=len(PLACES))
    # a pipe before it
    offset[np.abs(PLACES[:, 0] - 2.5) < 0.15] += 0.04
    wide = replace(WALL, band=0.2)
    result = measure_wall(
        wall := wide, wall.places(*PLACES.T) + np.outer(offset, normal), 0 * SD, SD,
        gauge_length=GAUGE, gauge_spacing=SPACING, bands=1.0,
    )  # fmt: skip
    for band in result.of_kind("band"):
        leaning = 0.02 + 0.06 * (band.bottom + band.top) / 2 / HEIGHT**2
        assert band.values["lean"] == pytest.approx(leaning, abs=4 * band.errors["lean"])
        assert band.errors["lean"] < 2e-3


def dome(places, height, radius, at):
    away = ((places - at) ** 2).sum(axis=1) / radius**2
    return height * np.where(away < 1, (1 - away) ** 4, 0.0)


def test_intervals_of_a_bulge_cover(noisy):
    places, sd, draws = noisy
    errors = gauge_errors(*places.T, sd, gauge_length=GAUGE, datum=np.zeros((3, 3)))
    at = np.array([2.53, 1.87])
    shape = dome(places, 0.004, 1.4, at)
    truth = find_bulges(remainder(shape, errors), errors, gauge_length=GAUGE, gauge_spacing=SPACING)[0]
    assert truth.height == pytest.approx(0.004, rel=0.03)
    assert truth.width == pytest.approx(2 * 1.4 * np.sqrt(1 - 2**-0.25), rel=0.02)
    z, lowest = [], 1.0
    for draw in draws[:60]:
        found, _ = find_bulges(remainder(shape + draw, errors), errors, gauge_length=GAUGE, gauge_spacing=SPACING)
        z.append([(found.height - truth.height) / found.height_sd, (found.along - at[0]) / found.along_sd,
                  (found.up - at[1]) / found.up_sd, (found.width - truth.width) / found.width_sd])  # fmt: skip
        lowest = min(lowest, found.chance)
        assert found.closed
    assert np.std(z, axis=0) == pytest.approx(1.0, abs=0.25)
    assert (np.abs(z) < 1.96).mean() > 0.9
    assert lowest < 1e-6


def test_a_bulge_of_noise_is_rarely_called_unlikely(noisy):
    places, sd, draws = noisy
    errors = gauge_errors(*places.T, sd, gauge_length=GAUGE, datum=np.zeros((3, 3)))
    chances = [
        found.chance
        for draw in draws[100:150]
        for found in find_bulges(remainder(draw, errors), errors, gauge_length=GAUGE, gauge_spacing=SPACING)
        if found is not None
    ]
    # 100 draws at 5 % are 5, and 10 at most but for one case in a hundred
    assert np.mean(np.array(chances) < 0.05) <= 0.1


def test_a_hollow_is_told_from_a_bulge_and_an_open_one_from_a_closed_one():
    both = dome(PLACES, 0.005, 1.2, [1.4, 2.0]) - dome(PLACES, 0.008, 1.2, [4.9, 2.0])
    result = measured(both + 1e-6)
    assert result.bulge.height == pytest.approx(0.005, rel=0.05)
    assert (result.bulge.along, result.bulge.up) == pytest.approx((1.4, 2.0), abs=0.03)
    assert result.hollow.height == pytest.approx(-0.008, rel=0.05)
    assert (result.bulge.closed, result.hollow.closed) == (True, False)
    assert result.hollow.largest == pytest.approx(both.min(), abs=3e-4)
    assert np.isnan(result.hollow.width_sd)


def test_gauges_of_another_sheet_and_turned_normals_are_seen_to():
    moved = rigid(0.002, 0.0, 0.001)
    normals = np.broadcast_to(normal, (len(PLACES), 3)).copy()
    normals[::2] *= -1
    odd = np.arange(len(PLACES)) % 7 == 0
    normals[odd] = right
    result = measured(np.where(normals @ normal < -0.5, -moved, moved), normals=normals)
    assert result.whole.gauges == (~odd).sum()
    assert result.whole.values["lean_change"] == pytest.approx(0.001, abs=1e-9)


def test_gauges_without_a_value_or_hardly_certain_are_left_out():
    moved, sd = rigid(0.002, 0.0, 0.001), SD.copy()
    moved[:10], moved[10:20], sd[10:20] = np.nan, 5.0, 1.0
    result = measured(moved, sd)
    assert result.whole.gauges == len(PLACES) - 20
    assert result.whole.values["lean_change"] == pytest.approx(0.001, abs=1e-9)
    assert "10 of 490 gauges" in result.warnings[0]


def test_a_part_without_gauges_or_with_one_row_of_them_has_no_number_that_they_do_not_support():
    result = measured(rigid(0.002, 0.0, 0.001), bands=[0.0, 0.2, 0.25, 4.0])
    row, empty, rest = result.of_kind("band")
    assert (row.gauges, empty.gauges) == (25, 0)
    assert np.isfinite(row.values["displacement"])
    assert np.isnan([row.values["lean_change"], row.values["lean"], *empty.values.values()]).all()
    assert np.isfinite(list(rest.values.values())).all()


def test_edges_are_regular_or_those_of_the_user():
    np.testing.assert_allclose(edges_of(1.0, 3.4, "wall_panels"), [0, 1, 2, 3.4])
    np.testing.assert_allclose(edges_of(1.0, 3.6, "wall_panels"), [0, 1, 2, 3, 3.6])
    np.testing.assert_allclose(edges_of(9.0, 3.6, "wall_panels"), [0, 4.5])
    np.testing.assert_allclose(edges_of([0.5, 1.0], 3.6, "wall_panels"), [0.5, 1.0])
    np.testing.assert_allclose(edges_of(None, 3.6, "wall_panels"), [0, 3.6])


@pytest.mark.parametrize("size", [0.0, -1.0, np.nan, [1.0], [1.0, 1.0], [2.0, 1.0], 1e-9, [[0.0, 1.0]]])
def test_sizes_that_make_no_parts_are_refused(size):
    with pytest.raises(OptionError, match="wall_panels: required a size in metres"):
        measured(rigid(0, 0, 0), panel=(size, None))


def test_a_handful_of_gauges_has_movement_but_no_bulge():
    few = np.where((PLACES < 0.7).all(axis=1), rigid(0.002, 0.0, 0.001), np.nan)
    result = measured(few)
    assert (result.whole.gauges, result.bulge, result.hollow, bulge_rows(result)) == (9, None, None, [])
    assert result.whole.values["lean_change"] == pytest.approx(0.001, abs=1e-9)


def test_a_face_without_gauges_is_refused():
    with pytest.raises(OptionError, match="gauges with a result on its face"):
        measured(np.full(len(PLACES), np.nan))


def test_rows_have_the_columns_that_the_units_name():
    result = measured(dome(PLACES, 0.005, 1.2, [2.0, 2.0]), panel=(2.5, None))
    assert all(list(row) == list(wall_units()) for row in wall_rows(result))
    assert [row["kind"] for row in wall_rows(result)].count("panel") == 2
    assert all(list(row) == list(bulge_units()) for row in bulge_rows(result))
    assert bulge_rows(result)[0]["closed"] == 1.0
