# SPDX-License-Identifier: MIT
"""Two scans of an object that did not change: the tests call it changed as often as they say, and find nothing."""

from __future__ import annotations

import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import scanstrain
from scanstrain.neighbourhood import fit_affine
from scanstrain.strain import calibrate, compute_strain
from scanstrain.synthetic import Lining, Scene, Still, Wall, first_epoch, sample_epoch, sample_truth, undeformed

FIELDS = runpy.run_path(str(Path(__file__).parents[1] / "strain_fields.py"))
MEASURES = runpy.run_path(str(Path(__file__).parent / "scene_measures.py"))
GAUGE = 0.3
"""Short gauges, so that a small object holds many independent ones: about 220 on each wall, 330 on the lining."""
BARE = Scene(Wall(4.0, 4.0))
SCENES = {
    "textured wall": (MEASURES["textured"](Wall(4.0, 4.0), Still()), 61),
    "bare wall": (BARE, 63),
    "textured lining": (MEASURES["textured"](Lining(2.0, 2.5), Still()), 65),
}


def still(reference):
    """A registration that is known exactly and takes all of the ground as stable."""
    return replace(FIELDS["registration"](1e-18 * np.eye(6)), stable=np.ones(len(reference), bool), overlap=1.0)


@pytest.fixture(scope="module")
def pairs():
    """Strain of every scene, and which gauges have their whole patch on it."""
    out = {}
    for name, (scene, seed) in SCENES.items():
        reference, current = (
            sample_epoch(scene, deformed=False, spacing=0.01, intensity_noise=30.0, seed=seed + k) for k in (0, 1)
        )
        # Vague strains count as given here, so that their part of the test is tested too.
        field = fit_affine(reference, current, gauge_length=GAUGE, gauge_spacing=GAUGE / 2, required_strain_sd=0.02)
        # As the pipeline does: nothing moved, so all of it is stable ground.
        field, _, _ = calibrate(field, still(reference), reference.points)
        out[name] = compute_strain(field), MEASURES["errors_of"](scene, field)
    return out


@pytest.mark.parametrize("name", SCENES)
def test_no_more_than_one_in_twenty_gauges_calls_no_change_a_change(pairs, name):
    strain, errors = pairs[name]
    p = strain.values["significance"][errors.inside]
    assert np.isfinite(p).mean() > 0.98
    # 220 independent gauges: binomial standard deviation 1.5 %, and the neighbourhood's own covariance is estimated.
    # Less is possible: predictions reach some cells beyond the rim, so a short gauge errs less than it states.
    assert np.mean(p[np.isfinite(p)] < 0.05) <= 0.095


def test_over_all_scenes_it_is_one_to_nine_in_a_hundred(pairs):
    p = np.concatenate([strain.values["significance"][errors.inside] for strain, errors in pairs.values()])
    assert 0.01 <= np.mean(p[np.isfinite(p)] < 0.05) <= 0.09


@pytest.mark.parametrize("name", SCENES)
def test_next_to_nothing_is_discovered(pairs, name):
    strain, _ = pairs[name]
    assert strain.values["discovery"].mean() < 0.005


def test_errors_of_every_component_are_as_large_as_stated(pairs):
    """Mean of the squared error over its variance; 1 is perfect."""
    for name in ("textured wall", "textured lining"):
        _, errors = pairs[name]
        for unknown in MEASURES["MOTION"]:
            error, sd = errors.of(unknown)
            assert 0.7 < np.mean((error / sd) ** 2) < 1.5, (name, unknown)


def test_a_second_scan_from_other_places_shows_no_change():
    """The whole path, registration included, on simulated scans: other set-ups, other shadows, another datum."""
    sample = undeformed(sample_truth("wall_2031-09-13"))
    reference, current = first_epoch(sample.name).scan().epoch, sample.scan().epoch
    config = scanstrain.CompareConfig(
        neighbourhood={"gauge_length": 0.6, "gauge_spacing": 0.15}, strain={"structure": "wall"}
    )
    result = scanstrain.compare_epochs(reference, current, config)
    errors = MEASURES["errors_of"](sample.scene, result.field, registration=result.registration)
    values = result.strain.values
    assert errors.inside.sum() > 700
    assert values["discovery"][errors.inside].mean() < 0.03
    error, sd = errors.of("un")
    assert MEASURES["coverage"](error, sd) >= 0.90
    assert MEASURES["rms"](error) < 1e-4
