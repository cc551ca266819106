# SPDX-License-Identifier: MIT
"""What an inspection finds, on clouds whose spacing, noise and overlap are known."""

import numpy as np
import pytest

from scanstrain.epoch import Provenance, make_epoch
from scanstrain.inspection import SAMPLE, inspect_epoch, overlap_share

SURVEY = np.array([482310.0, 5391270.0, 100.0])


def wall(n, spacing, *, noise=0.0, seed=1, shift=0.0):
    """Square grid of n x n points in the x-z plane."""
    a, b = np.meshgrid(np.arange(n) * spacing, np.arange(n) * spacing, indexing="ij")
    xyz = np.column_stack([a.ravel() + shift, np.zeros(n * n), b.ravel()]) + SURVEY
    xyz[:, 1] += np.random.default_rng(seed).normal(0.0, noise, n * n)
    return xyz


@pytest.mark.parametrize(("spacing", "noise"), [(0.01, 0.0005), (0.007, 0.002), (0.003, 0.002)])
def test_noise_about_a_plane_is_found(spacing, noise):
    found = inspect_epoch(make_epoch(wall(150, spacing, noise=noise)))
    assert found.noise == pytest.approx(noise, rel=0.06)


def test_noise_of_a_lining_is_not_its_curvature():
    rng = np.random.default_rng(2)
    angle, along = rng.uniform(0, 2 * np.pi, 100_000), rng.uniform(0, 1.5, 100_000)
    radius = 2.5 + rng.normal(0, 0.001, 100_000)
    found = inspect_epoch(make_epoch(np.column_stack([radius * np.cos(angle), along, radius * np.sin(angle)])))
    assert found.noise == pytest.approx(0.001, rel=0.06)
    assert found.density == pytest.approx(100_000 / (2 * np.pi * 2.5 * 1.5), rel=0.1)


@pytest.mark.parametrize("n", [120, 700])
def test_spacing_and_density_of_a_grid_also_where_only_a_part_is_looked_at(n):
    spacing = 0.008
    found = inspect_epoch(make_epoch(wall(n, spacing)))
    assert (n * n > SAMPLE) == (n == 700)
    assert found.spacing == pytest.approx(spacing, rel=1e-6)
    assert found.density == pytest.approx(1 / spacing**2, rel=0.1)
    assert found.points == n * n


def test_the_box_is_in_file_coordinates():
    found = inspect_epoch(make_epoch(wall(50, 0.02)))
    assert found.low == pytest.approx(tuple(SURVEY))
    assert found.extent == pytest.approx((0.98, 0.0, 0.98), abs=1e-9)


def test_duplicates_are_counted_and_do_not_disturb_the_spacing():
    xyz = wall(50, 0.02)
    found = inspect_epoch(make_epoch(np.vstack([xyz, xyz[:250]])))
    assert found.duplicates == pytest.approx(250 / 2750)
    assert found.spacing == pytest.approx(0.02)
    assert any("exactly on another one" in limit for limit in found.limits)


def test_a_cloud_with_every_point_many_times_is_described_all_the_same():
    xyz = np.repeat(wall(3, 0.5), 20, axis=0)
    found = inspect_epoch(make_epoch(xyz))
    assert found.spacing == pytest.approx(0.5)
    assert found.duplicates == pytest.approx(0.95)


@pytest.mark.parametrize(
    ("intensity", "said"),
    [
        (None, "no intensity"),
        (np.full(2500, 7, np.float32), "does not vary"),
        (np.arange(2500, dtype=np.float32), None),
    ],
)
def test_a_scan_without_texture_is_told_what_it_cannot_show(intensity, said):
    provenance = Provenance(crs='LOCAL_CS["site"]')
    found = inspect_epoch(make_epoch(wall(50, 0.02), intensity=intensity, provenance=provenance))
    assert [said in limit for limit in found.limits] == ([True] if said else [])


def test_missing_coordinate_systems_are_remarked():
    assert any("coordinate system" in limit for limit in inspect_epoch(make_epoch(wall(50, 0.02))).limits)


@pytest.mark.parametrize(("shift", "share"), [(0.0, 1.0), (1.0, 0.65), (5.0, 0.0)])
def test_overlap_is_the_share_within_reach(shift, share):
    """Two walls 2 m wide, one shifted: common are 2 - shift metres, and 0.3 m of reach."""
    one, other = (
        make_epoch(wall(200, 0.01)),
        make_epoch(wall(200, 0.01, shift=shift), origin=SURVEY + np.array([7.0, 0.0, 0.0])),
    )
    assert overlap_share(one, other) == pytest.approx(share, abs=0.02)
