# SPDX-License-Identifier: MIT
"""Lines of joints laid on the surface: places along them, and on which side of them points lie."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.smooth import smooth_surface, support_cells

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

PIECE = 0.25
"""Longest piece of a laid line, in radii of a gauge: short against the bend of a surface that a gauge fits."""
GUARD, GUARD_SHARE = 3.0, 0.2
"""Cells beside a joint that are left out, or less where that is more than this share of the radius: their predicted
heights and intensities draw on neighbours beyond the joint."""
FINE = 0.02
"""Distance of the places at which the side of a point is judged, in radii."""


@dataclass(frozen=True, slots=True)
class Joint:
    """A joint, crack or other line across which the surface is not continuous.

    Parameters
    ----------
    name : str
        What the user calls it.
    line : ndarray of shape (k, 3)
        Corners of the line, local coordinates [m], on the surface or near it.
    width : float
        Strip along the line that belongs to neither side [m]: the gap, its edges and the error of the line.
    """

    name: str
    line: FloatArray
    width: float


@dataclass(frozen=True, slots=True)
class Trace:
    """A line laid on the surface.

    Parameters
    ----------
    along : ndarray of shape (m,)
        Distance of the nodes from the start of the line [m].
    node, normal : ndarray of shape (m, 3)
        Nodes on the surface [m] and its unit normals there, all to one side.
    """

    along: FloatArray
    node: FloatArray
    normal: FloatArray

    @property
    def ends(self) -> FloatArray:
        """Both ends of every piece, shape (m - 1, 2, 3) [m]."""
        return np.stack([self.node[:-1], self.node[1:]], axis=1)

    def places(self, spacing: float) -> FloatArray:
        """Distances along the line of places evenly spread at `spacing` or somewhat more, half of it from its ends [m].

        At least one, in the middle.
        """
        count = max(1, int((self.along[-1] - self.along[0]) / spacing + 1e-6))
        return np.asarray(self.along[0] + (np.arange(count) + 0.5) * (self.along[-1] - self.along[0]) / count)

    def frames(self, along: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Places (k, 3) [m] and frames (k, 3, 3) at distances along the line; columns right, along, normal.

        Right is as seen from the side that the normals point to, looking along the line.
        """
        step = 0.5 * float(np.diff(self.along).min())
        place, ahead, behind = (self._between(self.node, along + d) for d in (0.0, step, -step))
        normal = self._between(self.normal, along)
        normal /= np.linalg.norm(normal, axis=1, keepdims=True)
        tangent = ahead - behind
        tangent -= np.einsum("ka,ka->k", tangent, normal)[:, None] * normal
        tangent /= np.linalg.norm(tangent, axis=1, keepdims=True)
        return place, np.stack([np.cross(tangent, normal), tangent, normal], axis=2)

    def _between(self, values: FloatArray, along: FloatArray) -> FloatArray:
        return np.column_stack([np.interp(along, self.along, column) for column in values.T])

    def offsets(self, points: FloatArray, radius: float, reach: float) -> FloatArray:
        """Distance of points (n, 3) from the line, positive to the right [m], shape (n,).

        NaN beyond the ends of the line and farther away from it than `reach` [m].
        """
        from scipy.spatial import cKDTree

        count = max(2, int(np.ceil((self.along[-1] - self.along[0]) / (FINE * radius))) + 1)
        along = np.linspace(self.along[0], self.along[-1], count)
        place, frame = self.frames(along)
        distance, nearest = cKDTree(place).query(points)
        d = np.einsum("na,nab->nb", points - place[nearest], frame[nearest])
        outside = ((nearest == 0) & (d[:, 1] < 0)) | ((nearest == count - 1) & (d[:, 1] > 0))
        return np.where(outside | (distance > reach), np.nan, d[:, 0])


