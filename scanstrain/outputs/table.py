# SPDX-License-Identifier: MIT
"""The table of gauges: one row each, readable by any spreadsheet.

The first row holds names, the second one units; in pandas: `read_csv(path, skiprows=[1])`.
"""

from __future__ import annotations

import csv
from collections.abc import Iterator
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.words import status_word
from scanstrain.result import Result
from scanstrain.strain.details import DETAILS

POSITION_DECIMALS = 4
"""0.1 mm: far below a gauge, and short at survey coordinates."""

Column = tuple[str, str, list[str]]


def write_gauge_table(result: Result, folder: Path, options: OutputOptions) -> Path:  # noqa: ARG001
    """Write `gauges.csv`: position, normal, axes, every attribute with its standard errors, limits and status."""
    columns = list(_columns(result))
    target = folder / "gauges.csv"
    with target.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.writer(stream, lineterminator="\n")
        writer.writerow(name for name, _, _ in columns)
        writer.writerow(unit for _, unit, _ in columns)
        writer.writerows(zip(*(cells for _, _, cells in columns), strict=True))
    return target


def _columns(result: Result) -> Iterator[Column]:
    strain = result.strain
    yield "gauge", "", [str(number) for number in range(len(strain))]
    for axis, values in zip("xyz", result.gauge_positions.T, strict=True):
        yield axis, "m", _fixed(values, POSITION_DECIMALS)
    for name, vectors in (("normal", strain.normal), ("u", strain.axes[:, :, 0]), ("v", strain.axes[:, :, 1])):
        for axis, values in zip("xyz", vectors.T, strict=True):
            yield f"{name}_{axis}", "1", _fixed(values, 6)
    for attribute in ATTRIBUTES:
        yield attribute.name, attribute.unit, _cells(strain.values[attribute.name])
    for name, limits in strain.detection_limit.items():
        yield f"limit_{name}", _limit_unit(name), _cells(limits)
    for name, values in strain.details.items():
        yield name, DETAILS[name], _cells(values)
    for prefix, each in (("detectable_80", strain.detectable_80), ("bias", strain.bias)):
        for name, sizes in each.items():
            yield f"{prefix}_{name}", _limit_unit(name), _cells(sizes)
    for name, column in (("rigid_p", strain.rigid_p), ("cluster_p", strain.cluster_p)):
        if column is not None:
            yield name, "1", _cells(column)
    lengths = strain.gauge_lengths
    yield "gauge_length", "m", _cells(np.full(len(strain), strain.gauge_length) if lengths is None else lengths)
    yield "status_word", "", [status_word(int(code)) for code in strain.status]


def _limit_unit(name: str) -> str:
    if name in BY_NAME:
        return BY_NAME[name].unit
    return "1/m" if name.startswith("curv") else "1"


def _cells(values: NDArray[np.generic]) -> list[str]:
    """Numbers as text, nothing where there is no number; seven figures hold a float32."""
    if values.dtype.kind != "f":
        return [str(value) for value in values.tolist()]
    return [f"{value:.7g}" if np.isfinite(value) else "" for value in values.tolist()]


def _fixed(values: NDArray[np.float64], decimals: int) -> list[str]:
    return [f"{value:.{decimals}f}" if np.isfinite(value) else "" for value in (values + 0.0).tolist()]
