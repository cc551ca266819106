# SPDX-License-Identifier: MIT
"""Scans of a known deformation: exact truth for tests, benchmarks and the demonstration."""

from __future__ import annotations

from scanstrain.synthetic.bound import cramer_rao, normal_displacement_bound
from scanstrain.synthetic.deformation import (
    Bulge,
    Cantilever,
    Deformation,
    Dome,
    Linear,
    Ovalisation,
    Rigid,
    Still,
    StrainBump,
    Sum,
    Windowed,
)
from scanstrain.synthetic.demo import NAMES, SampleTruth, first_epoch, pose_about, sample_truth, undeformed
from scanstrain.synthetic.fields import RandomField
from scanstrain.synthetic.fixtures import Box, Fixture, Rod
from scanstrain.synthetic.sample import write_sample
from scanstrain.synthetic.sampling import jittered_grid, sample_epoch
from scanstrain.synthetic.scanner import Scan, Scanner, Setup, simulate_scan
from scanstrain.synthetic.scene import Scene
from scanstrain.synthetic.surfaces import Lining, Surface, Wall
from scanstrain.synthetic.truth import truth, truth_at

__all__ = [
    "NAMES",
    "Box",
    "Bulge",
    "Cantilever",
    "Deformation",
    "Dome",
    "Fixture",
    "Linear",
    "Lining",
    "Ovalisation",
    "RandomField",
    "Rigid",
    "Rod",
    "SampleTruth",
    "Scan",
    "Scanner",
    "Scene",
    "Setup",
    "Still",
    "StrainBump",
    "Sum",
    "Surface",
    "Wall",
    "Windowed",
    "cramer_rao",
    "first_epoch",
    "jittered_grid",
    "normal_displacement_bound",
    "pose_about",
    "sample_epoch",
    "sample_truth",
    "simulate_scan",
    "truth",
    "truth_at",
    "undeformed",
    "write_sample",
]