def lay_on_surface(joint: Joint, cells: Cells, radius: float) -> Trace:
    """Lay the line of a joint on the surface.

    Parameters
    ----------
    joint : Joint
    cells : Cells
        Of the reference epoch.
    radius : float
        Half the gauge length [m]: the line is looked for so far from where it is given.

    Returns
    -------
    Trace
        Only the longest run of the line that lies on the surface.

    Raises
    ------
    OptionError
        No part of the line is on the surface.
    """
    from scipy.spatial import cKDTree

    along, nodes = _subdivided(joint.line, PIECE * radius)
    box = ((cells.position > nodes.min(axis=0) - 2 * radius) & (cells.position < nodes.max(axis=0) + 2 * radius)).all(
        axis=1
    )
    chosen = np.flatnonzero(box)
    on = np.zeros(len(nodes), np.bool_)
    if len(chosen):
        distance, nearest = cKDTree(cells.position[chosen]).query(nodes)
        normals = cells.normal[cells.block[chosen[nearest]]]
        fitted = smooth_surface(nodes, normals, support_cells(cells.position[chosen], radius))
        on = (distance < radius) & (fitted.support >= 6)
    run = _longest_run(on)
    if len(run) < 2:
        raise off_surface(joint, radius)
    normal = fitted.frame[run][:, :, 2]
    # Normals of blocks have any sign: each is turned to the one before.
    turns = np.sign(np.einsum("ma,ma->m", normal[1:], normal[:-1]))
    return Trace(along[run], fitted.origin[run], normal * np.r_[1.0, np.cumprod(turns)][:, None])


def off_surface(joint: Joint, radius: float) -> OptionError:
    """Say that a line does not lie on the surface."""
    return OptionError(
        explain(
            f"joint {joint.name!r}",
            f"a line within {radius:.2f} m of the surface",
            "no point of the reference epoch near it",
            "give its corners on the surface, in file coordinates",
        )
    )


def pieces_of(
    joints: Sequence[Joint], traces: Sequence[Trace], width: float, radius: float
) -> tuple[FloatArray, FloatArray]:
    """Pieces of joints that end a patch, and the strips about them that no patch uses.

    Parameters
    ----------
    joints, traces : sequence of Joint, sequence of Trace
        As given and as laid on the surface.
    width, radius : float
        Of a cell and of a patch [m].

    Returns
    -------
    ends : ndarray of shape (p, 2, 3)
        Both ends of every piece [m].
    half : ndarray of shape (p,)
        Half the width of the strip about it [m].
    """
    if not traces:
        return np.zeros((0, 2, 3)), np.zeros(0)
    guard = min(GUARD * width, GUARD_SHARE * radius)
    halves = [np.full(len(t.node) - 1, max(guard, j.width / 2)) for t, j in zip(traces, joints, strict=True)]
    return np.concatenate([trace.ends for trace in traces]), np.concatenate(halves)


def _subdivided(line: FloatArray, step: float) -> tuple[FloatArray, FloatArray]:
    """Distance along a line and nodes no more than `step` apart; its corners stay."""
    legs = np.linalg.norm(np.diff(line, axis=0), axis=1)
    corner = np.r_[0.0, np.cumsum(legs)]
    counts = np.maximum(1, np.ceil(legs / step - 1e-9)).astype(int)
    inner = [np.linspace(corner[i], corner[i + 1], n, endpoint=False) for i, n in enumerate(counts)]
    along = np.r_[np.concatenate(inner), corner[-1]]
    return along, np.column_stack([np.interp(along, corner, column) for column in line.T])


def _longest_run(on: NDArray[np.bool_]) -> IntArray:
    """Numbers of the longest run of true values, the first of equal ones."""
    edges = np.flatnonzero(np.diff(np.r_[False, on, False]))
    if not len(edges):
        return np.zeros(0, np.int64)
    first, last = edges[::2], edges[1::2]
    longest = int(np.argmax(last - first))
    return np.arange(first[longest], last[longest])
