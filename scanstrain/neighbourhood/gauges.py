# SPDX-License-Identifier: MIT
"""Where the gauges stand and how their frames are turned."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells, group, voxel_keys
from scanstrain.neighbourhood.piece import Box
from scanstrain.neighbourhood.smooth import SmoothSurface, smooth_surface

FloatArray = NDArray[np.float64]
Guide = Callable[[FloatArray], tuple[FloatArray, FloatArray]]
"""From places (g, 3) to the nearest places of a tunnel's axis (g, 3) [m] and its directions there (g, 3)."""
IntArray = NDArray[np.int64]

_CROWDED = 0.85
"""Two gauges are never nearer than this share of the wanted spacing."""
_CANDIDATES = 3.0
"""Candidates per spacing along one direction: enough choice for an even cover."""


@numba.njit(cache=True, nogil=True)
def _thin(first: IntArray, second: IntArray, n: int) -> NDArray[np.bool_]:
    """Greedy choice in order: a kept candidate drops the later ones that stand too near."""
    kept = np.ones(n, np.bool_)
    for pair in range(len(first)):
        if kept[first[pair]]:
            kept[second[pair]] = False
    return kept


@dataclass(frozen=True, slots=True)
class Candidates:
    """Places where gauges could stand, one a voxel of a third of the spacing.

    Parameters
    ----------
    key : ndarray of shape (k,)
        Packed index of the voxels.
    place, normal : ndarray of shape (k, 3)
        The cell nearest to the middle of the voxel's cells [m], and the plane normal there.
    """

    key: IntArray
    place: FloatArray
    normal: FloatArray


def candidates_in(cells: Cells, spacing: float, box: Box) -> Candidates:
    """Find the candidates of the voxels whose middle lies in a box.

    Parameters
    ----------
    cells : Cells
        Reference epoch.
    spacing : float
        Wanted distance between neighbouring gauges [m].
    box : Box
    """
    width = spacing / _CANDIDATES
    order, key, start = group(voxel_keys(cells.position, width))
    size = np.diff(start)
    mean = np.add.reduceat(cells.position[order], start[:-1]) / size[:, None]
    distance = ((cells.position[order] - np.repeat(mean, size, axis=0)) ** 2).sum(axis=1)
    # Ties are broken by place, so that the order of points does not matter.
    near = np.round(distance / spacing**2, 9)
    rank = np.lexsort((*cells.position[order].T, near, np.repeat(np.arange(len(size)), size)))
    chosen = order[rank[start[:-1]]]
    inside = box.holds((np.floor(cells.position[chosen] / width) + 0.5) * width)
    chosen = chosen[inside]
    return Candidates(key[inside], cells.position[chosen], cells.normal[cells.block[chosen]])


def choose_gauges(found: Sequence[Candidates], spacing: float) -> tuple[FloatArray, FloatArray]:
    """Spread gauges evenly over the surface.

    Parameters
    ----------
    found : sequence of Candidates
        Of all pieces of the surface.
    spacing : float
        Wanted distance between neighbouring gauges [m].

    Returns
    -------
    places, normals : ndarray of shape (g, 3)
        Gauge places [m] and the plane normals there.
    """
    from scipy.spatial import cKDTree

    order = np.argsort(np.concatenate([each.key for each in found]), kind="stable")
    places = np.concatenate([each.place for each in found])[order]
    normals = np.concatenate([each.normal for each in found])[order]
    pairs = cKDTree(places).query_pairs(_CROWDED * spacing, output_type="ndarray")
    pairs = pairs[np.lexsort((pairs[:, 1], pairs[:, 0]))]
    kept = _thin(np.ascontiguousarray(pairs[:, 0], np.int64), np.ascontiguousarray(pairs[:, 1], np.int64), len(places))
    return places[kept], normals[kept]


def straight_guide(direction: FloatArray, places: FloatArray) -> Guide:
    """Return the guide of a straight axis through the middle of the bounding box of places (g, 3)."""
    middle = (places.min(axis=0) + places.max(axis=0)) / 2

    def guide(at: FloatArray) -> tuple[FloatArray, FloatArray]:
        foot = middle + ((at - middle) @ direction)[:, None] * direction
        return foot, np.broadcast_to(direction, at.shape)

    return guide


