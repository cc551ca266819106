# SPDX-License-Identifier: MIT
"""Honest standard errors of motions that intensity fixes, over repeated noise and texture."""

import runpy
from pathlib import Path

import numpy as np

from scanstrain.registration import register
from scanstrain.synthetic import Lining, Scene, sample_epoch

textured = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_measures.py"))["textured"]
LINING = Lining(0.5, 0.8, arc=(-np.pi / 4, 1.25 * np.pi))
SEEDS = 24


def test_claimed_errors_of_slide_and_roll_cover_the_true_ones():
    z = []
    for seed in range(SEEDS):
        scene = textured(LINING, Scene(LINING).deformation, seed=seed)
        a, b = (
            sample_epoch(scene, deformed=False, spacing=0.01, noise=0.002, intensity_noise=30.0, seed=2 * seed + k)
            for k in (0, 1)
        )
        T = np.eye(4)
        T[0, 3] = 0.03
        result = register(a, b.moved(np.linalg.inv(T)))
        assert len(result.texture_directions) == 2
        E = result.T_ref_cur @ np.linalg.inv(T)
        error = np.array([E[0] @ [*result.pivot, 1] - result.pivot[0], E[2, 1]])
        z.append(error / np.sqrt(result.covariance[[3, 0], [3, 0]]))
    z = np.array(z)
    # 48 numbers: the rms is known to 10 %, the share outside 1.96 to 3 %, a mean of 24 to 0.2.
    assert 0.7 < np.sqrt((z**2).mean()) < 1.35
    assert (np.abs(z) > 1.96).mean() < 0.15
    assert (np.abs(z.mean(axis=0)) < 0.7).all()
