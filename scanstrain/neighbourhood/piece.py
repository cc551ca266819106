# SPDX-License-Identifier: MIT
"""Pieces of two epochs: a box of space and the points in it and about it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, group, median_spacing, voxel_keys
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.intensity import Survey, survey

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


def _everywhere() -> tuple[FloatArray, FloatArray]:
    return np.full(3, -np.inf), np.full(3, np.inf)


@dataclass(frozen=True, slots=True)
class Box:
    """Part of space, its low sides included.

    Parameters
    ----------
    low, high : ndarray of shape (3,)
        Corners [m]; by default all of space.
    """

    low: FloatArray = field(default_factory=lambda: _everywhere()[0])
    high: FloatArray = field(default_factory=lambda: _everywhere()[1])

    def holds(self, places: FloatArray) -> NDArray[np.bool_]:
        """Say which of the places (n, 3) lie inside."""
        return np.asarray(((places >= self.low) & (places < self.high)).all(axis=1))

    def grown(self, by: float) -> Box:
        """Return the box with every side moved outwards [m]."""
        return Box(self.low - by, self.high + by)

    def meets(self, other: Box) -> bool:
        """Whether the two have a place in common."""
        return bool(((self.low < other.high) & (other.low < self.high)).all())


class Source(Protocol):
    """Two registered epochs, as a whole or on disk, of which parts can be had."""

    def boxes(self) -> Sequence[Box]:
        """Boxes that cover the object without overlap."""

    def counts(self, width: float) -> tuple[IntArray, IntArray]:
        """Keys of the voxels of a width [m] that hold reference points, ascending, and how many each holds."""

    def size(self) -> tuple[int, int]:
        """Points of both epochs."""

    def surveys(self) -> tuple[Survey | None, Survey | None]:
        """What must be known of the intensity of both whole epochs."""

    def cut(self, box: Box, halo: float) -> tuple[Epoch, Epoch]:
        """Both epochs within a box and `halo` about it [m], points in their first order."""

    def near(self, lines: Sequence[FloatArray], reach: float) -> tuple[Epoch, Epoch]:
        """Both epochs within `reach` of lines (k, 3) [m], and somewhat farther."""

    def spacing(self) -> float:
        """Point spacing of the coarser epoch [m]."""

    def extent(self) -> float:
        """Longest side of the reference epoch [m]."""


@dataclass(frozen=True, slots=True)
class InMemory:
    """Two epochs in memory, worked on as one piece."""

    reference: Epoch
    current: Epoch

    def boxes(self) -> Sequence[Box]:
        """Return all of space."""
        return (Box(),)

    def counts(self, width: float) -> tuple[IntArray, IntArray]:
        """Count reference points by voxels."""
        _, key, start = group(voxel_keys(self.reference.points, width))
        return key, np.diff(start)

    def size(self) -> tuple[int, int]:
        """Points of both epochs."""
        return len(self.reference), len(self.current)

    def cut(self, box: Box, halo: float) -> tuple[Epoch, Epoch]:
        """Both epochs within a box grown by `halo` [m]."""
        if not np.isfinite(box.low).any() and not np.isfinite(box.high).any():
            return self.reference, self.current
        wide = box.grown(halo)
        return part_of(self.reference, wide.holds(self.reference.points)), part_of(
            self.current, wide.holds(self.current.points)
        )

    def surveys(self) -> tuple[Survey | None, Survey | None]:
        """Judge the intensity of both epochs."""
        ours, theirs = self.reference, self.current
        return survey(ours.intensity, ours.setup), survey(theirs.intensity, theirs.setup)

    def near(self, lines: Sequence[FloatArray], reach: float) -> tuple[Epoch, Epoch]:
        """Both epochs about some lines."""
        ours, theirs = self.reference, self.current
        return (
            part_of(ours, beside(ours.points, lines, reach)),
            part_of(theirs, beside(theirs.points, lines, reach)),
        )

    def spacing(self) -> float:
        """Point spacing of the coarser epoch [m]."""
        return max(median_spacing(self.reference.points), median_spacing(self.current.points))

    def extent(self) -> float:
        """Longest side of the reference epoch [m]."""
        return float(np.ptp(self.reference.points, axis=0).max())


def part_of(epoch: Epoch, chosen: NDArray[np.bool_]) -> Epoch:
    """Return some points of an epoch with their intensity and set-up."""
    return replace(
        epoch,
        points=epoch.points[chosen],
        intensity=None if epoch.intensity is None else epoch.intensity[chosen],
        setup=None if epoch.setup is None else epoch.setup[chosen],
        colour=None,
        classification=None,
    )


def beside(points: FloatArray, lines: Sequence[FloatArray], reach: float) -> NDArray[np.bool_]:
    """Say which points lie in a voxel of width `reach` [m] that one of the lines (k, 3) meets, or in one next to it."""
    places = []
    for line in lines:
        corner = np.r_[0.0, np.cumsum(np.linalg.norm(np.diff(line, axis=0), axis=1))]
        along = np.linspace(0.0, corner[-1], int(np.ceil(2.0 * corner[-1] / reach)) + 2)
        places.append(np.column_stack([np.interp(along, corner, column) for column in line.T]))
    steps = [(i << (2 * KEY_BITS)) + (j << KEY_BITS) + k for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)]
    wanted = np.unique(voxel_keys(np.concatenate(places), reach)[:, None] + np.array(steps))
    return np.isin(voxel_keys(points, reach), wanted)


def corners_of(keys: IntArray, width: float) -> FloatArray:
    """Low corners (k, 3) of voxels of a width [m] by their packed index."""
    mask, bias = (1 << KEY_BITS) - 1, 1 << (KEY_BITS - 1)
    index = np.stack([keys >> (2 * KEY_BITS), (keys >> KEY_BITS) & mask, keys & mask], axis=1)
    return (index - bias) * width
