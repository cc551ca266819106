# SPDX-License-Identifier: MIT
"""Drawn epochs as LAZ files, and a whole comparison of two of them, with every file that it writes."""

from __future__ import annotations

import csv
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import laspy
import numpy as np

import scanstrain
from scanstrain.outputs import write_result
from scanstrain.synthetic import sample_epoch

COORDINATE_STEP = 1e-4
"""Of the files [m]: its rounding of 0.03 mm stays below the noise of the scenes."""


def write_scan(path, epoch):
    """Write an epoch with intensity as a LAZ file of point format 6, in no coordinate system."""
    header = laspy.LasHeader(version="1.4", point_format=6)
    header.scales, header.offsets = np.full(3, COORDINATE_STEP), epoch.origin
    header.global_encoding.wkt = True
    las = laspy.LasData(header)
    las.points = laspy.ScaleAwarePointRecord.zeros(len(epoch), header=header)
    las.X, las.Y, las.Z = np.round(epoch.points / COORDINATE_STEP).astype(np.int32).T
    las.intensity = np.clip(np.round(epoch.intensity), 0, 65535).astype(np.uint16)
    las.return_number = las.number_of_returns = np.ones(len(epoch), dtype=np.uint8)
    las.write(str(path), do_compress=True, laz_backend=laspy.LazBackend.Lazrs)
    return path


@dataclass(frozen=True)
class Files:
    """A comparison as its user finds it.

    Parameters
    ----------
    result : Result
        Of the same run, for what no file holds.
    cloud : laspy.LasData
        `strain.laz`.
    gauges, sections : dict of str to ndarray
        Columns of `gauges.csv` and `sections.csv`.
    summary : dict
        `summary.json`.
    """

    result: Any
    cloud: Any
    gauges: dict
    sections: dict
    summary: dict


def compare_drawn(scene, folder, *, seed, draw, **options):
    """Draw both epochs of a scene, write them, compare the files, write the result, and read that.

    `draw` holds options of `sample_epoch`, `options` those of `scanstrain.compare`.
    """
    folder = Path(folder)
    scans = [
        write_scan(
            folder / f"epoch_{number}.laz", sample_epoch(scene, deformed=bool(number), seed=seed + number, **draw)
        )
        for number in (0, 1)
    ]
    result = scanstrain.compare(*scans, **options)
    out = folder / "result"
    write_result(result, out, report=False)
    sections = out / "sections.csv"
    return Files(
        result,
        laspy.read(out / "strain.laz"),
        read_table(out / "gauges.csv"),
        read_table(sections) if sections.exists() else {},
        json.loads((out / "summary.json").read_text(encoding="utf-8")),
    )


def read_table(path):
    """Columns of a table whose first row holds names and whose second one holds units; NaN for an empty cell."""
    with path.open(encoding="utf-8") as stream:
        names, _, *rows = csv.reader(stream)
    columns = dict(zip(names, zip(*rows, strict=True), strict=True))
    columns.pop("status_word", None)
    return {name: np.array([float(cell) if cell else np.nan for cell in cells]) for name, cells in columns.items()}
