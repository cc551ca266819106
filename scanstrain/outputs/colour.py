# SPDX-License-Identifier: MIT
"""Values to colours: the one place that clouds, keys and figures take their colours from.

The tables are F. Crameri's, through `cmcrameri`: perceptually even and readable with colour-vision deficiency.
Two greys are kept apart from every table: one for "not observable", one for "not significant".
"""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass
from importlib.util import find_spec
from pathlib import Path
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import Attribute
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.colour_maps import map_for, no_map
from scanstrain.outputs.words import status_word

Limits = float | tuple[float, float]
RGB8 = NDArray[np.uint8]

NOT_SIGNIFICANT = (172, 172, 172)
NOT_OBSERVABLE = (88, 88, 88)
TO_16_BIT = 257
"""LAS colours have 16 bits: 255 becomes 65535 (ASPRS LAS 1.4, colour fields)."""

QUANTILE = 0.99
"""Share of the values that lies inside limits which nobody gave: single outliers do not wash the map out."""

SMALLEST_P = 1e-4
"""Lower end of the scale of p-values: smaller ones call for the same attention."""


@dataclass(frozen=True, slots=True)
class Scale:
    """How one attribute becomes a colour.

    Parameters
    ----------
    attribute : Attribute
        What is shown.
    low, high : float
        Values at the ends of the table, in stored units; values beyond take the colour of the end.
    table : ndarray of shape (k, 3), uint8
        Red, green, blue from `low` to `high`; one row a step for steps.
    form : {"linear", "log", "steps"}
        Steps are codes 0, 1, 2, ... with `labels`.
    labels : tuple of str
        Meaning of the steps.
    given : bool
        Whether the limits came from the user.
    shared : int
        How many comparisons of a batch share limits that nobody gave; 0 for limits of one comparison alone.
    """

    attribute: Attribute
    low: float
    high: float
    table: RGB8
    form: Literal["linear", "log", "steps"] = "linear"
    labels: tuple[str, ...] = ()
    given: bool = False
    shared: int = 0

    @property
    def masked(self) -> bool:
        """Whether places without a significant change can be greyed: for changes, not for errors or codes."""
        return self.attribute.kind in ("signed", "magnitude")

    def rows(self, values: NDArray[np.generic]) -> NDArray[np.intp]:
        """Row of the table for every finite value; what is not finite gets row 0 and is for the caller to mask."""
        if self.form == "steps":
            codes = _bits(values) if self.attribute.name == "observed" else np.asarray(values, dtype=np.intp)
            return np.asarray(np.clip(codes, 0, len(self.table) - 1), dtype=np.intp)
        number = np.where(np.isfinite(values.astype(np.float64)), values, self.low).astype(np.float64)
        if self.form == "log":
            share = np.log(np.maximum(number, self.low) / self.low) / np.log(self.high / self.low)
        else:
            share = (number - self.low) / (self.high - self.low)
        rows = np.clip(share, 0.0, 1.0) * len(self.table)
        return np.asarray(np.minimum(rows, len(self.table) - 1), dtype=np.intp)


def choose_scale(
    attribute: Attribute,
    values: NDArray[np.generic],
    *,
    limits: Limits | None = None,
    colour_map: str | None = None,
) -> Scale:
    """Choose table and limits for an attribute.

    Parameters
    ----------
    attribute : Attribute
        What is shown.
    values : ndarray of shape (n,)
        Its values in stored units; what is not finite is ignored.
    limits : float or (float, float), optional
        Ends of the scale in stored units. One number means (-x, x) for signed attributes and (0, x) for others.
        By default the 99 % quantile of the absolute values, rounded up to 1, 2 or 5 times a power of ten, so that
        keys are easy to read.
    colour_map : str, optional
        Table of colours, see `outputs.colour_maps`; by default one that suits the kind of the attribute.

    Returns
    -------
    Scale

    Raises
    ------
    OptionError
        Limits that are not finite, not in order, not symmetric for a signed attribute, or given for a code; a table
        of colours that does not exist, does not suit the attribute, or is given for a code.
    """
    steps = _steps(attribute)
    if steps is not None:
        if limits is not None:
            raise _bad_limits(attribute, "no limits, because it is a code", limits, "leave the limits out")
        if colour_map is not None:
            raise no_map(attribute, colour_map)
        return Scale(attribute, 0.0, float(len(steps)), _step_table(attribute, len(steps)), "steps", steps)
    table = colour_table(map_for(attribute, colour_map))
    if attribute.kind == "probability":
        low, high = (SMALLEST_P, 1.0) if limits is None else _checked(attribute, limits)
        return Scale(attribute, low, high, table, "log", given=limits is not None)
    if attribute.kind == "place":
        low, high = _span(attribute, values) if limits is None else _checked(attribute, limits)
        return Scale(attribute, low, high, table, given=limits is not None)
    if limits is None:
        end = _robust_end(attribute, values)
        return Scale(attribute, -end if attribute.kind == "signed" else 0.0, end, table)
    low, high = _checked(attribute, limits)
    return Scale(attribute, low, high, table, given=True)


