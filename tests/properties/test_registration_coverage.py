# SPDX-License-Identifier: MIT
"""Honest standard errors over repeated noise, and independence of the frame."""

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain.registration import register

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, epoch, lining, motion, room, wall = (
    SCENES[name] for name in ("apply", "epoch", "lining", "motion", "room", "wall")
)
SEEDS = 40


def standardised(make, normals, drift=0.0, **options):
    """Error of the registration along the normals over its claimed standard error, shape (seeds, places)."""
    z = []
    for seed in range(SEEDS):
        rng = np.random.default_rng(seed)
        a, b = make(rng, **options), make(rng, **options)
        if drift:
            b = b + normals(b) * (drift * waves(b, rng))[:, None]
        result = register(epoch(a), epoch(b))
        places = make(np.random.default_rng(99), 60, noise=0.0, **options)
        n = normals(places)
        # Clouds lie as they were made: any motion is an error.
        error = ((apply(result.T_ref_cur, places) - places) * n).sum(axis=1)
        z.append(error / np.sqrt(np.einsum("ni,nij,nj->n", n, result.displacement_covariance(places), n)))
    return np.array(z)


def waves(points, rng):
    """Smooth random field of unit variance and a correlation length of 0.07 m."""
    k = rng.normal(0, 14.0, (3, 300))
    return np.sqrt(2 / 300) * np.cos(points @ k + rng.uniform(0, 2 * np.pi, 300)).sum(axis=1)


def across(points):
    return np.tile([0.0, 1.0, 0.0], (len(points), 1))


@pytest.mark.parametrize(
    ("make", "normals", "drift"),
    [(wall, across, 0.0), (lining, SCENES["lining_normals"], 0.0), (wall, across, 0.0005)],
    ids=["wall", "lining", "correlated"],
)
def test_claimed_errors_cover_the_true_ones(make, normals, drift):
    """Also where neighbours share a part of their error."""
    z = standardised(make, normals, drift, **({"spacing": 0.02} if drift else {}))
    # About three independent numbers a seed: the rms is known to 6 %, the share outside 1.96 to 2 %. Held motions blur
    # these small scenes a little, so the lower limit is wide.
    assert 0.5 < np.sqrt((z**2).mean()) < 1.25
    assert (np.abs(z) > 1.96).mean() < 0.12


def test_result_follows_the_frame():
    """The same two clouds in another frame give the same motion in that frame, to a small part of its error."""
    rng = np.random.default_rng(1)
    a, b = room(rng, noise=0.002), apply(motion(0.4, 0.02), room(rng, noise=0.002))
    S = motion(130.0, 7.0)
    result = register(epoch(a), epoch(b))
    second = register(epoch(apply(S, a)), epoch(apply(S, b))).T_ref_cur
    expected = S @ result.T_ref_cur @ np.linalg.inv(S)
    moved = apply(second, apply(S, b)) - apply(expected, apply(S, b))
    # Blocks are cut along the axes of the frame, so other cuts weigh the same noise a little differently.
    assert np.sqrt((moved**2).sum(axis=1).mean()) < 2 * np.sqrt(
        np.trace(result.displacement_covariance(b).mean(axis=0))
    )


def test_order_of_the_points_does_not_matter():
    rng = np.random.default_rng(2)
    a, b = room(rng, noise=0.002), apply(motion(0.4, 0.02), room(rng, noise=0.002))
    first = register(epoch(a), epoch(b))
    order = rng.permutation(len(a))
    second = register(epoch(a[order]), epoch(b[::-1]))
    np.testing.assert_allclose(second.T_ref_cur, first.T_ref_cur, atol=1e-9)
    assert (second.stable == first.stable[order]).mean() > 0.999
