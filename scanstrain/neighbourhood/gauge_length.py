# SPDX-License-Identifier: MIT
"""A gauge length for the scans at hand: long enough for the strain that must be seen, if the texture allows it.

Over a disc of radius R the standard error of an in-plane strain is sqrt(4 / (pi R^4 m)), where m is the tangential
information per area: mean squared slope of intensity and of relief over the noise variance of their difference (summed
squared gradients; practice of image matching). That of a tilt is the same with the normal information, one over
the noise variance, and it is met on any surface.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import group, median_spacing, voxel_keys
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.affine import REQUIRED_STRAIN_SD, REQUIRED_TILT_SD, pair_of_textures
from scanstrain.neighbourhood.covariance import FAMILIES, Covariance
from scanstrain.neighbourhood.level import make_surface

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
    reference: Epoch, current: Epoch, *, use_intensity: bool = True, required_strain_sd: float | None = None
) -> GaugeLength:
    """Choose a gauge length from spacing, noise, texture and extent.

    Parameters
    ----------
    reference, current : Epoch
        Aligned.
    use_intensity : bool
        Whether intensity may fix in-plane components.
    required_strain_sd : float, optional
        Standard error of a strain that is asked for [1]; the metric default otherwise.

    Raises
    ------
    OptionError
        The scans have no extent.
    """
    spacing = max(median_spacing(reference.points), median_spacing(current.points))
    longest = LARGEST_SHARE * float(np.ptp(reference.points, axis=0).max())
    if not min(spacing, longest) > 0:
        raise OptionError(explain("gauge_length", "scans with distinct points", "coincident ones", "export them again"))
    usual = min(USUAL_SPACINGS * spacing, longest)
    wanted = required_strain_sd or REQUIRED_STRAIN_SD
    tangential, normal = _information(reference, current, usual, spacing, use_intensity)
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


def _information(
    reference: Epoch, current: Epoch, length: float, spacing: float, use_intensity: bool
) -> tuple[float, float]:
    """Information per area about tangential and normal motion at a typical place [1/m^4, 1/m^4 over m^2]."""
    reference, current = _sampled(reference, length), _sampled(current, length)
    textures = pair_of_textures(reference, current, length, spacing) if use_intensity else (None, None)
    support, region = max(length / 4, 6 * spacing), max(length / 4, 4 * spacing)
    surfaces = [
        make_surface(epoch.points, texture, spacing, support, region)
        for epoch, texture in zip((reference, current), textures, strict=True)
    ]
    noise = sum(_typical(surface.height.noise) for surface in surfaces)
    density = 1.0 / spacing**2
    tangential = density * _slope([surface.height for surface in surfaces])
    greys = [surface.grey for surface in surfaces if surface.grey is not None]
    if len(greys) == len(surfaces):
        tangential += density * _slope(greys)
    return float(tangential), float(density / noise) if noise > 0 else float("inf")


def _sampled(epoch: Epoch, width: float) -> Epoch:
    """Keep whole cubes of a width [m], evenly, so that about `SAMPLE` points remain: their spacing stays what it is."""
    stride = -(-len(epoch) // SAMPLE)
    if stride == 1:
        return epoch
    order, _, start = group(voxel_keys(epoch.points, 2.0 * width))
    chosen = np.repeat(np.arange(len(start) - 1) % stride == 0, np.diff(start))
    keep = np.sort(order[chosen])
    arrays: dict[str, Any] = {
        name: None if getattr(epoch, name) is None else getattr(epoch, name)[keep]
        for name in ("intensity", "colour", "setup", "classification")
    }
    return replace(epoch, points=epoch.points[keep], **arrays)


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
