# SPDX-License-Identifier: MIT
"""One run per scene, shared by all tests of the session."""

from __future__ import annotations

import runpy
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import scanstrain
from scanstrain.synthetic import Scan, first_epoch, sample_truth

HERE = Path(__file__).parent
MEASURES = runpy.run_path(str(HERE / "scene_measures.py"))
SAMPLES = HERE.parents[1] / "sample_clouds"
GAUGE_LENGTH, GAUGE_SPACING = 0.6, 0.15


@dataclass(frozen=True)
class Run:
    """A finished comparison of two sample clouds and what only the simulation knows of them."""

    result: Any
    sample: Any
    scans: tuple[Scan, Scan]
    errors: Any
    bounds: np.ndarray
    clear: np.ndarray

    @property
    def reference_class(self):
        """Class code of every reference point: 6 the structure, 2 floor or pavement, 1 the rest."""
        return self.result.reference.classification


def run_of(name, **options):
    """Compare a sample cloud with the first epoch of its object, through the files."""
    sample, first = sample_truth(name), first_epoch(name)
    files = [SAMPLES / f"{each}.laz" for each in (first.name, name)]
    result = scanstrain.compare(*files, gauge_length=GAUGE_LENGTH, gauge_spacing=GAUGE_SPACING, **options)
    shift = result.reference.origin - np.asarray(sample.scene.origin)
    errors = MEASURES["errors_of"](sample.scene, result.field, shift=shift, registration=result.registration)
    scans = first.scan(), sample.scan()
    rows = []
    for scan, source in zip(scans, (first, sample), strict=True):
        on = scan.target == -1
        rows.append(
            (
                scan.material[on],
                MEASURES["beam_variance"](scan, source.setups, source.scene, source.scanner, on),
            )
        )
    bounds = MEASURES["normal_bounds"](sample.scene.surface, errors.material, GAUGE_LENGTH / 2, *rows)
    return Run(result, sample, scans, errors, bounds, clear_of_fixtures(result, errors))


def clear_of_fixtures(result, errors):
    """Gauges whose patch shows the structure alone: nothing that stands on it, no end of it."""
    from scipy.spatial import cKDTree

    strange = result.reference.points[result.reference.classification != 6]
    distance, _ = cKDTree(strange).query(result.field.position)
    return errors.inside & (distance > GAUGE_LENGTH / 2)


@pytest.fixture(scope="session")
def wall():
    return run_of("wall_2031-09-13", structure="wall")


@pytest.fixture(scope="session")
def adit():
    return run_of("adit_2031-09-12", structure="tunnel")


@pytest.fixture(scope="session", params=["wall", "adit"])
def sample_run(request):
    return request.getfixturevalue(request.param)
