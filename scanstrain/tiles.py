# SPDX-License-Identifier: MIT
"""How a cloud larger than memory is cut: boxes that hold about as many points each, halo included."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import point_hashes
from scanstrain.epoch import Epoch
from scanstrain.mapped import is_mapped, release, slices
from scanstrain.neighbourhood.piece import Box

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

THINNED = 2_000_000
"""Points of an epoch that registration, structure and set-ups look at; of more, about so many are drawn."""
TILED_FROM = 3_000_000
"""Points of an epoch from which it is worked on in tiles: one piece would take some 5 GB."""
TILE_POINTS = 1_800_000
"""Points of one epoch in a tile with its halo: some 2.5 GB in one process."""
LEAVES = 8
"""Parts in which the points of a tile lie on disk: of its neighbours only those near the border are read."""
LEAST_SHARE = 1 / 12
"""A tile whose own points are fewer than this share of the limit is not cut further: it would be all halo."""


def takes_tiles(asked: bool | str, points: int) -> bool:
    """Whether scans of which the larger has so many points are worked on in tiles; `asked` may be the word auto."""
    return asked is True or (asked is not False and points >= TILED_FROM)


def thinning_of(count: int) -> int:
    """One in how many of so many points is drawn."""
    return max(1, -(-count // THINNED))


def thinned(epoch: Epoch) -> Epoch:
    """Return an epoch of about `THINNED` points at most, in memory; a smaller one comes back as it is.

    Points are drawn by a hash of their coordinates, so their order does not matter, and crowds stay crowds.
    """
    every = thinning_of(len(epoch))
    if every == 1 and not is_mapped(epoch.points):
        return epoch
    rows = np.concatenate(
        [part.start + np.flatnonzero(drawn(epoch.points[part], every)) for part in slices(len(epoch))]
    )
    columns = {
        name: None if (values := getattr(epoch, name)) is None else np.array(values[rows])
        for name in ("intensity", "colour", "setup", "classification")
    }
    points = np.array(epoch.points[rows])
    release(epoch.points, *(getattr(epoch, name) for name in columns))
    return Epoch(points=points, origin=epoch.origin, label=epoch.label, provenance=epoch.provenance, **columns)


def drawn(points: FloatArray, every: int) -> NDArray[np.bool_]:
    """Say which points (n, 3) are drawn where one in `every` is."""
    return np.asarray(point_hashes(np.ascontiguousarray(points)) % np.uint64(every) == 0)


@dataclass(frozen=True, slots=True)
class Tree:
    """Space cut in two again and again, square to an axis.

    Parameters
    ----------
    axis : ndarray of shape (k,)
        Of every cut; -1 for a part that is not cut.
    at : ndarray of shape (k,)
        Where it cuts [m].
    below : ndarray of shape (k,)
        Number of the part below the cut; the one above follows it.
    boxes : tuple of Box
        Of every part.
    tiles : tuple of int
        Parts that are worked on one at a time.
    """

    axis: IntArray
    at: FloatArray
    below: IntArray
    boxes: tuple[Box, ...]
    tiles: tuple[int, ...]

    def leaves(self) -> list[int]:
        """Numbers of the parts that are not cut."""
        return np.flatnonzero(self.axis < 0).tolist()

    def part_of(self, points: FloatArray) -> IntArray:
        """Return for every point (n, 3) the number of the uncut part that holds it."""
        part = np.zeros(len(points), np.int64)
        while True:
            axis = self.axis[part]
            going = np.flatnonzero(axis >= 0)
            if not len(going):
                return part
            place = part[going]
            above = points[going, axis[going]] >= self.at[place]
            part[going] = self.below[place] + above


def cut_space(sample: FloatArray, every: int, halo: float, most: int) -> Tree:
    """Cut space so that no tile holds more than `most` points with a halo about it.

    Parameters
    ----------
    sample : ndarray of shape (n, 3)
        Points that stand for the cloud [m].
    every : int
        How many points of the cloud each stands for.
    halo : float
        Width that is added on every side of a tile [m].
    most : int
    """
    axis, at, below, boxes, tiles = [-1], [0.0], [0], [Box()], []
    waiting = [(0, np.arange(len(sample)), most, False)]
    while waiting:
        part, rows, limit, inside = waiting.pop(0)
        own = len(rows) * every
        if not inside:
            around = int(boxes[part].grown(halo).holds(sample).sum()) * every
            if around <= most or own <= LEAST_SHARE * most:
                tiles.append(part)
                inside, limit = True, max(own // LEAVES, 1)
        if len(rows) < 2 or (inside and own <= limit):
            continue
        points = sample[rows]
        k = int(np.ptp(points, axis=0).argmax())
        middle = float(np.median(points[:, k]))
        above = points[:, k] >= middle
        if above.all() or not above.any():
            tiles += [] if inside else [part]
            continue
        low, high = np.array(boxes[part].low), np.array(boxes[part].high)
        high[k] = low[k] = middle
        axis[part], at[part], below[part] = k, middle, len(axis)
        for rest, box in ((rows[~above], Box(boxes[part].low, high)), (rows[above], Box(low, boxes[part].high))):
            waiting.append((len(axis), rest, limit, inside))
            axis.append(-1)
            at.append(0.0)
            below.append(0)
            boxes.append(box)
    return Tree(np.array(axis), np.array(at), np.array(below), tuple(boxes), tuple(tiles))
