# SPDX-License-Identifier: MIT
"""Where the neighbourhood stage takes its points from: memory, or work stores cut into tiles."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import median_spacing
from scanstrain.config import CompareConfig
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.piece import InMemory
from scanstrain.neighbourhood.pieces import HALO
from scanstrain.shape import Shape, near_sections
from scanstrain.stores import OnDisk, store_pair
from scanstrain.tiles import TILE_POINTS, cut_space

FloatArray = NDArray[np.float64]

ROUGH_SPACINGS, ROUGH_SHARE = 60.0, 0.25
"""A gauge length that is still to be chosen counts as so many point spacings here, at most that share of the object."""


def number_or_none(value: float | str) -> float | None:
    """Turn the word auto into None."""
    return None if isinstance(value, str) else float(value)


def source_of(
    reference: Epoch, current: Epoch, T: FloatArray, few: Epoch, config: CompareConfig, folder: Path | None
) -> InMemory | OnDisk:
    """Bring the current epoch into the reference frame, in memory or in tiles.

    Parameters
    ----------
    reference, current : Epoch
    T : ndarray of shape (4, 4)
        From the current to the reference frame.
    few : Epoch
        Reference points that stand for all.
    config : CompareConfig
    folder : Path or None
        For tiles; None keeps everything in memory.
    """
    if folder is None:
        return InMemory(reference, current.moved(T))
    options = config.neighbourhood
    every = -(-max(len(reference), len(current)) // len(few))
    # For the size of tiles a rough gauge length will do.
    spacing = median_spacing(few.points) / np.sqrt(every)
    extent = float(np.ptp(few.points, axis=0).max())
    length = number_or_none(options.gauge_length) or min(ROUGH_SPACINGS * spacing, ROUGH_SHARE * extent)
    most = TILE_POINTS if isinstance(options.tile_points, str) else options.tile_points
    tree = cut_space(few.points, every, HALO * length, most)
    return store_pair(reference, current, T, tree, folder)


def points_for_sections(
    source: InMemory | OnDisk, shape: Shape, config: CompareConfig, spacing: float
) -> tuple[tuple[FloatArray, FloatArray], float | None]:
    """Points of both epochs that sections are cut from, and the thickness of slices where they are not all [m]."""
    if isinstance(source, OnDisk):
        near = near_sections(shape, config, spacing)
        if near is None:
            return (np.zeros((0, 3)), np.zeros((0, 3))), None
        ours, theirs = source.where(near[0])
        return (ours.points, theirs.points), near[1]
    return (source.reference.points, source.current.points), None
