# SPDX-License-Identifier: MIT
"""How rectangular parts of a wall moved: the whole, bands of height, panels."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.structures.gauge_errors import CORE, GaugeErrors
from scanstrain.structures.wall_plane import FINEST, PATCHES, ROUNDS, spread_by_squares, tukey

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Division = float | Sequence[float] | None

WHOLE = -1
"""Column or row of a part that reaches over all of them."""

MOST_PARTS = 10_000
"""More parts than this come from a size given in a wrong unit."""

QUANTITIES: Mapping[str, tuple[str, str]] = {
    "displacement": ("m", "mean normal displacement of the gauges, positive to the free side"),
    "lean_change": (
        "rad",
        "slope of the normal displacement over height, positive where the top moves to the free side",
    ),
    "yaw_change": ("rad", "slope over distance along the wall, positive where the right end moves to the free side"),
    "offset": ("m", "mean distance of the reference surface from the plane of the wall, positive on the free side"),
    "lean": ("rad", "angle of the reference surface to the vertical, positive where it leans to the free side"),
}
"""Unit and meaning of what is measured of a part."""

MOTIONS = ("displacement", "yaw_change", "lean_change")
"""Those that are the plane of the displacements, in the order of 1, distance along the wall and height."""


@dataclass(frozen=True, slots=True)
class Part:
    """One rectangle on the face of a wall.

    Parameters
    ----------
    kind : {"wall", "band", "panel"}
    column, row : int
        Which one, from the left and from below, counted from 0; -1 for one that reaches over all.
    left, right, bottom, top : float
        Its edges, along the wall and up it [m].
    gauges : int
        Gauges in it.
    effective : float
        Gauges without overlap that would give the mean the same standard error, registration aside [1].
    area : float
        Area that these gauges stand for [m^2].
    values, errors : mapping of str to float
        Every one of `QUANTITIES` and its standard error; NaN where too few gauges support it.
    """

    kind: str
    column: int
    row: int
    left: float
    right: float
    bottom: float
    top: float
    gauges: int
    effective: float
    area: float
    values: Mapping[str, float]
    errors: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class FaceGauges:
    """Gauges on the face of a wall.

    Parameters
    ----------
    moved, sd : ndarray of shape (g,)
        Normal displacement to the free side and its standard error without registration error [m].
    offset : ndarray of shape (g,)
        Distance of the reference surface from the plane [m].
    errors : GaugeErrors
        Places and covariance.
    lean : float
        Of the plane [rad].
    length, spacing : float
        Gauge length and gauge spacing [m].
    """

    moved: FloatArray
    sd: FloatArray
    offset: FloatArray
    errors: GaugeErrors
    lean: float
    length: float
    spacing: float


def edges_of(division: Division, extent: float, option: str) -> FloatArray:
    """Return the edges of parts [m].

    Parameters
    ----------
    division : float, sequence of float or None
        A regular size, beginning at 0, the last part between half and one and a half sizes; or edges that rise; or
        one part that reaches over all.
    extent : float
        Of the wall [m].
    option : str
        What the user knows it by.

    Returns
    -------
    ndarray of shape (k + 1,)

    Raises
    ------
    OptionError
        A size that is none, or edges that do not rise.
    """
    if division is None:
        return np.array([0.0, extent])
    given = np.asarray(division, float)
    fine = bool(np.isfinite(given).all()) and given.ndim <= 1
    if fine and given.ndim == 0 and given > 0 and extent / float(given) <= MOST_PARTS:
        count = max(1, round(extent / float(given)))
        return np.r_[float(given) * np.arange(count), max(extent, float(given) * (count - 0.5))]
    if fine and given.ndim == 1 and len(given) >= 2 and (np.diff(given) > 0).all():
        return given
    raise OptionError(
        explain(option, "a size in metres above 0, or two or more rising edges", f"{division}", "give for example 2.0")
    )


def cut(face: FaceGauges, kind: str, along: FloatArray, up: FloatArray, *, one_column: bool = False) -> Iterator[Part]:
    """Measure every rectangle between edges along and up the wall [m]; `one_column` where it is the full width."""
    _, x, y = face.errors.rows.T
    column = np.clip(np.searchsorted(along, x, side="right") - 1, -1, len(along) - 1)
    row = np.clip(np.searchsorted(up, y, side="right") - 1, -1, len(up) - 1)
    # the last edges belong to the last parts
    column[x == along[-1]], row[y == up[-1]] = len(along) - 2, len(up) - 2
    for k in range(len(along) - 1):
        for m in range(len(up) - 1):
            inside = (column == k) & (row == m)
            bounds = (float(along[k]), float(along[k + 1]), float(up[m]), float(up[m + 1]))
            yield measure_part(face, inside, kind, (WHOLE if one_column else k, m), bounds)


def measure_part(
    face: FaceGauges,
    inside: BoolArray,
    kind: str,
    number: tuple[int, int],
    bounds: tuple[float, float, float, float],
) -> Part:
    """Measure the part that some gauges (g,) lie in.

    The mean and the slopes are those of the plane through the displacements by least squares, every gauge with the same
    weight: quantities of the surface, whatever its shape, and not of the precision with which parts of it were seen.
    """
    values, errors = dict.fromkeys(QUANTITIES, np.nan), dict.fromkeys(QUANTITIES, np.nan)
    count, effective = int(inside.sum()), 0.0
    if count:
        own = face.errors.only(inside)
        rows = own.rows - [0.0, *own.rows[:, 1:].mean(axis=0)]
        flat = np.linalg.eigvalsh(rows[:, 1:].T @ rows[:, 1:] / count)[0] > (face.spacing / 2) ** 2
        # gauges in one line fix a mean, but no plane
        plane = np.linalg.pinv(rows if flat else rows * [1.0, 0.0, 0.0])
        effective = float((face.sd[inside] ** 2).mean() / own.noise_of(plane[:1])[0, 0])
        measured = list(zip(MOTIONS, plane @ face.moved[inside], own.of(plane).diagonal(), strict=True))
        if flat:
            measured += _unevenness(rows, face.offset[inside], face)
        for name, value, variance in measured if flat else measured[:1]:
            values[name], errors[name] = float(value), float(np.sqrt(variance))
    return Part(kind, *number, *bounds, count, effective, count * face.spacing**2, values, errors)


def _unevenness(rows: FloatArray, offset: FloatArray, face: FaceGauges) -> list[tuple[str, float, float]]:
    """Offset and lean of the reference surface with their variances, by Tukey's weights: pipes stand before walls."""
    weight = np.ones(len(rows))
    for _ in range(ROUNDS):
        shape = np.linalg.pinv(rows * np.sqrt(weight)[:, None]) @ (offset * np.sqrt(weight))
        off = offset - rows @ shape
        weight = tukey(off, max(1.4826 * float(np.median(np.abs(off))), FINEST))
    side = max(CORE * face.length, float(np.sqrt(np.ptp(rows[:, 1]) * np.ptp(rows[:, 2]) / PATCHES)))
    spread = spread_by_squares(rows, off, side, weight).diagonal()
    return [("offset", shape[0], spread[0]), ("lean", face.lean + np.arctan(shape[2]), spread[2])]
