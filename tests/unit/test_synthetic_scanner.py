# SPDX-License-Identifier: MIT
"""The simulated scanner: where beams end, what hides what, how noise and intensity depend on incidence."""

from dataclasses import replace

import numpy as np
import pytest

from scanstrain.synthetic import Box, Dome, Lining, RandomField, Rod, Scanner, Scene, Setup, Wall, simulate_scan

# before a wall along x, whose free side is -y
BEFORE = Setup((2.0, -2.0, 1.0), 1, azimuth=(0.3, np.pi - 0.3), elevation=(-0.8, 0.8))
PLAIN = Scene(Wall(4.0, 2.0), origin=(482310.0, 5391270.0, 86.0))


def incidence(scan, setup=BEFORE):
    beam = scan.clean - np.asarray(setup.position)
    return beam[:, 1] / np.linalg.norm(beam, axis=1), np.linalg.norm(beam, axis=1)


def test_beams_end_exactly_on_the_moved_skin():
    lining = Lining(1.9, 4.0, start=(0.0, 0.0, 1.0), bearing=0.2)
    extent = (2 * np.pi * 1.9, 4.0)
    scene = Scene(
        lining,
        Dome(0.02, (3.0, 2.0), 1.0),
        relief=RandomField(extent, rms=1e-3, correlation_length=0.05, seed=3),
    )
    setup = Setup((1.9, 0.5, 0.8), 3)
    scan = simulate_scan(scene, [setup], deformed=True, seed=2, scanner=Scanner(step=0.02))
    np.testing.assert_allclose(scan.clean, scene.points(scan.material, deformed=True), atol=1e-11)
    assert set(scan.epoch.setup.tolist()) == {3}
    assert set(scan.epoch.classification.tolist()) == {6}
    assert (np.linalg.norm(scan.clean - scene.points(scan.material, deformed=False), axis=1) > 0.01).any()


def test_range_noise_grows_with_incidence_as_stated():
    scanner = Scanner(step=3e-3, angle_noise=0.0, range_noise=1e-3, incidence_growth=0.8)
    scan = simulate_scan(PLAIN, [BEFORE], deformed=False, seed=1, scanner=scanner)
    cosine, _ = incidence(scan)
    beam = (scan.clean - np.asarray(BEFORE.position)) / np.linalg.norm(
        scan.clean - np.asarray(BEFORE.position), axis=1, keepdims=True
    )
    error = ((scan.epoch.points - scan.clean) * beam).sum(axis=1)
    for low, high in ((0.95, 1.0), (0.8, 0.82), (0.7, 0.72)):
        rows = (cosine > low) & (cosine <= high)
        growth = np.sqrt(1 + 0.64 * (1 / cosine[rows] ** 2 - 1)).mean()
        assert error[rows].std() == pytest.approx(1e-3 * growth, rel=4 / np.sqrt(2 * rows.sum()) + 0.005)
    np.testing.assert_allclose(scan.noise, 1e-3 * np.sqrt(1 + 0.64 * (1 / cosine**2 - 1)), rtol=1e-12)


def test_angle_noise_moves_points_across_the_beam_in_proportion_to_range():
    scanner = Scanner(step=3e-3, angle_noise=2e-4, range_noise=0.0)
    scan = simulate_scan(PLAIN, [BEFORE], deformed=False, seed=1, scanner=scanner)
    _, distance = incidence(scan)
    shift = np.linalg.norm(scan.epoch.points - scan.clean, axis=1) / distance
    assert np.sqrt((shift**2).mean() / 2) == pytest.approx(2e-4, rel=0.01)


def test_intensity_follows_lambert_and_the_range():
    scanner = Scanner(step=4e-3, intensity_noise=0.0, range_power=2.0, full_range=3.0)
    scan = simulate_scan(PLAIN, [BEFORE], deformed=False, seed=1, scanner=scanner)
    cosine, distance = incidence(scan)
    # rounded to whole counts
    np.testing.assert_allclose(scan.epoch.intensity, 1500 * cosine * (3.0 / distance) ** 2, atol=0.51)


