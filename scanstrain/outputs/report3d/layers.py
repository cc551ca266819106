# SPDX-License-Identifier: MIT
"""One attribute of the view: values as codes whose colours are those of the coloured cloud."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.colour import Limits, Scale, choose_scale
from scanstrain.outputs.notes import KeyNotes
from scanstrain.outputs.report3d.pack import packed, text
from scanstrain.outputs.words import STANDARD_ERROR, TITLES, attribute_of
from scanstrain.result import Result

FloatArray = NDArray[np.float64]

PER_ERROR = 50
"""Steps of a value in a small standard error: rounding is then far below what the interval says."""
PER_ROW = 16
"""Steps of a value in one row of the colour table where no standard error is known."""
MOST_CODES = 65534
"""Codes for values; code 0 says that there is none."""
LOW_SHARE = 0.05
"""A small standard error is this quantile."""
ERROR_STEPS = 254
"""Steps of a standard error on a logarithmic scale, codes 1 to 255; code 0 says that there is none."""

_NEEDS_TEXTURE = ("strain_", "shear_", "dilation", "spin", "disp_x", "disp_y", "disp_z", "rot_")


@dataclass(frozen=True, slots=True)
class Layer:
    """Codes of one attribute at the points of the view.

    A value is code `1 + index - first`, where `index` counts steps from the lower end of the colour scale and
    `per_row` steps share a row of the colour table. The value is read back from the middle of its step.

    Parameters
    ----------
    scale : Scale
        Table and limits of the coloured cloud of this attribute.
    per_row, first : int
        Steps a row, and the index of code 1.
    codes : ndarray of shape (k,), uint16
        Values; 0 where the data support none.
    beyond : (bool, bool)
        Whether values below the first or above the last code were set to it.
    errors : ndarray of shape (k,), uint8
        Standard errors; 0 where there is none.
    error_low, error_ratio : float
        Standard error of code 1 in stored units, and the ratio of one code to the one before.
    limit : float, optional
        Median detection limit in stored units.
    """

    scale: Scale
    per_row: int
    first: int
    codes: NDArray[np.uint16]
    beyond: tuple[bool, bool]
    errors: NDArray[np.uint8]
    error_low: float
    error_ratio: float
    limit: float | None

    def payload(self) -> dict[str, Any]:
        """Give what the page needs, as JSON can hold it."""
        attribute = self.scale.attribute
        title, meaning = TITLES[attribute.name]
        error = {"codes": packed(self.errors), "low": self.error_low, "ratio": self.error_ratio}
        return {
            "name": attribute.name,
            "title": title,
            "meaning": meaning,
            "unit": attribute.person,
            "factor": attribute.factor,
            "kind": attribute.kind,
            "form": self.scale.form,
            "low": self.scale.low,
            "high": self.scale.high,
            "labels": self.scale.labels,
            "masked": self.scale.masked,
            "table": text(self.scale.table),
            "perRow": self.per_row,
            "first": self.first,
            "beyond": self.beyond,
            "codes": packed(self.codes),
            "error": error if self.errors.any() else None,
            "limit": self.limit,
            "missing": _missing(attribute.name),
        }


def make_layer(
    result: Result,
    name: str,
    rows: NDArray[np.intp],
    *,
    limits: Limits | None = None,
    colour_map: str | None = None,
) -> Layer:
    """Code one attribute of a result.

    Parameters
    ----------
    result : Result
    name : str
        Name of the attribute.
    rows : ndarray of shape (k,), intp
        Points of the reference that the view shows, in its order.
    limits : float or (float, float), optional
        Ends of the colour scale, as for the coloured cloud.
    colour_map : str, optional
        Table of colours, as for the coloured cloud.

    Returns
    -------
    Layer

    Raises
    ------
    OptionError
        No such attribute, or limits that do not suit it.
    """
    attribute = attribute_of(name)
    scale = choose_scale(attribute, result.points[name], limits=limits, colour_map=colour_map)
    values = np.asarray(result.points[name])[rows]
    sd_name = STANDARD_ERROR.get(name)
    sd = np.full(len(rows), np.nan) if sd_name is None else np.asarray(result.points[sd_name], np.float64)[rows]
    per_row = 1 if scale.form == "steps" else _steps_a_row(scale, values, sd)
    index = _index(scale, values, per_row)
    known = np.isfinite(np.asarray(values, np.float64))
    first, last = (int(index[known].min()), int(index[known].max())) if known.any() else (0, 0)
    # a scale given far too narrow can leave values beyond the codes: they keep their colour and lose their number
    low = max(first, min(0, last - MOST_CODES + 1))
    high = min(last, low + MOST_CODES - 1)
    codes = np.where(known, np.clip(index, low, high) - low + 1, 0).astype(np.uint16)
    errors, error_low, error_ratio = _error_codes(np.where(known, sd, np.nan))
    return Layer(
        scale, per_row, low, codes, (first < low, last > high),
        errors, error_low, error_ratio, KeyNotes.of(result, name).detection_limit,
    )  # fmt: skip


def _steps_a_row(scale: Scale, values: NDArray[np.generic], sd: FloatArray) -> int:
    """Choose steps fine enough for the standard errors, and few enough for 16 bits."""
    position = _position(scale, values)
    position = position[np.isfinite(position)]
    span = float(np.ptp(position)) + 2 if len(position) else 2.0
    small = sd[np.isfinite(sd) & (sd > 0)]
    wanted = PER_ROW
    if len(small) and scale.form == "linear":
        row = (scale.high - scale.low) / len(scale.table)
        wanted = int(np.ceil(min(row / np.quantile(small, LOW_SHARE) * PER_ERROR, MOST_CODES)))
    return max(1, min(wanted, int(MOST_CODES / span)))


def _index(scale: Scale, values: NDArray[np.generic], per_row: int) -> NDArray[np.int64]:
    """Step of every value; rounding never moves one out of its row of the table."""
    rows = scale.rows(values).astype(np.int64)
    if scale.form == "steps":
        return rows
    position = np.nan_to_num(_position(scale, values) * per_row, nan=0.0, posinf=2.0**40, neginf=-(2.0**40))
    index = np.floor(np.clip(position, -(2.0**40), 2.0**40)).astype(np.int64)
    last = len(scale.table) - 1
    lowest = np.where(rows > 0, rows * per_row, np.iinfo(np.int64).min)
    highest = np.where(rows < last, rows * per_row + per_row - 1, np.iinfo(np.int64).max)
    return np.asarray(np.clip(index, lowest, highest))


def _position(scale: Scale, values: NDArray[np.generic]) -> FloatArray:
    """Place on the colour scale in rows of its table, also outside of it; NaN where there is no value."""
    number = np.asarray(values, dtype=np.float64)
    if scale.form == "log":
        share = np.log(np.maximum(number, scale.low) / scale.low) / np.log(scale.high / scale.low)
    else:
        share = (number - scale.low) / (scale.high - scale.low)
    return np.asarray(np.where(np.isfinite(number), share, np.nan) * len(scale.table))


def _error_codes(sd: FloatArray) -> tuple[NDArray[np.uint8], float, float]:
    known = np.isfinite(sd) & (sd > 0)
    if not known.any():
        return np.zeros(len(sd), np.uint8), 0.0, 1.0
    logs = np.log(np.where(known, sd, 1.0))
    low, high = float(logs[known].min()), float(logs[known].max())
    step = max((high - low) / ERROR_STEPS, 1e-9)
    codes = np.where(known, 1 + np.round((logs - low) / step), 0)
    return codes.astype(np.uint8), float(np.exp(low)), float(np.exp(step))


def _missing(name: str) -> str:
    """Say why a place that could be evaluated has no number of this kind."""
    if name.startswith(_NEEDS_TEXTURE):
        return "the surface carries too little texture or relief here"
    return "the data do not support a number here"
