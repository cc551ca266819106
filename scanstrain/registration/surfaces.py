# SPDX-License-Identifier: MIT
"""Block surfaces of an epoch at several widths, with what the alignment needs to know about every block."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import BLOCK_WIDTH, Cells, find_key, make_cells
from scanstrain.registration.rigid import rigid, rotation

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

UNUSABLE, BORDER, USABLE = 0, 1, 2

MIN_COUNT = 4
"""A block centre of fewer points says less than the plane of its neighbours."""
MAX_PLANARITY = 0.3
"""Smallest over middle eigenvalue of the scatter beyond which a block is an edge or a clump, not a surface."""
CLEARLY_FLAT = 0.1
"""The same ratio for a block without a step, corner or loose object in it."""
ENDS_OFFSET = 0.25
"""Shift of the neighbourhood's centre, in block widths, beyond which the surface ends here (a straight edge: 0.5)."""
SHARED_NOISE = 0.05
"""Part of a point's noise that its neighbours in a block share: averaging more than 1/0.05^2 points gains nothing."""

OWN_GRID = rigid(rotation(np.array([0.31, -0.47, 0.59])), np.zeros(3))
"""The current epoch's blocks are first cut on a grid turned against the reference's. The way in which a grid cuts a
curved surface tilts the planes a little; were the cuts the same in both epochs, these tilts would look like relief
that both scans saw, and a smooth tunnel would seem to fix its own roll."""


@dataclass(frozen=True, slots=True)
class Surface:
    """Blocks of one epoch.

    Parameters
    ----------
    cells : Cells
        Blocks and cells, cut in the grid frame.
    state : ndarray of shape (b,), uint8
        `UNUSABLE`, `BORDER` or `USABLE`.
    variance : ndarray of shape (b,)
        Of the block centre along the normal [m^2].
    tilt : ndarray of shape (b,)
        Variance of the normal's direction, about each tangent [rad^2].
    T_grid_epoch : ndarray of shape (4, 4)
        Takes local coordinates of the epoch to the grid frame.
    """

    cells: Cells
    state: NDArray[np.uint8]
    variance: FloatArray
    tilt: FloatArray
    T_grid_epoch: FloatArray

    @property
    def width(self) -> float:
        """Block width [m]."""
        return self.cells.block_size

    def flat(self) -> int:
        """Number of blocks that can be matched."""
        return int((self.state != UNUSABLE).sum())

    def flat_share(self) -> float:
        """Share of the points that lie in clearly flat blocks."""
        flat = (self.state != UNUSABLE) & (self.cells.planarity < CLEARLY_FLAT)
        return float(self.cells.weight[flat].sum() / self.cells.weight.sum())


@numba.njit(cache=True, nogil=True)
def _middle(key: int, size: float) -> tuple[float, float, float]:
    """Middle of the voxel with a packed key."""
    bias, mask = 1 << 19, (1 << 20) - 1
    i, j, k = (key >> 40) - bias, ((key >> 20) & mask) - bias, (key & mask) - bias
    return (i + 0.5) * size, (j + 0.5) * size, (k + 0.5) * size


@numba.njit(cache=True, nogil=True)
def _surroundings(
    keys: IntArray, centre: FloatArray, normal: FloatArray, weight: FloatArray, size: float
) -> tuple[FloatArray, FloatArray]:
    """Points in a block and its 26 neighbours; how far along the surface their mean lies from the voxel's middle."""
    total, offset = np.empty(len(keys)), np.empty(len(keys))
    row, layer = 1 << 20, 1 << 40
    for b in range(len(keys)):
        n, mx, my, mz = 0.0, 0.0, 0.0, 0.0
        for i in range(-1, 2):
            for j in range(-1, 2):
                for k in range(-1, 2):
                    o = find_key(keys, keys[b] + i * layer + j * row + k)
                    if o >= 0:
                        n += weight[o]
                        mx += weight[o] * centre[o, 0]
                        my += weight[o] * centre[o, 1]
                        mz += weight[o] * centre[o, 2]
        # Not from the block's own centre, which lies aside where the surface only cuts a corner of the voxel.
        x, y, z = _middle(keys[b], size)
        mx, my, mz = mx / n - x, my / n - y, mz / n - z
        along = mx * normal[b, 0] + my * normal[b, 1] + mz * normal[b, 2]
        total[b] = n
        offset[b] = np.sqrt(max(mx * mx + my * my + mz * mz - along * along, 0.0))
    return total, offset


def make_surface(points: FloatArray, width: float, *, T_grid_epoch: FloatArray | None = None) -> Surface:
    """Cut points into blocks of a width [m] in a grid frame and judge every block."""
    T = np.eye(4) if T_grid_epoch is None else T_grid_epoch
    moved = points if T_grid_epoch is None else points @ T[:3, :3].T + T[:3, 3]
    cells = make_cells(moved, width / BLOCK_WIDTH)
    return judged(cells, T)


def judged(cells: Cells, T_grid_epoch: FloatArray) -> Surface:
    """Add state and variances to cells."""
    total, offset = _surroundings(cells.key, cells.centre, cells.normal, cells.weight, cells.block_size)
    flat = (cells.weight >= MIN_COUNT) & (cells.planarity < MAX_PLANARITY) & (total >= 4 * MIN_COUNT)
    state = np.full(len(cells.key), UNUSABLE, np.uint8)
    inner = offset[flat] < ENDS_OFFSET * cells.block_size
    state[flat] = np.where(inner, USABLE, BORDER)
    # A plane that happens to fit its few points too well must not outweigh its neighbours.
    typical = float(np.median(cells.roughness[flat])) if flat.any() else 0.0
    noise = np.maximum(cells.roughness, max(0.3 * typical, 1e-6)) ** 2
    return Surface(
        cells=cells,
        state=state,
        variance=noise * (1 / cells.weight + SHARED_NOISE**2),
        tilt=cells.planarity / np.maximum(total - 3, 1),
        T_grid_epoch=T_grid_epoch,
    )


def pyramid(points: FloatArray, widths: list[float], *, own_grid: bool) -> list[Surface]:
    """Make surfaces from the widest blocks to the finest.

    The wide ones come from the cells of the finest, which are few and even, so they cost next to nothing.
    """
    T = OWN_GRID if own_grid else np.eye(4)
    finest = make_surface(points, widths[-1], T_grid_epoch=T if own_grid else None)
    wide = [judged(make_cells(finest.cells.position, width / BLOCK_WIDTH), T) for width in widths[:-1]]
    return [*wide, finest]
