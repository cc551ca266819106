# SPDX-License-Identifier: MIT
"""Where the gauges of a whole object stand, which way they look, and which lines end their patches."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import make_cells
from scanstrain.neighbourhood.gauges import Guide, look_out, straight_guide
from scanstrain.neighbourhood.joint_lines import Joint, lay_on_surface, off_surface, pieces_of

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Layout:
    """Gauges to be fitted.

    Parameters
    ----------
    place, normal : ndarray of shape (g, 3)
        Where they stand [m], and the plane normals there.
    look : ndarray of shape (g, 3)
        Directions to the free side.
    along : ndarray of shape (g, 3) or None
        Directions of the axis of a tunnel.
    """

    place: FloatArray
    normal: FloatArray
    look: FloatArray
    along: FloatArray | None

    def __len__(self) -> int:
        return len(self.place)

    def part(self, chosen: NDArray[np.int64] | slice) -> Layout:
        """Return some of the gauges."""
        along = None if self.along is None else self.along[chosen]
        return Layout(self.place[chosen], self.normal[chosen], self.look[chosen], along)


@dataclass(frozen=True, slots=True)
class Lines:
    """Joints as `joint_cuts.cuts_at` takes them: ends (p, 2, 3) of their pieces and half widths (p,) [m]."""

    ends: FloatArray
    half: FloatArray


def lay_out(
    place: FloatArray, normal: FloatArray, free_side: FloatArray | None, axis: FloatArray | Guide | None
) -> tuple[Layout, tuple[str, ...]]:
    """Turn gauges to the structure; parameters as of `fit_affine`, warnings beside the layout."""
    guide = straight_guide(axis, place) if isinstance(axis, np.ndarray) else axis
    look, warnings = look_out(place, normal, free_side, guide)
    return Layout(place, normal, look, None if guide is None else np.asarray(guide(place)[1])), warnings


def lay_lines(joints: Sequence[Joint], near: Sequence[FloatArray], width: float, radius: float) -> Lines:
    """Lay joints on the surface.

    Parameters
    ----------
    joints : sequence of Joint
    near : sequence of ndarray of shape (n, 3)
        Reference points about each of them [m].
    width, radius : float
        Of a cell and of a patch [m].

    Raises
    ------
    OptionError
        A line that does not lie on the surface.
    """
    traces = []
    for joint, points in zip(joints, near, strict=True):
        if not len(points):
            raise off_surface(joint, radius)
        traces.append(lay_on_surface(joint, make_cells(points, width), radius))
    return Lines(*pieces_of(joints, traces, width, radius))
