# SPDX-License-Identifier: MIT
"""A gauge length for the scans at hand: long enough for the strain that must be seen, if the texture allows it.

Over a disc of radius R the standard error of an in-plane strain is sqrt(4 / (pi R^4 m)), where m is the tangential
information per area: mean squared slope of intensity and of relief over the noise variance of their difference (summed
squared gradients; practice of image matching). That of a tilt is the same with the normal information, one over
the noise variance, and it is met on any surface.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.covariance import FAMILIES, Covariance
from scanstrain.neighbourhood.level import make_bare, model_surfaces
from scanstrain.neighbourhood.piece import Box, Source, corners_of
from scanstrain.neighbourhood.setting import REQUIRED_STRAIN_SD, REQUIRED_TILT_SD, Setting
from scanstrain.neighbourhood.textures import pair_of_textures

FloatArray = NDArray[np.float64]

MARGIN = 0.5
"""Aimed at is this share of the required standard error: texture varies, and most gauges should meet it."""
USUAL_SPACINGS = 60.0
"""Shortest choice in point spacings: 2 800 points bring the noise of a normal displacement down to a twenty-fifth of
that of a point. What tilt requires is mostly shorter."""
LARGEST_SHARE = 0.25
"""Longest choice as a share of the object's extent: beyond it a map has no places."""
SAMPLE = 200_000
"""Points of each epoch that are judged at most."""


@dataclass(frozen=True, slots=True)
class GaugeLength:
    """A chosen length.

    Parameters
    ----------
    length : float
        [m], to two digits.
    reason : str
        Why, in one sentence.
    """

    length: float
    reason: str


def choose_gauge_length(
    source: Source,
    *,
    spacing: float | None = None,
    use_intensity: bool = True,
    required_strain_sd: float | None = None,
) -> GaugeLength:
    """Choose a gauge length from spacing, noise, texture and extent.

    Parameters
    ----------
    source : Source
        Both epochs, aligned.
    spacing : float, optional
        Of the points of the coarser epoch [m], if it is known.
    use_intensity : bool
        Whether intensity may fix in-plane components.
    required_strain_sd : float, optional
        Standard error of a strain that is asked for [1]; the metric default otherwise.

    Raises
    ------
    OptionError
        The scans have no extent.
    """
    spacing = source.spacing() if spacing is None else spacing
    longest = LARGEST_SHARE * source.extent()
    if not min(spacing, longest) > 0:
        raise OptionError(explain("gauge_length", "scans with distinct points", "coincident ones", "export them again"))
    usual = min(USUAL_SPACINGS * spacing, longest)
    wanted = required_strain_sd or REQUIRED_STRAIN_SD
    tangential, normal = _information(source, Setting(usual, usual / 4, spacing, use_intensity))
    needed = _needed(tangential, MARGIN * wanted)
    if needed <= longest:
        length = max(needed, usual)
        reached = 1e6 * MARGIN * wanted * (needed / length) ** 2
        return GaugeLength(
            _two_digits(length),
            f"Gauge length chosen: {_two_digits(length):g} m. With it texture and noise give strain at a typical "
            f"place a standard error of {reached:.2g} microstrain; {1e6 * wanted:.0f} are required.",
        )
    want = f"it would take {needed:.2g} m" if np.isfinite(needed) else "no texture or relief shows it"
    length = min(max(_needed(normal, MARGIN * REQUIRED_TILT_SD), usual), longest)
    return GaugeLength(
        _two_digits(length),
        f"Gauge length chosen: {_two_digits(length):g} m, for normal displacement, tilt and bending. In-plane strain "
        f"with a standard error of {1e6 * wanted:.0f} microstrain is out of reach at a typical place: {want}.",
    )


def _needed(information: float, sd: float) -> float:
    """Gauge length at which a gradient reaches a standard error [m]; infinite without information."""
    return float(2.0 * (4.0 / (np.pi * information * sd**2)) ** 0.25) if information > 0 else float("inf")


def _two_digits(length: float) -> float:
    return float(f"{length:.2g}")


def _information(source: Source, setting: Setting) -> tuple[float, float]:
    """Information per area about tangential and normal motion at a typical place [1/m^4, 1/m^4 over m^2]."""
    spacing = setting.width
    pair = _sampled(source, 2.0 * setting.gauge_length)
    greys = pair_of_textures(*pair, setting.gauge_length, spacing) if setting.use_intensity else (None, None)
    surfaces = []
    for epoch, grey in zip(pair, greys, strict=True):
        bare = make_bare(epoch.points, grey, spacing, setting.support(spacing))
        surfaces += model_surfaces([bare], setting.region(spacing))[1]
    noise = sum(_typical(surface.height.noise) for surface in surfaces)
    density = 1.0 / spacing**2
    tangential = density * _slope([surface.height for surface in surfaces])
    textures = [surface.grey for surface in surfaces if surface.grey is not None]
    if len(textures) == len(surfaces):
        tangential += density * _slope(textures)
    return float(tangential), float(density / noise) if noise > 0 else float("inf")


def _sampled(source: Source, width: float) -> tuple[Epoch, Epoch]:
    """Take whole cubes of a width [m], evenly, of about `SAMPLE` points: their spacing stays what it is."""
    stride = -(-max(source.size()) // SAMPLE)
    if stride == 1:
        return source.cut(Box(), 0.0)
    corners = corners_of(source.counts(width)[0][::stride], width)
    pieces = [source.cut(Box(corner, corner + width), 0.0) for corner in corners]
    ours, theirs = zip(*pieces, strict=True)
    return _together(ours), _together(theirs)


def _together(pieces: Sequence[Epoch]) -> Epoch:
    """Put pieces of one epoch behind one another."""
    first = pieces[0]
    intensity = None if first.intensity is None else np.concatenate([each.intensity for each in pieces])
    setup = None if first.setup is None else np.concatenate([each.setup for each in pieces])
    points = np.concatenate([each.points for each in pieces])
    return replace(first, points=points, intensity=intensity, setup=setup, colour=None, classification=None)


def _slope(kinds: list[Covariance]) -> float:
    """Mean squared slope along one direction over the noise variance of the difference [1/m^2].

    A stationary field of variance s and correlation k(r) has the mean squared slope -s k''(0).
    """
    noise = sum(_typical(kind.noise) for kind in kinds)
    if not noise > 0:
        return 0.0
    slopes = []
    for kind in kinds:
        step = 1e-3 * kind.length
        bend = 2.0 * (1.0 - float(FAMILIES[kind.family](np.array(step / kind.length)))) / step**2
        slopes.append(_typical(kind.sill) * bend)
    return min(slopes) / noise


def _typical(values: FloatArray) -> float:
    known = values[np.isfinite(values)]
    return float(np.median(known)) if len(known) else 0.0
