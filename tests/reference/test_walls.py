# SPDX-License-Identifier: MIT
"""Movements of walls against closed forms (`walls_values.toml`), and the lean of the sample wall."""

from __future__ import annotations

import runpy
import tomllib
from pathlib import Path

import numpy as np
import pytest

from scanstrain.io import read_scan
from scanstrain.structures import Wall, fit_wall, measure_wall
from scanstrain.synthetic.demo import WALL

HERE = Path(__file__).parent
VALUES = tomllib.loads((HERE / "walls_values.toml").read_text())
grid = runpy.run_path(str(HERE.parent / "structures_walls.py"))["grid"]
SPACING = 0.1


def moved(length, height, displacement, **options):
    """Result for gauges that show a displacement of (along, up) without error."""
    wall = Wall(
        np.zeros(3), np.array([0.0, -1, 0]), np.array([1.0, 0, 0]), np.array([0.0, 0, 1]), length, height, 0.05, 0.0
    )
    places = grid(length, height, SPACING)
    sd = np.full(len(places), 1e-6)
    return measure_wall(
        wall,
        wall.places(*places.T),
        displacement(*places.T),
        sd,
        gauge_length=0.4,
        gauge_spacing=SPACING,
        bands=SPACING,
        **options,
    )


def cantilever(height, tip):
    return lambda x, y: tip * (6 * (y / height) ** 2 - 4 * (y / height) ** 3 + (y / height) ** 4) / 3


def triangular(height, tip):
    # EI w'''' = q0 (1 - y / L), w = w' = 0 at the base, no moment and shear at the top
    return lambda x, y: (
        tip * (10 * (y / height) ** 2 - 10 * (y / height) ** 3 + 5 * (y / height) ** 4 - (y / height) ** 5) / 4
    )


def profile(result):
    bands = result.of_kind("band")
    return np.array([(b.bottom + b.top) / 2 for b in bands]), np.array([b.values["displacement"] for b in bands])


@pytest.mark.parametrize(("case", "form"), [("cantilever", cantilever), ("cantilever_triangular", triangular)])
def test_the_profile_of_a_cantilever_wall_shows_its_tip_and_its_slope(case, form):
    expected = VALUES[case]
    result = moved(3.0, expected["height"], form(expected["height"], expected["tip_mm"] * 1e-3))
    y, w = profile(result)
    top = np.polynomial.Polynomial.fit(y, w, 5)
    assert 1e3 * top(expected["height"]) == pytest.approx(expected["tip_mm"], abs=0.001)
    assert 1e3 * top.deriv()(expected["height"]) == pytest.approx(expected["tip_slope_mrad"], abs=0.003)


def test_the_lean_of_a_cantilever_wall_is_that_of_the_line_through_its_profile():
    expected = VALUES["cantilever"]
    whole = moved(3.0, expected["height"], cantilever(expected["height"], expected["tip_mm"] * 1e-3)).whole
    assert 1e3 * whole.values["lean_change"] == pytest.approx(expected["lean_mrad"], rel=1e-3)
    assert 1e3 * whole.values["displacement"] == pytest.approx(expected["mean_mm"], rel=1e-3)
    assert whole.values["yaw_change"] == pytest.approx(0.0, abs=1e-9)


def test_the_profile_of_a_propped_wall_has_its_belly_where_it_belongs():
    expected = VALUES["propped"]
    L, load = expected["height"], 10e3 / (48 * 1.6e8)
    y, w = profile(moved(3.0, L, lambda x, y: load * y**2 * (L - y) * (3 * L - 2 * y)))
    near = np.polynomial.Polynomial.fit(y, w, 4)
    fine = np.linspace(2, 5, 30_001)
    assert 1e3 * near(fine).max() == pytest.approx(expected["largest_mm"], rel=1e-4)
    assert fine[near(fine).argmax()] == pytest.approx(expected["at"], abs=2e-3)


def sine(side, w0, x0=0.0, y0=0.0):
    def field(x, y):
        inside = (x > x0) & (x < x0 + side) & (y > y0) & (y < y0 + side)
        return np.where(inside, w0 * np.sin(np.pi * (x - x0) / side) * np.sin(np.pi * (y - y0) / side), 0.0)

    return field


def test_a_bulge_over_the_whole_wall_stands_above_its_best_plane():
    expected = VALUES["sine_bulge"]
    bulge = moved(4.0, 4.0, sine(expected["side"], expected["w0_mm"] * 1e-3)).bulge
    assert 1e3 * bulge.height == pytest.approx(expected["above_plane_mm"], rel=2e-3)
    assert (bulge.along, bulge.up) == pytest.approx((2.0, 2.0), abs=1e-3)


def test_a_bulge_in_a_wall_that_tilts_keeps_its_height_place_and_extent():
    expected = VALUES["sine_bulge"]
    bulging = sine(expected["side"], expected["w0_mm"] * 1e-3, 2.0, 1.0)
    bulge = moved(11.0, 8.0, lambda x, y: bulging(x, y) + 0.003 + 0.001 * y - 0.0005 * x).bulge
    assert 1e3 * bulge.height == pytest.approx(expected["w0_mm"], rel=2e-3)
    assert (bulge.along, bulge.up) == pytest.approx((4.0, 3.0), abs=1e-3)
    assert (bulge.width, bulge.tall) == pytest.approx((expected["width"], expected["width"]), abs=0.02)
    assert bulge.closed
    assert bulge.area == pytest.approx(16.0, abs=0.8)


def test_a_loaded_square_plate_in_a_still_wall_shows_its_middle():
    expected = VALUES["square_plate"]
    a, odd = expected["side"], np.arange(1, 40, 2)
    m, n = np.meshgrid(odd, odd)
    amplitude = 16 * 10e3 / (np.pi**6 * 2.083333e7) * a**4 / (m * n * (m**2 + n**2) ** 2)

    def plate(x, y):
        inside = (np.abs(x - 4) < 2) & (np.abs(y - 3) < 2)
        along, up = (np.sin(np.pi * odd[:, None] * (part - start) / a) for part, start in ((x, 2), (y, 1)))
        return np.where(inside, np.einsum("nm,mg,ng->g", amplitude, along, up), 0.0)

    bulge = moved(11.0, 8.0, plate).bulge
    assert 1e3 * bulge.height == pytest.approx(expected["largest_mm"], rel=3e-3)
    assert (bulge.along, bulge.up) == pytest.approx((4.0, 3.0), abs=1e-3)


def test_the_sample_wall_is_upright_within_two_hundredths_of_a_milliradian():
    scan = read_scan(HERE.parents[1] / "sample_clouds" / "wall_2031-03-05.laz")
    wall = fit_wall(scan.points)
    truth = WALL.frames(np.zeros((1, 2)))[0]
    assert abs(wall.lean) < 2e-5
    assert wall.normal @ truth[:, 2] > np.cos(5e-5)
    assert wall.right @ truth[:, 0] > np.cos(5e-5)
    assert (wall.length, wall.height) == pytest.approx((WALL.length, WALL.height), abs=0.02)
