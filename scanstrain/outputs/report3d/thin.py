# SPDX-License-Identifier: MIT
"""Fewer points, evenly: one a cube, so that crowds near the scanner give way and thin places stay."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
Rows = NDArray[np.intp]

MOST_LOOKED_AT = 4_000_000
"""Points; of larger clouds every k-th is looked at, in the order of the scan, which runs along the surface."""
ROUNDS = 12
"""Widths of cube that are tried."""
NARROWEST = 1e-6
"""Edge of a cube [m] below which points stand in one place."""
FULL = 0.9
"""Share of the wanted number that is near enough."""


def even_rows(points: FloatArray, limit: int) -> Rows:
    """Choose at most `limit` points that cover the cloud evenly; the same cloud gives the same choice.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        The cloud [m].
    limit : int
        How many points at most.

    Returns
    -------
    ndarray of shape (k,), intp
        Rows of the chosen points in rising order: in every cube the point next to its middle.
    """
    if len(points) <= limit:
        return np.arange(len(points))
    looked_at = np.arange(0, len(points), -(-len(points) // MOST_LOOKED_AT))
    seen = points[looked_at]
    edge = max(float(np.linalg.norm(np.ptp(seen, axis=0))) / np.sqrt(limit), NARROWEST)
    best: tuple[int, float] | None = None
    narrow, wide = 0.0, np.inf
    for _ in range(ROUNDS):
        count = len(np.unique(_cubes(seen, edge)))
        if count <= limit:
            wide = edge
            if best is None or count > best[0]:
                best = (count, edge)
            if count >= FULL * limit:
                break
        else:
            narrow = edge
        # cubes on a surface: their number falls with the square of the edge
        edge = max(edge * np.sqrt(count / (0.96 * limit)), NARROWEST)
        if not narrow < edge < wide:
            edge = (narrow + wide) / 2 if np.isfinite(wide) else 2 * narrow
    rows = looked_at if best is None else looked_at[_middles(seen, best[1])]
    # repeated points can make a number of cubes jump past the limit
    return np.asarray(rows[:: -(-len(rows) // limit)])


def z_order(codes: NDArray[np.uint16]) -> Rows:
    """Order codes (n, 3) so that neighbours in the list are neighbours in space (Morton 1966, from memory)."""
    key = np.zeros(len(codes), np.uint64)
    for axis in range(3):
        bits = codes[:, axis].astype(np.uint64)
        for shift, mask in _SPREAD:
            bits = (bits | (bits << np.uint64(shift))) & np.uint64(mask)
        key |= bits << np.uint64(axis)
    return np.asarray(np.argsort(key, kind="stable"))


_SPREAD = (
    (32, 0x001F00000000FFFF),
    (16, 0x001F0000FF0000FF),
    (8, 0x100F00F00F00F00F),
    (4, 0x10C30C30C30C30C3),
    (2, 0x1249249249249249),
)
"""Shifts and masks that put two empty bits after each bit of a number."""


def _cubes(points: FloatArray, edge: float) -> NDArray[np.int64]:
    """Number the cube of every point."""
    index = np.floor((points - points.min(axis=0)) / edge).astype(np.int64)
    _, ny, nz = index.max(axis=0) + 1
    return np.asarray((index[:, 0] * ny + index[:, 1]) * nz + index[:, 2])


def _middles(points: FloatArray, edge: float) -> Rows:
    """Rows of the points next to the middles of their cubes, rising."""
    away = (points - points.min(axis=0)) / edge % 1.0 - 0.5
    order = np.argsort((away * away).sum(axis=1), kind="stable")
    _, first = np.unique(_cubes(points, edge)[order], return_index=True)
    return np.sort(order[first])
