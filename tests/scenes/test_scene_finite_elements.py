# SPDX-License-Identifier: MIT
"""Strains of a linear-elastic wall panel and ring, computed by a general finite-element library and then scanned.

The value that a gauge should show is the average of the exact strain over its patch with the weights of an affine fit
(`scene_elements.patch_strain`); how often the interval also holds the strain at the
gauge's very place depends on how much that changes over the patch, and is looked at beside it.
"""

from __future__ import annotations

import runpy
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scanstrain.neighbourhood import fit_affine
from scanstrain.strain import compute_strain
from scanstrain.synthetic import Lining, Wall, sample_epoch, truth_at

HERE = Path(__file__).parent
ELEMENTS = runpy.run_path(str(HERE / "scene_elements.py"))
MEASURES = runpy.run_path(str(HERE / "scene_measures.py"))
NAMES = ("strain_u", "strain_v", "shear_uv")
COVERED = 0.93
"""Demand on the share of gauges whose 95 % interval holds the average over the patch [1]."""
INNER, THICKNESS, MOVEMENT = 1.375, 0.25, 0.008
GAUGE = 0.6
PANEL = ELEMENTS["SettledPanel"](3.0, 2.4, 0.03)
RING = ELEMENTS["LoadedRing"](INNER, THICKNESS, MOVEMENT)


@dataclass(frozen=True)
class Recovered:
    """Components along (u, v, uv) of gauges whose patch lies on the object, (n, 3) each: found, its error, truths."""

    found: np.ndarray
    sd: np.ndarray
    average: np.ndarray
    point: np.ndarray
    strain: Any
    material: np.ndarray


def recover(surface, deformation, *, structure, seed, spacing, noise=3e-4):
    """Scan a body twice and measure its strain, the datum taken as known: strain does not depend on it."""
    scene = MEASURES["textured"](surface, deformation, seed=seed)
    epochs = [
        sample_epoch(scene, deformed=bool(k), spacing=spacing, noise=noise, intensity_noise=30.0, seed=1000 * seed + k)
        for k in (0, 1)
    ]
    axis = np.array([1.0, 0.0, 0.0]) if structure == "tunnel" else None
    options = {"free_side": np.array([1.5, -5.0, 1.0])} if structure == "wall" else {"axis": axis}
    field = fit_affine(*epochs, gauge_length=GAUGE, gauge_spacing=GAUGE / 4, **options)
    strain = compute_strain(
        field, structure=structure, axis=axis, measure="biot", thickness=THICKNESS, bending_form="thick"
    )
    material = surface.project(field.position)[0]
    seen = (field.status == 0) & np.isfinite(strain.values["strain_u"])
    seen &= MEASURES["within"](surface, material, GAUGE / 2)
    at_point = truth_at(scene, material[seen], measure="biot")
    return Recovered(
        np.stack([strain.values[name][seen] for name in NAMES], 1),
        np.stack([strain.certainty[name].sd[seen] for name in NAMES], 1),
        ELEMENTS["patch_strain"](scene, material[seen], GAUGE / 2),
        np.stack([at_point[name] for name in NAMES], 1),
        strain,
        material[seen],
    )


def panel(seed, spacing=0.012):
    return recover(Wall(PANEL.length, PANEL.height), PANEL, structure="wall", seed=seed, spacing=spacing)


def ring(seed, spacing=0.011):
    return recover(Lining(INNER, 1.6), RING, structure="tunnel", seed=seed, spacing=spacing)


@pytest.fixture(scope="session", params=["panel", "ring"])
def recovered(request):
    return {"panel": panel, "ring": ring}[request.param](1)


def covered(found, truth, sd):
    return MEASURES["coverage"](found - truth, sd)


def test_elements_agree_with_the_closed_form_of_a_thick_ring():
    """Inner face: t/2 times 3 u0 / (R (R - t/2)) (curved beam); the elements add shear and the load's own squeeze."""
    middle = INNER + THICKNESS / 2
    expected = -1.5 * THICKNESS * MOVEMENT / (middle * INNER)
    scene = MEASURES["textured"](Lining(INNER, 1.6), RING)
    found = truth_at(scene, np.array([[0.0, 0.8], [INNER * np.pi / 2, 0.8]]), measure="small")["strain_u"]
    assert found == pytest.approx([expected, -expected], rel=0.03)


def test_elements_hold_the_settled_foot_and_leave_the_top_free():
    scene = MEASURES["textured"](Wall(PANEL.length, PANEL.height), PANEL)
    x = np.linspace(0.2, PANEL.length - 0.2, 9)
    foot = truth_at(scene, np.stack([x, 0 * x], 1), measure="small")
    share = x / PANEL.length
    step = share**3 * (10 - 15 * share + 6 * share**2)
    np.testing.assert_allclose(foot["displacement"][:, 2], -PANEL.settlement * step, atol=1e-5)
    top = truth_at(scene, np.stack([x, 0 * x + PANEL.height], 1), measure="small")
    # no stress across a free edge: e_v = -nu e_u, and no shear
    np.testing.assert_allclose(top["strain_v"], -ELEMENTS["POISSON"] * top["strain_u"], atol=2e-6)
    np.testing.assert_allclose(top["shear_uv"], 0.0, atol=2e-6)


def test_there_is_something_to_recover(recovered):
    assert len(recovered.found) > 100
    assert np.ptp(recovered.average, axis=0).max() > 4 * np.median(recovered.sd)


def test_intervals_hold_the_strain_of_the_patch(recovered):
    assert covered(recovered.found, recovered.average, recovered.sd) >= COVERED


def test_estimates_follow_the_elements_without_a_bias(recovered):
    """Slope of found over true strain, and mean error, each within four of its own standard errors."""
    found, true = recovered.found.ravel(), recovered.average.ravel()
    slope = found @ true / (true @ true)
    # at a quarter of the gauge length some 20 gauges share a patch
    patches = len(found) / 20
    spread = np.std(found - slope * true) / np.sqrt(true @ true) * np.sqrt(len(found) / patches)
    assert abs(slope - 1) < 4 * spread
    assert abs((found - true).mean()) < 4 * np.std(found - true) / np.sqrt(patches)


def test_bending_and_membrane_strain_of_the_ring_come_apart(request, recovered):
    """From curvature alone: the inside bends by t/2 times 3 u0 / (R (R - t/2)); the rest is the middle's."""
    if request.node.callspec.params["recovered"] != "ring":
        found = recovered.strain.details
        seen = np.isfinite(found["bend_u"])
        # in-plane motion bends nothing
        mean, error = MEASURES["mean_and_error"](
            found["bend_u"][seen], recovered.strain.position[seen][:, [0, 2]], GAUGE
        )
        assert abs(mean) < 4 * error
        return
    middle = INNER + THICKNESS / 2
    amplitude = 1.5 * THICKNESS * MOVEMENT / (middle * INNER)
    strain = recovered.strain
    q = Lining(INNER, 1.6).project(strain.position)[0]
    wave = -np.cos(2 * q[:, 0] / INNER)
    seen = (strain.status == 0) & MEASURES["within"](Lining(INNER, 1.6), q, GAUGE / 2)
    seen &= np.isfinite(strain.details["membrane_u"])
    bent = strain.details["bend_u"][seen]
    assert bent @ wave[seen] / (wave[seen] @ wave[seen]) == pytest.approx(amplitude, rel=0.05)
    # the middle of the elements' ring strains by 30 microstrain at most
    assert MEASURES["coverage"](strain.details["membrane_u"][seen], strain.details["membrane_u_sd"][seen]) >= 0.90
