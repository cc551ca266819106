# SPDX-License-Identifier: MIT
"""Sections of a tunnel at even chainages, in both epochs and over the same arcs."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import median_spacing
from scanstrain.errors import OptionError, explain
from scanstrain.structures.axis import Axis
from scanstrain.structures.ellipse import Ellipse, fit_ellipse
from scanstrain.structures.harmonics import Harmonics, fit_harmonics
from scanstrain.structures.measurements import (
    DIAMETERS,
    Pair,
    Pairing,
    chord_name,
    chords_of,
    ellipses_of,
    movements_of,
    waves_of,
)
from scanstrain.structures.outline import ARC, Outline, kept, pieces, trace_outline

FloatArray = NDArray[np.float64]
Datum = Callable[[FloatArray], FloatArray]

NEAR = 1.5
"""Points farther from the axis than this many radii are not looked at."""

MIN_THICKNESS = 0.01
"""Thinnest slice that is cut by default [m]: the scatter of scans at 5 mm gives a diameter to 0.2 mm in it."""

PER_PIECE = 10
"""Points in a piece of arc that make its mean a normal variable and outliers plain."""

END = 0.05
"""Distance of sections from both ends of the axis in radii: end walls are not quite plane."""

MIN_COVERAGE = 0.5
"""Share of the ring that must show in both epochs for an ellipse."""


@dataclass(frozen=True, slots=True)
class Section:
    """One section of a tunnel.

    Parameters
    ----------
    chainage : float
        Along the axis [m].
    place : ndarray of shape (3,)
        The axis there, local coordinates [m].
    frame : ndarray of shape (3, 3)
        Columns right (3 o'clock), up (12 o'clock), forward.
    points_ref, points_cur : float
        Points of each epoch that the outlines rest on.
    coverage : float
        Share of the ring that both epochs show [1].
    gap : float
        Longest arc that they do not both show [rad].
    reference, current : Outline
        Outlines over the common arcs.
    ellipse_ref, ellipse_cur : Ellipse or None
        None where less than half of the ring shows.
    waves : Harmonics or None
        Fourier series of the radial change.
    values, errors : mapping of str to float
        Every quantity of `measurements.QUANTITIES` and of the chords asked for, and its standard error; NaN where the
        visible arcs do not support it.
    """

    chainage: float
    place: FloatArray
    frame: FloatArray
    points_ref: float
    points_cur: float
    coverage: float
    gap: float
    reference: Outline
    current: Outline
    ellipse_ref: Ellipse | None
    ellipse_cur: Ellipse | None
    waves: Harmonics | None
    values: Mapping[str, float]
    errors: Mapping[str, float]


def cut_sections(
    axis: Axis,
    reference: FloatArray,
    current: FloatArray,
    *,
    spacing: float,
    thickness: float | None = None,
    chords: Sequence[Pair] = (),
    datum: Datum | None = None,
) -> tuple[Section, ...]:
    """Cut both epochs square to the axis and measure every section over the arcs that both show.

    The points of a slice become means over pieces of arc of about 0.1 m, gross errors left out. Lengths at a clock
    angle come from a parabola through the means within 10 degrees; the ellipse and the Fourier series from all means.
    Standard errors come from the scatter of means, so errors that are alike over less than 0.1 m count in full.

    Parameters
    ----------
    axis : Axis
        Of the reference epoch.
    reference, current : ndarray of shape (n, 3), (k, 3)
        Points of both epochs in the frame of the reference, local coordinates [m].
    spacing : float
        Between sections [m]; they lie at multiples of it that keep clear of the ends, or in the middle of a short
        tunnel.
    thickness : float, optional
        Of a slice along the axis [m]; see `slice_thickness` for what is taken where it is not given.
    chords : sequence of (hour, hour)
        Chords by the clock hours of their ends, for somebody who looks along the axis.
    datum : callable, optional
        From places (n, 3) to the covariance (n, 3, 3) of the displacement that registration error causes there
        [m^2]. It is added to movements of crown, invert and springlines and to the shift; lengths do not depend on it.

    Returns
    -------
    tuple of Section

    Raises
    ------
    OptionError
        Spacing, thickness or a chord out of range.
    """
    _check(spacing, thickness, chords)
    if thickness is None:
        thickness = max(slice_thickness(median_spacing(points)) for points in (reference, current))
    chainages = section_chainages(axis, spacing, thickness)
    named = {**DIAMETERS, **{chord_name(pair): pair for pair in chords}}
    places, frames = axis.at(chainages)[0], axis.frames(chainages)
    before = _outlines(axis, reference, chainages, thickness)
    after = _outlines(axis, current, chainages, thickness)
    return tuple(
        _measure(s, Pairing(*_common(one, other), frame, place, datum), named)
        for s, place, frame, one, other in zip(chainages, places, frames, before, after, strict=True)
    )


def slice_thickness(spacing: float) -> float:
    """Thickness of a slice [m] that has ten points in a piece of arc, at a point spacing [m]; at least 10 mm.

    >>> slice_thickness(0.005), round(slice_thickness(0.02), 3)
    (0.01, 0.04)
    """
    return max(MIN_THICKNESS, PER_PIECE * spacing**2 / ARC)


def section_chainages(axis: Axis, spacing: float, thickness: float) -> FloatArray:
    """Multiples of the spacing whose slices keep clear of the ends, or the middle where there are none."""
    clear = 0.5 * thickness + END * axis.radius
    first, last = np.ceil(clear / spacing), np.floor((axis.length - clear) / spacing)
    return spacing * np.arange(first, last + 1) if last >= first else np.array([0.5 * axis.length])


def _outlines(axis: Axis, points: FloatArray, chainages: FloatArray, thickness: float) -> list[Outline]:
    """Outline of every section of one epoch."""
    s, rho, clock = axis.polar(points[axis.near(points, chainages, thickness / 2)])
    near = np.flatnonzero(rho < NEAR * axis.radius)
    order = near[np.argsort(s[near], kind="stable")]
    low, high = (np.searchsorted(s[order], chainages + side * thickness / 2) for side in (-1, 1))
    angle = pieces(axis.radius)
    found = []
    for k, chainage in enumerate(chainages):
        mine = order[low[k] : high[k]]
        found.append(trace_outline(clock[mine], rho[mine], s[mine] - chainage, angle=angle, radius=axis.radius))
    return found


def _common(one: Outline, other: Outline) -> tuple[Outline, Outline, Outline]:
    """Both outlines over the pieces that both show, and their difference."""
    both = (one.weight > 0) & (other.weight > 0)
    before, after = (
        Outline(o.angle, np.where(both, o.radius, np.nan), np.where(both, o.weight, 0.0)) for o in (one, other)
    )
    total = np.where(both, before.weight + after.weight, 1.0)
    weight = np.where(both, before.weight * after.weight / total, 0.0)
    return before, after, Outline(one.angle, after.radius - before.radius, weight)


def _measure(chainage: float, pairing: Pairing, chords: Mapping[str, Pair]) -> Section:
    change = pairing.change
    seen = change.weight > 0
    waves = fit_harmonics(change.angle[seen], change.radius[seen], change.weight[seen])
    before, after = _ellipse(pairing.reference, seen), _ellipse(pairing.current, seen)
    measured = [
        *chords_of(pairing, chords, waves),
        *ellipses_of(before, after, _change_covariance(pairing, seen, before, after)),
        *movements_of(pairing),
        *waves_of(pairing, waves),
    ]
    return Section(
        chainage=float(chainage),
        place=pairing.centre,
        frame=pairing.frame,
        points_ref=float(pairing.reference.weight.sum()),
        points_cur=float(pairing.current.weight.sum()),
        coverage=float(seen.mean()),
        gap=_longest_gap(seen),
        reference=pairing.reference,
        current=pairing.current,
        ellipse_ref=before,
        ellipse_cur=after,
        waves=waves,
        values={name: float(value) for name, value, _ in measured},
        errors={name: float(sd) for name, _, sd in measured},
    )


def _ellipse(outline: Outline, seen: NDArray[np.bool_]) -> Ellipse | None:
    if seen.mean() < MIN_COVERAGE:
        return None
    angle, radius = outline.angle[seen], outline.radius[seen]
    return fit_ellipse(radius * np.sin(angle), radius * np.cos(angle), outline.weight[seen])


def _change_covariance(
    pairing: Pairing, seen: NDArray[np.bool_], before: Ellipse | None, after: Ellipse | None
) -> FloatArray:
    """Covariance of the difference of two ellipses from the scatter of the differences that they leave."""
    if before is None or after is None:
        return np.full((5, 5), np.nan)
    J, weight = before.gradient, pairing.change.weight[seen]
    left = pairing.change.radius[seen] - J @ (after.parameters - before.parameters)
    weight = weight * kept(left * np.sqrt(weight))
    spare = max(1, int((weight > 0).sum()) - 5)
    return np.asarray(np.linalg.inv((J.T * weight) @ J) * float((weight * left**2).sum() / spare))


def _longest_gap(seen: NDArray[np.bool_]) -> float:
    """Longest run of pieces that are not seen, around the ring [rad]."""
    if not seen.any():
        return 2 * np.pi
    at = np.flatnonzero(seen)
    steps = np.diff(np.r_[at, at[0] + len(seen)])
    return float((steps.max() - 1) * 2 * np.pi / len(seen))


def _check(spacing: float, thickness: float | None, chords: Sequence[Pair]) -> None:
    for name, value, example in (("section_spacing", spacing, "1.0"), ("section_thickness", thickness, "0.01")):
        if value is not None and not (np.isfinite(value) and value > 0):
            raise OptionError(explain(name, "a length in metres above 0", f"{value}", f"give for example {example}"))
    for pair in chords:
        if len(pair) != 2 or not np.isfinite(pair).all() or (pair[0] - pair[1]) % 12 == 0:
            raise OptionError(
                explain("chords", "pairs of two different clock hours", f"{pair}", "give for example [10.5, 1.5]")
            )