def test_the_spot_blurs_texture_and_more_so_when_wide():
    texture = RandomField((4.0, 2.0), rms=0.2, correlation_length=0.03, seed=5)
    scene = replace(PLAIN, texture=texture)
    scanner = Scanner(step=4e-3, intensity_noise=0.0, range_power=0.0, incidence_power=0.0, divergence=0.0)
    spread = []
    for aperture in (0.0, 0.01):
        scan = simulate_scan(scene, [BEFORE], deformed=False, seed=1, scanner=replace(scanner, aperture=aperture))
        straight = incidence(scan)[0] > 0.85
        exact = scene.intensity(scan.material)
        spread.append(scan.epoch.intensity[straight].std() / exact[straight].std())
    # a disc of diameter d has the variance d^2 / 16 along each axis; the variance of a field with the correlation
    # exp(-(x/l)^2), blurred by s^2 along both, falls to 1 / (1 + 4 s^2 / l^2)
    assert spread[0] == pytest.approx(1.0, abs=1e-3)
    assert spread[1] == pytest.approx((1 + 0.01**2 / (4 * 0.03**2)) ** -0.5, abs=0.002)


def test_a_post_hides_the_wall_behind_it_and_gives_points_itself():
    post = Rod((2.0, -1.0, 0.0), (2.0, -1.0, 2.0), 0.05)
    scan = simulate_scan(PLAIN, [BEFORE], deformed=False, seed=1, scanner=Scanner(step=4e-3), fixtures=[post])
    on_wall, on_post = scan.target == -1, scan.target == 0
    assert on_post.sum() > 500
    np.testing.assert_allclose(np.hypot(*(scan.clean[on_post, :2] - [2.0, -1.0]).T), 0.05, atol=1e-12)
    # seen from 1 m, the half width asin(0.05) is cast to twice the distance
    shadow = 2.0 * np.tan(np.arcsin(0.05))
    offset = np.abs(scan.clean[on_wall, 0] - 2.0)
    assert shadow < offset.min() < shadow + 0.02
    assert np.isnan(scan.material[on_post]).all()
    mixed = scan.target == -2
    assert 10 < mixed.sum() < 0.02 * len(scan.target)
    assert ((scan.clean[mixed, 1] > -1.1) & (scan.clean[mixed, 1] < 0)).all()


def test_thinning_evens_out_the_density():
    counts = []
    for spacing in (None, 0.02):
        scan = simulate_scan(PLAIN, [BEFORE], deformed=False, seed=1, scanner=Scanner(step=5e-3), spacing=spacing)
        near = (np.abs(scan.material - [2.0, 1.0]) < 0.25).all(axis=1).sum()
        far = (np.abs(scan.material - [0.25, 1.0]) < 0.25).all(axis=1).sum()
        counts.append((near, far))
    assert counts[0][0] > 2 * counts[0][1]
    assert counts[1][0] == pytest.approx(0.25 / 0.02**2, rel=0.15)
    assert counts[1][1] == pytest.approx(counts[1][0], rel=0.15)


def test_set_ups_are_merged_in_order_and_repeat_with_their_seed():
    setups = [BEFORE, replace(BEFORE, position=(3.0, -1.5, 1.2), number=2)]
    floor = Box((2.0, -1.5, -0.1), (4.0, 3.0, 0.2), classification=2)
    scan, again, other = (
        simulate_scan(PLAIN, setups, deformed=False, seed=s, scanner=Scanner(step=8e-3), fixtures=[floor])
        for s in (1, 1, 2)
    )
    assert np.all(np.diff(scan.epoch.setup.astype(int)) >= 0)
    assert np.all(np.diff(scan.time) >= 0)
    assert scan.epoch.points.tobytes() == again.epoch.points.tobytes()
    assert not np.isin(np.round(scan.clean, 7), np.round(other.clean, 7)).all(axis=1).any()
    assert set(scan.epoch.classification[scan.target == 0].tolist()) == {2}