def look_out(
    places: FloatArray, normals: FloatArray, free_side: FloatArray | None, axis: Guide | None
) -> tuple[FloatArray, tuple[str, ...]]:
    """Directions to which normals are turned.

    With a `free_side` point every normal looks towards it; with a tunnel axis towards that; with neither, towards the
    middle of the bounding box of the places, or, for a near-plane where the middle says nothing, all to one side,
    with a warning.

    Returns
    -------
    look : ndarray of shape (g, 3)
        Any length.
    warnings : tuple of str
    """
    middle = (places.min(axis=0) + places.max(axis=0)) / 2
    target = free_side if free_side is not None else middle if axis is None else axis(places)[0]
    look = target - places
    if free_side is not None or axis is not None:
        return look, ()
    turned = normals * np.where((normals * look).sum(axis=1) < 0, -1.0, 1.0)[:, None]
    mean = turned.mean(axis=0)
    _, vectors = np.linalg.eigh(normals.T @ normals)
    common = vectors[:, 2]
    if np.mean(np.abs(normals @ common)) > 0.9 and np.linalg.norm(mean) < 0.9:
        common = common * (1.0 if common[np.argmax(np.abs(common))] > 0 else -1.0)
        side = ", ".join(f"{c:+.2f}" for c in common)
        return np.tile(common, (len(places), 1)), (
            f"The free side of the surface is not given and the points lie near one plane: positive normal "
            f"displacement was taken along ({side}). Give free_side to fix the sign.",
        )
    return look, ()


def turn_frames(frame: FloatArray, signs: NDArray[np.float64], along: FloatArray | None) -> FloatArray:
    """Turn tangent frames to the structure: n to the free side, a2 along a tunnel, or else a1 level and a2 upward.

    Parameters
    ----------
    frame : ndarray of shape (g, 3, 3)
        Columns two tangents and a normal of either sign.
    signs : ndarray of shape (g,)
        +1 or -1 for each normal.
    along : ndarray of shape (g, 3) or None
        Directions of a tunnel's axis; a surface square to it keeps a level a1.

    Returns
    -------
    ndarray of shape (g, 3, 3)
        Right-handed frames (a1, a2, n).
    """
    n = frame[:, :, 2] * signs[:, None]
    up = np.broadcast_to([0.0, 0.0, 1.0], n.shape) if along is None else along
    second = up - np.einsum("gi,gi->g", n, up)[:, None] * n
    flat = np.linalg.norm(second, axis=1) < 0.1
    spare = np.array([0.0, 1.0, 0.0]) if along is None else np.array([0.0, 0.0, 1.0])
    second[flat] = (spare - (n @ spare)[:, None] * n)[flat]
    second /= np.linalg.norm(second, axis=1, keepdims=True)
    first = np.cross(second, n)
    return np.stack([first, second, n], axis=2)


def frames_at(
    places: FloatArray, normals: FloatArray, support: Cells, look: FloatArray, along: FloatArray | None
) -> SmoothSurface:
    """Fit the smooth surface at the gauges and turn its frames to the structure.

    Parameters
    ----------
    places, normals : ndarray of shape (g, 3)
        Of the gauges.
    support : Cells
        As of `smooth.support_cells`.
    look : ndarray of shape (g, 3)
        As of `look_out`.
    along : ndarray of shape (g, 3) or None
        As of `turn_frames`.

    Returns
    -------
    SmoothSurface
        With `frame` columns (a1, a2, n) and `curvature` in that frame.
    """
    fitted = smooth_surface(places, normals, support)
    signs = np.where((fitted.frame[:, :, 2] * look).sum(axis=1) < 0, -1.0, 1.0)
    frame = turn_frames(fitted.frame, signs, along)
    return SmoothSurface(fitted.origin, frame, turned_curvature(fitted, frame), fitted.support)


def turned_curvature(fitted: SmoothSurface, frame: FloatArray) -> FloatArray:
    """Curvature (g, 3) of a smooth surface in other frames (g, 3, 3) with the same normals or their opposites."""
    turn = np.einsum("gai,gaj->gij", fitted.frame[:, :, :2], frame[:, :, :2])
    signs = np.where(np.einsum("ga,ga->g", fitted.frame[:, :, 2], frame[:, :, 2]) < 0, -1.0, 1.0)
    k11, k12, k22 = fitted.curvature.T
    old = np.stack([k11, k12, k12, k22], axis=1).reshape(-1, 2, 2)
    new = signs[:, None, None] * np.einsum("gia,gij,gjb->gab", turn, old, turn)
    return np.stack([new[:, 0, 0], new[:, 0, 1], new[:, 1, 1]], axis=1)