def colours(
    values: NDArray[np.generic], scale: Scale, *, significant: NDArray[np.bool_] | None = None
) -> NDArray[np.uint16]:
    """Give every value its colour.

    Parameters
    ----------
    values : ndarray of shape (n,)
        Values in stored units.
    scale : Scale
        From `choose_scale`.
    significant : ndarray of shape (n,), bool, optional
        Where False, a change is shown in the grey of "not significant". Ignored for errors, p-values and codes.

    Returns
    -------
    ndarray of shape (n, 3), uint16
        Red, green, blue, 0 to 65535; the grey of "not observable" where the value is not finite.
    """
    values = np.asarray(values)
    rgb = (scale.table.astype(np.uint16) * TO_16_BIT)[scale.rows(values)]
    if significant is not None and scale.masked:
        rgb[~np.asarray(significant, dtype=bool)] = np.array(NOT_SIGNIFICANT, np.uint16) * TO_16_BIT
    if values.dtype.kind == "f":
        rgb[~np.isfinite(values)] = np.array(NOT_OBSERVABLE, np.uint16) * TO_16_BIT
    return np.asarray(rgb)


@functools.lru_cache(maxsize=32)
def colour_table(name: str, size: int = 256) -> RGB8:
    """Sample a named table of `cmcrameri` evenly: shape (size, 3), uint8, read-only; `_r` at its end turns it round.

    Read from its text file: importing the package brings in half a second of plotting code.
    """
    plain = name.removesuffix("_r")
    spec = find_spec("cmcrameri")
    folder = Path(spec.origin).parent if spec is not None and spec.origin else Path()
    rows = np.loadtxt(folder / "cmaps" / f"{plain}.txt")
    rows = rows[::-1] if name != plain else rows
    chosen = np.minimum((np.linspace(0.0, 1.0, size) * len(rows)).astype(np.intp), len(rows) - 1)
    table = np.asarray(np.round(255 * rows[chosen]), dtype=np.uint8)
    table.setflags(write=False)
    return table


def round_up(value: float) -> float:
    """Round a positive number up to 1, 2 or 5 times a power of ten.

    >>> round_up(0.3), round_up(4.1), round_up(5.0), round_up(640.0)
    (0.5, 5.0, 5.0, 1000.0)
    """
    power = 10.0 ** math.floor(math.log10(value))
    step = next(step for step in (1, 2, 5, 10) if step * power >= value * (1 - 1e-9))
    return float(f"{step * power:.6g}")


def _robust_end(attribute: Attribute, values: NDArray[np.generic]) -> float:
    finite = np.abs(np.asarray(values, dtype=np.float64))
    finite = finite[np.isfinite(finite)]
    end = float(np.quantile(finite, QUANTILE)) * attribute.factor if len(finite) else 0.0
    return (round_up(end) if end > 0 else 1.0) / attribute.factor


def _span(attribute: Attribute, values: NDArray[np.generic]) -> tuple[float, float]:
    """Ends of a scale of places: the whole turn, or all that there is."""
    if attribute.unit == "rad":
        return -math.pi, math.pi
    finite = np.asarray(values, dtype=np.float64)
    finite = finite[np.isfinite(finite)]
    return (0.0, 1.0) if not len(finite) or not np.ptp(finite) > 0 else (float(finite.min()), float(finite.max()))


def _checked(attribute: Attribute, limits: Limits) -> tuple[float, float]:
    signed, probability = attribute.kind == "signed", attribute.kind == "probability"
    if isinstance(limits, (int, float)):
        low, high = (-limits if signed else SMALLEST_P if probability else 0.0), float(limits)
    else:
        low, high = float(limits[0]), float(limits[1])
    if not (math.isfinite(low) and math.isfinite(high) and low < high):
        raise _bad_limits(attribute, "two finite numbers, the lower one first", limits, "give them in stored units")
    if signed and not math.isclose(low, -high):
        raise _bad_limits(attribute, "limits symmetric about zero", limits, f"give {max(-low, high):g}")
    if probability and not 0 < low < high <= 1:
        raise _bad_limits(attribute, "limits above 0 and up to 1", limits, "give for example 0.0001 and 1")
    return low, high


def _bad_limits(attribute: Attribute, required: str, limits: Limits, remedy: str) -> OptionError:
    return OptionError(explain(f"colour limits of {attribute.name}", required, str(limits), remedy))


def _steps(attribute: Attribute) -> tuple[str, ...] | None:
    """Labels of the steps of a code, or None for what is a number."""
    if attribute.name == "status":
        return tuple(status_word(code) for code in Status)
    if attribute.name == "discovery":
        return ("no change beyond the false-discovery control", "changed")
    if attribute.name == "stable":
        return ("not used as stable ground", "stable ground")
    if attribute.name == "observed":
        return ("none", *(f"{count} of 7" for count in range(1, 7)), "all 7")
    return None


def _step_table(attribute: Attribute, count: int) -> RGB8:
    if attribute.name in ("discovery", "stable"):
        return np.array([NOT_SIGNIFICANT, colour_table("vik")[200]], dtype=np.uint8)
    if attribute.name == "observed":
        return np.vstack([np.array([NOT_OBSERVABLE], np.uint8), colour_table("imola", count - 1)])
    # "fine" is pale, so that the reasons stand out
    return np.vstack([np.array([[222, 230, 236]], np.uint8), colour_table("batlow", count - 1)])


def _bits(values: NDArray[np.generic]) -> NDArray[np.intp]:
    return np.bitwise_count(np.asarray(values, dtype=np.uint8)).astype(np.intp)
