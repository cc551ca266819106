# SPDX-License-Identifier: MIT
"""Calling the program in this process, with a comparison that is made by hand."""

import runpy
import sys
import types
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from scanstrain.cli import main

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))


@dataclass
class Said:
    code: int
    out: str
    err: str

    @property
    def errors(self):
        return [line for line in self.err.splitlines() if line.startswith("Error: ")]


@pytest.fixture
def call(capsys, tmp_path, monkeypatch):
    """Call the program in an empty folder; return its exit code and what it wrote."""
    monkeypatch.chdir(tmp_path)

    def called(*arguments):
        capsys.readouterr()
        code = main([str(argument) for argument in arguments])
        return Said(code, *capsys.readouterr())

    return called


@pytest.fixture
def fake(monkeypatch):
    """Replace the comparison and the cloud writer; scans whose name holds a key of `broken` fail with its value."""
    made = types.SimpleNamespace(configs=[], broken={})

    def compare_files(reference, current, config, *, progress=None, assume_same_crs=False, labels=None, **_):
        made.configs.append((config, assume_same_crs))
        for step in ("registration", "neighbourhood", "strain") if progress else ():
            progress(step, 0.0)
            progress(step, 1.0)
        for key, error in made.broken.items():
            if key in current.name:
                raise error
        return MADE["make_result"](reference, current)

    pipeline = types.ModuleType("scanstrain.pipeline")
    pipeline.compare_files = compare_files
    monkeypatch.setitem(sys.modules, "scanstrain.pipeline", pipeline)
    monkeypatch.setattr("scanstrain.batch.usable_workers", lambda points: 1)
    monkeypatch.setattr("scanstrain.io.write_result_cloud", MADE["fake_write"])
    monkeypatch.setattr("scanstrain.outputs.report.write.report_page", MADE["fake_page"])
    return made


@pytest.fixture
def scans(tmp_path):
    """Three small scans of one wall, readable LAS files: a.las, b.las, c.las."""
    import laspy

    rng = np.random.default_rng(3)
    for name in "abc":
        las = laspy.LasData(laspy.LasHeader(point_format=6, version="1.4"))
        las.header.scales, las.header.offsets = [1e-4] * 3, [482310.0, 5391270.0, 100.0]
        x, z = np.meshgrid(np.arange(40) * 0.02, np.arange(40) * 0.02, indexing="ij")
        las.x, las.z = x.ravel() + 482310.0, z.ravel() + 100.0
        las.y = 5391270.0 + rng.normal(0, 1e-3, 1600)
        las.intensity = rng.integers(100, 4000, 1600)
        las.write(tmp_path / f"{name}.las")
    return [tmp_path / f"{name}.las" for name in "abc"]


@pytest.fixture
def batch_file(tmp_path, scans):
    """A batch file over those scans."""

    def written(extra="", *, how='comparisons = "first"'):
        epochs = "".join(f'[[epoch]]\nlabel = "{scan.stem}"\nfile = "{scan.name}"\n' for scan in scans)
        path = tmp_path / "batch.toml"
        path.write_text(f'{how}\n[output]\nfolder = "results"\n{epochs}{extra}', encoding="utf-8")
        return path

    return written
