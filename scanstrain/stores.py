# SPDX-License-Identifier: MIT
"""Work stores: points of an epoch on disk, sorted by parts of space, in their first order within each."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import voxel_keys
from scanstrain.epoch import Epoch, moved_points
from scanstrain.mapped import release, slices
from scanstrain.neighbourhood.intensity import Survey, survey
from scanstrain.neighbourhood.piece import Box, beside
from scanstrain.tiles import Tree, drawn

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

RECORD = np.dtype([("xyz", "<f8", (3,)), ("intensity", "<f4"), ("setup", "<u2"), ("row", "<i8")])
WANTED, SAMPLE, SEARCHED = 8, 5000, 32
"""As in `cells.median_spacing`, which this repeats: rank of the neighbour, places judged, neighbours sought."""
SEARCHES = 6
"""Searches for neighbours, each twice as far as the one before."""
FIRST_MARGIN = 12.0
"""Neighbours are sought so far about a part, in its mean point spacings, before a wider search."""


@dataclass(frozen=True, slots=True)
class Store:
    """One epoch on disk.

    Parameters
    ----------
    path : Path
        File of records.
    start : ndarray of shape (k + 1,)
        Records of part i of the tree are `start[i]:start[i + 1]`.
    reach : tuple of Box or None
        What the points of every part span; None for an empty part.
    textured, numbered : bool
        Whether the epoch has intensity and set-up numbers.
    origin : ndarray of shape (3,)
    """

    path: Path
    start: IntArray
    reach: tuple[Box | None, ...]
    textured: bool
    numbered: bool
    origin: FloatArray

    def part(self, number: int) -> NDArray[np.void]:
        """Read the records of one part."""
        first, count = int(self.start[number]), int(self.start[number + 1] - self.start[number])
        return np.fromfile(self.path, RECORD, count, offset=first * RECORD.itemsize)

    def parts(self, box: Box | None = None) -> Iterator[NDArray[np.void]]:
        """Read the records of the parts that have points in a box, part by part."""
        for number, reach in enumerate(self.reach):
            if reach is not None and (box is None or reach.grown(1e-6).meets(box)):
                yield self.part(number)

    def epoch(self, chosen: Sequence[NDArray[np.void]]) -> Epoch:
        """Make an epoch of records, in their first order."""
        records = np.concatenate(chosen) if chosen else np.zeros(0, RECORD)
        records = records[np.argsort(records["row"], kind="stable")]
        return Epoch(
            points=np.ascontiguousarray(records["xyz"]),
            origin=self.origin,
            intensity=np.ascontiguousarray(records["intensity"]) if self.textured else None,
            setup=np.ascontiguousarray(records["setup"]) if self.numbered else None,
        )

    def within(self, box: Box) -> Epoch:
        """Points in a box."""
        return self.epoch([records[box.holds(records["xyz"])] for records in self.parts(box)])

    def spacing(self) -> float:
        """Median point spacing [m], the same number as of `cells.median_spacing`."""
        count = int(self.start[-1])
        every, found = max(1, count // SAMPLE), []
        for number, reach in enumerate(self.reach):
            if reach is None:
                continue
            places = self.part(number)["xyz"]
            places = places[drawn(places, every)]
            margin = FIRST_MARGIN * float(np.ptp(np.stack([reach.low, reach.high]), axis=0).max())
            margin /= np.sqrt(float(self.start[number + 1] - self.start[number]))
            for _ in range(SEARCHES):
                if not len(places):
                    break
                tree_points = self.within(Box(places.min(axis=0), places.max(axis=0)).grown(margin)).points
                radius = _rank_distance(tree_points, places)
                sure = (radius <= margin) | (len(tree_points) == count)
                found.append(radius[sure])
                places, margin = places[~sure], 2.0 * margin
            # Lonely points: farther from others than any search, which is all that a median asks.
            found.append(np.full(len(places), margin))
        radius = np.concatenate(found)
        radius = radius[np.isfinite(radius)]
        return float(np.median(radius) * np.sqrt(np.pi / WANTED)) if len(radius) else 0.0


def _rank_distance(points: FloatArray, places: FloatArray) -> FloatArray:
    """Distance of the eighth distinct neighbour of every place [m]; infinite where there is none."""
    from scipy.spatial import cKDTree

    distance, _ = cKDTree(points).query(places, k=min(SEARCHED, len(points)), workers=-1)
    rank = np.cumsum(np.diff(distance, axis=1, prepend=0.0) > 0, axis=1)
    first = (rank == WANTED).argmax(axis=1)
    return np.where(rank[:, -1] >= WANTED, distance[np.arange(len(places)), first], np.inf)


def make_store(epoch: Epoch, tree: Tree, path: Path, T: FloatArray | None = None) -> Store:
    """Sort an epoch by the parts of a tree, moved by the 4x4 matrix `T` if given.

    The epoch is passed through twice, a piece at a time.
    """
    parts = len(tree.axis)
    counts = np.zeros(parts, np.int64)
    low, high = np.full((parts, 3), np.inf), np.full((parts, 3), -np.inf)
    for rows in slices(len(epoch)):
        points = _moved(epoch, rows, T)
        part = tree.part_of(points)
        counts += np.bincount(part, minlength=parts)
        np.minimum.at(low, part, points)
        np.maximum.at(high, part, points)
    start = np.r_[0, np.cumsum(counts)]
    cursor = start[:-1].copy()
    with path.open("wb") as stream:
        for rows in slices(len(epoch)):
            points = _moved(epoch, rows, T)
            records = np.zeros(len(points), RECORD)
            records["xyz"], records["row"] = points, np.arange(rows.start, rows.stop)
            if epoch.intensity is not None:
                records["intensity"] = epoch.intensity[rows]
            if epoch.setup is not None:
                records["setup"] = epoch.setup[rows]
            part = tree.part_of(points)
            records = records[np.argsort(part, kind="stable")]
            ends = np.r_[0, np.cumsum(np.bincount(part, minlength=parts))]
            for number in np.flatnonzero(np.diff(ends)).tolist():
                block = records[ends[number] : ends[number + 1]]
                os.pwrite(stream.fileno(), block.tobytes(), int(cursor[number]) * RECORD.itemsize)
                cursor[number] += len(block)
    release(epoch.points, epoch.intensity, epoch.setup)
    reach = tuple(Box(low[k], high[k]) if counts[k] else None for k in range(parts))
    return Store(path, start, reach, epoch.intensity is not None, epoch.setup is not None, epoch.origin)


def _moved(epoch: Epoch, rows: slice, T: FloatArray | None) -> FloatArray:
    points = np.array(epoch.points[rows])
    return points if T is None else moved_points(points, T)


@dataclass(frozen=True, slots=True)
class OnDisk:
    """Two registered epochs in work stores: a `Source` for the neighbourhood stage.

    Parameters
    ----------
    reference, current : Store
    tree : Tree
    known : pair of Survey or None
        Of the intensity of both epochs.
    """

    reference: Store
    current: Store
    tree: Tree
    known: tuple[Survey | None, Survey | None]

    def boxes(self) -> Sequence[Box]:
        """Boxes of the tiles."""
        return [self.tree.boxes[tile] for tile in self.tree.tiles]

    def counts(self, width: float) -> tuple[IntArray, IntArray]:
        """Count reference points by voxels."""
        found = [
            np.unique(voxel_keys(part["xyz"].copy(), width), return_counts=True) for part in self.reference.parts()
        ]
        keys, at = np.unique(np.concatenate([key for key, _ in found]), return_inverse=True)
        return keys, np.bincount(at, np.concatenate([count for _, count in found])).astype(np.int64)

    def size(self) -> tuple[int, int]:
        """Points of both epochs."""
        return int(self.reference.start[-1]), int(self.current.start[-1])

    def surveys(self) -> tuple[Survey | None, Survey | None]:
        """What is known of the intensity of both epochs."""
        return self.known

    def cut(self, box: Box, halo: float) -> tuple[Epoch, Epoch]:
        """Both epochs within a box grown by `halo` [m]."""
        wide = box.grown(halo)
        return self.reference.within(wide), self.current.within(wide)

    def near(self, lines: Sequence[FloatArray], reach: float) -> tuple[Epoch, Epoch]:
        """Both epochs about some lines."""
        boxes = [Box(line.min(axis=0), line.max(axis=0)).grown(4.0 * reach) for line in lines]
        box = Box(np.min([each.low for each in boxes], axis=0), np.max([each.high for each in boxes], axis=0))
        return self.where(lambda points: beside(points, lines, reach), box)

    def where(self, chosen: Callable[[FloatArray], NDArray[Any]], box: Box | None = None) -> tuple[Epoch, Epoch]:
        """Both epochs at the points that a function of places (n, 3) chooses, by a mask or by their numbers."""
        ours, theirs = (
            store.epoch([part[chosen(np.ascontiguousarray(part["xyz"]))] for part in store.parts(box)])
            for store in (self.reference, self.current)
        )
        return ours, theirs

    def spacing(self) -> float:
        """Point spacing of the coarser epoch [m]."""
        return max(self.reference.spacing(), self.current.spacing())

    def extent(self) -> float:
        """Longest side of the reference epoch [m]."""
        spans = [reach for reach in self.reference.reach if reach is not None]
        low, high = np.min([s.low for s in spans], axis=0), np.max([s.high for s in spans], axis=0)
        return float((high - low).max())


def store_pair(reference: Epoch, current: Epoch, T: FloatArray, tree: Tree, folder: Path) -> OnDisk:
    """Sort both epochs into stores in a folder, the current one moved by `T`."""
    known = survey(reference.intensity, reference.setup), survey(current.intensity, current.setup)
    release(reference.intensity, reference.setup, current.intensity, current.setup)
    return OnDisk(
        make_store(reference, tree, folder / "reference.store"),
        make_store(current, tree, folder / "current.store", T),
        tree,
        known,
    )
