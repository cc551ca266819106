# SPDX-License-Identifier: MIT
"""What is in a scan and whether it can serve: spacing, noise, density, texture, overlap."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import InputFileError

FloatArray = NDArray[np.float64]

SAMPLE = 200_000
"""Points that are looked at: medians over more than this do not change in the digits that are shown."""

PATCHES = 5_000
"""Places where noise and density are estimated, for the same reason."""

NEIGHBOURS = 24
"""Points of the smallest patch: enough for a plane and a variance, few enough that a lining is flat there."""

MOST_NEIGHBOURS = 192
"""Points of the largest patch."""

FLAT_ENOUGH = 5.0
"""Patch radius over noise above which the plane, and not the noise, gives a patch its direction."""

CAPTURE_RANGE = 0.3
"""Distance at which two scans count as showing the same place before they are aligned [m]."""


@dataclass(frozen=True, slots=True)
class Inspection:
    """One scan as it is.

    Parameters
    ----------
    crs, unit, date, point_format : str
        As the file says; empty where it does not.
    points, dropped : int
        Points that can be used, and points left out while reading.
    low, high : tuple of three floats
        Corners of the bounding box in file coordinates [m].
    spacing : float
        Median distance from a point to its nearest neighbour in another place [m].
    density : float
        Median number of points per area of surface [1/m^2].
    noise : float
        Median standard deviation about local planes [m]; relief finer than the patch counts as noise.
    patch : float
        Radius of those patches [m].
    duplicates : float
        Share of points that lie exactly on another one.
    intensity : (float, float), optional
        5th and 95th percentile in the file's own units; None without intensity.
    setups : int
        Scanner set-ups told apart by the point source; 0 where the file does not say.
    colour : bool
        Whether the points have colour.
    notices : tuple of str
        What the reader remarked.
    limits : tuple of str
        What this scan cannot show, and why.
    """

    points: int
    dropped: int
    low: tuple[float, float, float]
    high: tuple[float, float, float]
    crs: str
    unit: str
    date: str
    point_format: str
    spacing: float
    density: float
    noise: float
    patch: float
    duplicates: float
    intensity: tuple[float, float] | None
    setups: int
    colour: bool
    notices: tuple[str, ...]
    limits: tuple[str, ...]

    @property
    def extent(self) -> tuple[float, float, float]:
        """Edges of the bounding box [m]."""
        return _triple(np.subtract(self.high, self.low))


@dataclass(frozen=True, slots=True)
class Inspected:
    """One file of several that were looked at.

    Parameters
    ----------
    file : str
        The file.
    found : Inspection, optional
        What is in it; None where it cannot serve.
    refusal : str
        Why it cannot serve; empty where it can.
    overlap : float, optional
        Share of its points that the first scan also shows.
    against : str
        That first scan.
    """

    file: str
    found: Inspection | None = None
    refusal: str = ""
    overlap: float | None = None
    against: str = ""


def inspect_files(paths: Sequence[Path]) -> list[Inspected]:
    """Look at scans one after the other, each beside the first that can serve; a bad one does not stop the others."""
    from scanstrain.io import read_scan

    first: Epoch | None = None
    seen = []
    for path in paths:
        try:
            epoch = read_scan(path)
        except InputFileError as error:
            seen.append(Inspected(str(path), refusal=str(error)))
            continue
        found = inspect_epoch(epoch)
        if first is None:
            first = epoch
            seen.append(Inspected(str(path), found))
        else:
            seen.append(Inspected(str(path), found, overlap=overlap_share(epoch, first), against=first.provenance.path))
    return seen


def inspect_epoch(epoch: Epoch) -> Inspection:
    """Look at one scan.

    Parameters
    ----------
    epoch : Epoch
        As the reader returns it.

    Notes
    -----
    Noise squared is the smallest eigenvalue of the scatter of a patch over k - 3 for k points (a plane takes three),
    median over patches. Patches grow from 24 points until their radius is five times the noise,
    because in a smaller one noise tilts the plane and hides itself.
    """
    cloud = _neighbourly_sample(epoch.points)
    spacing, duplicates = _spacing(cloud)
    noise, density, patch = _planes(cloud)
    intensity = _intensity(epoch.intensity)
    source = epoch.provenance
    return Inspection(
        points=len(epoch),
        dropped=source.dropped_points,
        low=_triple(epoch.points.min(axis=0) + epoch.origin),
        high=_triple(epoch.points.max(axis=0) + epoch.origin),
        crs=source.crs or "",
        unit=source.unit,
        date=source.date or "",
        point_format=_point_format(source.header),
        spacing=spacing,
        density=density,
        noise=noise,
        patch=patch,
        duplicates=duplicates,
        intensity=intensity,
        setups=0 if epoch.setup is None else len(np.unique(epoch.setup)),
        colour=epoch.colour is not None,
        notices=source.notices,
        limits=_limits(intensity, duplicates, source.crs),
    )


def overlap_share(one: Epoch, other: Epoch, *, within: float = CAPTURE_RANGE) -> float:
    """Return the share of the points of `one` that have a point of `other` near them, in file coordinates.

    Parameters
    ----------
    one, other : Epoch
        Two scans, each in its own local frame.
    within : float
        What counts as near [m]; at least three times the spacing of the points that are looked at.
    """
    from scipy.spatial import cKDTree

    there = _thin(other.shifted(one.origin).points, SAMPLE)
    tree = cKDTree(there)
    gap = float(np.median(tree.query(_thin(there, PATCHES), k=2)[0][:, 1]))
    distance, _ = tree.query(_thin(one.points, SAMPLE // 4), distance_upper_bound=max(within, 3 * gap))
    return float(np.isfinite(distance).mean())


def _thin(points: FloatArray, most: int) -> FloatArray:
    """Take evenly spread rows; the same ones each time."""
    return points if len(points) <= most else points[np.linspace(0, len(points) - 1, most).astype(np.int64)]


def _neighbourly_sample(points: FloatArray) -> FloatArray:
    """Take whole cells of the cloud, chosen by a fixed seed, so that the points keep their true neighbours."""
    if len(points) <= SAMPLE:
        return points
    extent = np.sort(points.max(axis=0) - points.min(axis=0))
    # About 2000 points a cell if the points lie on one sheet across the two longer edges of the box.
    edge = max(float(np.sqrt(extent[1] * extent[2] * 2000 / len(points))), float(extent[2]) / 2000)
    cells = np.floor((points - points.min(axis=0)) / edge).astype(np.int64)
    keys = (cells[:, 0] * 4001 + cells[:, 1]) * 4001 + cells[:, 2]
    names, member, counts = np.unique(keys, return_inverse=True, return_counts=True)
    order = np.random.default_rng(0).permutation(len(names))
    chosen = np.zeros(len(names), dtype=bool)
    chosen[order[: max(1, int(np.searchsorted(np.cumsum(counts[order]), SAMPLE)))]] = True
    return _thin(points[chosen[member]], 2 * SAMPLE)


def _spacing(points: FloatArray) -> tuple[float, float]:
    """Return the median nearest-neighbour distance [m] and the share of points on top of another one."""
    from scipy.spatial import cKDTree

    places = np.unique(points, axis=0)
    distance, _ = cKDTree(places).query(places, k=2)
    return float(np.median(distance[:, 1])), 1.0 - len(places) / len(points)


def _planes(points: FloatArray) -> tuple[float, float, float]:
    """Return noise about local planes [m], density [1/m^2] and patch radius [m]."""
    from scipy.spatial import cKDTree

    places = np.unique(points, axis=0)
    tree = cKDTree(places)
    centres = _thin(places, PATCHES)
    k = min(NEIGHBOURS, len(places))
    while True:
        distance, index = tree.query(centres, k=k)
        patches = places[index]
        patches = patches - patches.mean(axis=1, keepdims=True)
        scatter = np.linalg.eigvalsh(np.einsum("pki,pkj->pij", patches, patches))
        # The median of chi-squared with f degrees of freedom is near f (1 - 2/9f)^3 (Wilson and Hilferty 1931).
        middle = (k - 3) * (1 - 2 / (9 * (k - 3))) ** 3
        noise = float(np.sqrt(np.median(np.maximum(scatter[:, 0], 0.0)) / middle))
        radius = float(np.median(distance[:, -1]))
        if radius >= FLAT_ENOUGH * noise or 2 * k > min(MOST_NEIGHBOURS, len(places)):
            # The centre itself is the first of the k points, and the last one lies on the rim.
            return noise, (k - 1) / (np.pi * radius**2), radius
        k *= 2


def _intensity(values: NDArray[np.float32] | None) -> tuple[float, float] | None:
    if values is None:
        return None
    low, high = np.percentile(values, [5, 95])
    return float(low), float(high)


def _limits(intensity: tuple[float, float] | None, duplicates: float, crs: str | None) -> tuple[str, ...]:
    limits = []
    plane = (
        "displacement and strain in the plane of a smooth surface cannot be observed; "
        "normal displacement, tilt and change of curvature can"
    )
    if intensity is None:
        limits.append(f"no intensity: {plane}")
    elif intensity[0] == intensity[1]:
        limits.append(f"intensity does not vary: {plane}")
    if duplicates > 0.01:
        limits.append(f"{100 * duplicates:.1f} % of the points lie exactly on another one: they add no information")
    if not crs:
        limits.append("no coordinate system in the file: whether two scans share one cannot be checked")
    return tuple(limits)


def _point_format(header: object) -> str:
    number = getattr(header, "point_format", None)
    return "" if number is None else f"LAS 1.{getattr(header, 'minor', '?')}, point format {number}"


def _triple(values: FloatArray) -> tuple[float, float, float]:
    x, y, z = (float(value) for value in values)
    return x, y, z
