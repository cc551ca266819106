# SPDX-License-Identifier: MIT
"""The axis of a tunnel as a smooth curve: chainage, clock angle and directions of any place."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.zones import Unrolled

FloatArray = NDArray[np.float64]

NODE_STEP = 0.25
"""Distance between nodes [m]: a cubic between them follows a bend of 50 m radius to better than a micrometre."""

SHAFT = np.cos(np.radians(30.0))
"""Steeper than 60 degrees an axis is that of a shaft: "up" no longer tells where its crown would be."""

FOOT_STEPS = 1
"""Newton steps to the foot of a perpendicular after the one from the nearest node: on a bend of 10 m radius the error
left is below a micrometre."""

ROUGH = 0.01
"""More than the error that the first step leaves, which is 13 micrometres on a bend of 10 m radius [m]."""

MIN_BEND = 0.2
"""Smallest `1 - curvature x distance` in those steps: nearer to the centre of the bend the foot is not unique."""

OUTSIDE = 0.05
"""Share of a given axis that may lie where the scan has no lining around it; ends are rarely exact."""

AROUND = 90
"""Degrees of the ring that must show points where an axis is said to run."""


@dataclass(frozen=True, slots=True)
class Axis:
    """A smooth curve along a tunnel or shaft, found once on the reference epoch and used for all epochs.

    Parameters
    ----------
    chainage : ndarray of shape (m,)
        Length along the curve at its nodes, from 0 [m].
    nodes : ndarray of shape (m, 3)
        Local coordinates [m].
    tangents : ndarray of shape (m, 3)
        Unit directions of rising chainage. A cubic joins the nodes; beyond the ends the curve goes on straight.
    radius : float
        Radius of the lining about the axis, median over its length [m]; makes arc lengths of clock angles.
    overhead : ndarray of shape (3,)
        Direction in which 12 o'clock lies: upwards, or +y (north) in a shaft steeper than 60 degrees.
    """

    chainage: FloatArray
    nodes: FloatArray
    tangents: FloatArray
    radius: float
    overhead: FloatArray

    @property
    def length(self) -> float:
        """Length of the axis [m]."""
        return float(self.chainage[-1])

    @property
    def _curve(self) -> Any:
        from scipy.interpolate import CubicHermiteSpline

        return CubicHermiteSpline(self.chainage, self.nodes, self.tangents)

    def at(self, chainage: ArrayLike) -> tuple[FloatArray, FloatArray]:
        """Return the place (n, 3) [m] and the direction (n, 3) at chainages (n,) [m]."""
        s = np.asarray(chainage, float)
        inside = np.clip(s, 0.0, self.length)
        curve = self._curve
        tangent = curve(inside, 1)
        tangent /= np.sqrt(np.einsum("ni,ni->n", tangent, tangent))[:, None]
        return curve(inside) + (s - inside)[:, None] * tangent, tangent

    def frames(self, chainage: ArrayLike) -> FloatArray:
        """Return (n, 3, 3) axes at chainages (n,): columns right (3 o'clock), up (12 o'clock) and forward."""
        return frames_about(self.at(chainage)[1], self.overhead)

    def project(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Drop a perpendicular from every point to the axis.

        Parameters
        ----------
        points : ndarray of shape (n, 3)
            Local coordinates [m].

        Returns
        -------
        chainage : ndarray of shape (n,)
            Of the foot [m]; below 0 or above the length of the axis for points beyond its ends.
        offset : ndarray of shape (n, 3)
            From the foot to the point [m].
        """
        s, bend = self._rough_foot(points)
        for _ in range(FOOT_STEPS):
            place, tangent = self.at(s)
            s = s + _step(points - place, tangent, bend)
        return s, points - self.at(s)[0]

    def near(self, points: FloatArray, chainages: FloatArray, reach: float) -> NDArray[np.int64]:
        """Return which points (n, 3) may lie within a reach [m] along the axis of one of rising chainages (k,) [m].

        Quick: some that lie up to 1 cm farther are among them.
        """
        s, _ = self._rough_foot(points)
        middle = (chainages[1:] + chainages[:-1]) / 2
        return np.flatnonzero(np.abs(s - chainages[np.searchsorted(middle, s)]) <= reach + ROUGH)

    def _rough_foot(self, points: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Chainage of the foot by one step from the nearest node, and the curvature vector at that node."""
        from scipy.spatial import cKDTree

        _, nearest = cKDTree(self.nodes).query(points, workers=-1)
        bend = self._curve(self.chainage, 2)[nearest]
        return self.chainage[nearest] + _step(points - self.nodes[nearest], self.tangents[nearest], bend), bend

    def polar(self, points: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return chainage [m], distance from the axis [m] and clock angle [rad] of points (n, 3), each (n,)."""
        s, offset = self.project(points)
        right, up, _ = np.einsum("nij,ni->jn", self.frames(s), offset)
        return s, np.hypot(right, up), np.arctan2(right, up)

    def directions(self, points: FloatArray) -> FloatArray:
        """Return the direction of the axis (n, 3) at the feet of points (n, 3): the axial direction of gauges there."""
        return self.at(self.project(points)[0])[1]

    def unroll(self, points: FloatArray, radius: float | None = None) -> Unrolled:
        """Lay the lining flat.

        Parameters
        ----------
        points : ndarray of shape (n, 3)
            Local coordinates [m].
        radius : float, optional
            Radius that turns clock angles into arc lengths [m]; that of the axis where not given.

        Returns
        -------
        Unrolled
        """
        s, _, clock = self.polar(points)
        return Unrolled(along=s, across=clock * (self.radius if radius is None else radius), clock=clock)


def _step(away: FloatArray, tangent: FloatArray, bend: FloatArray) -> FloatArray:
    """Newton step along the axis towards the foot of points that are `away` (n, 3) from a place on it."""
    turn = np.maximum(1.0 - np.einsum("ni,ni->n", away, bend), MIN_BEND)
    return np.asarray(np.einsum("ni,ni->n", away, tangent) / turn)


def frames_about(forward: FloatArray, overhead: FloatArray) -> FloatArray:
    """Return (n, 3, 3) axes with columns right, up and forward for unit directions (n, 3): up is next to overhead."""
    up = overhead - (forward @ overhead)[:, None] * forward
    up /= np.sqrt(np.einsum("ni,ni->n", up, up))[:, None]
    return np.stack([np.cross(forward, up), up, forward], axis=-1)


def overhead_of(directions: FloatArray) -> FloatArray:
    """Return where 12 o'clock lies for an axis with these directions (n, 3): up, or +y in a shaft."""
    mean = directions.mean(axis=0)
    steep = abs(mean[2]) > SHAFT * np.linalg.norm(mean)
    return np.array([0.0, 1.0, 0.0]) if steep else np.array([0.0, 0.0, 1.0])


def curve_through(places: FloatArray, radius: float) -> Axis:
    """Lay an axis through places (k, 3) in their order; its chainage is true length along the curve.

    Two places give a straight line, three a parabola, more a cubic spline with the lengths between them as parameter.
    """
    from scipy.interpolate import CubicSpline

    steps = np.linalg.norm(np.diff(places, axis=0), axis=1)
    parameter = np.r_[0.0, np.cumsum(steps)]
    spline = CubicSpline(parameter, places)
    fine = np.linspace(0.0, parameter[-1], 8 * max(1, int(np.ceil(parameter[-1] / NODE_STEP))) + 1)
    speed = np.linalg.norm(spline(fine, 1), axis=1)
    middle = np.linalg.norm(spline((fine[1:] + fine[:-1]) / 2, 1), axis=1)
    # Simpson's rule over each fine interval
    length = np.r_[0.0, np.cumsum(np.diff(fine) * (speed[1:] + speed[:-1] + 4 * middle) / 6)]
    tangents = spline(fine[::8], 1) / speed[::8, None]
    return Axis(length[::8], spline(fine[::8]), tangents, radius, overhead_of(tangents))


def given_axis(places: ArrayLike, points: FloatArray) -> Axis:
    """Take an axis from the user, in the direction in which its places are given.

    Parameters
    ----------
    places : array_like of shape (k, 3), k >= 2
        Places along the axis, local coordinates [m]. A smooth curve is laid through them.
    points : ndarray of shape (n, 3)
        The reference scan, local coordinates [m].

    Returns
    -------
    Axis
        Its chainage starts with 0 at the first place.

    Raises
    ------
    OptionError
        Fewer than two different places, or an axis that leaves the cloud.
    """
    corners = np.asarray(places, float)
    if corners.ndim != 2 or corners.shape[1:] != (3,) or len(corners) < 2 or not np.isfinite(corners).all():
        raise OptionError(
            explain("axis", "two or more places x, y, z", f"{corners.tolist()}", "give at least two places")
        )
    if (np.linalg.norm(np.diff(corners, axis=0), axis=1) == 0).any():
        raise OptionError(explain("axis", "places that differ", "the same place twice in a row", "leave one out"))
    rough = curve_through(corners, 1.0)
    s, offset = rough.project(points)
    distance = np.linalg.norm(offset, axis=1)
    beside = (s >= 0) & (s <= rough.length)
    _must_stay_inside(rough, s[beside], offset[beside])
    return curve_through(corners, float(np.median(distance[beside])))


def _must_stay_inside(axis: Axis, s: FloatArray, offset: FloatArray) -> None:
    """Refuse an axis that has no ring of points around it for more than `OUTSIDE` of its length."""
    right, up, _ = np.einsum("nij,ni->jn", axis.frames(s), offset) if len(s) else np.zeros((3, 0))
    pieces = max(1, int(np.ceil(axis.length / NODE_STEP)))
    piece = np.minimum((s / axis.length * pieces).astype(int), pieces - 1)
    sector = ((np.arctan2(right, up) / np.pi + 1) * 18).astype(int) % 36
    seen = np.zeros((pieces, 36), bool)
    seen[piece, sector] = True
    inside = seen.sum(axis=1) * 10 >= AROUND
    if inside.mean() < 1.0 - OUTSIDE:
        first = int(np.argmin(inside)) * axis.length / pieces
        raise OptionError(
            explain(
                "axis",
                "a line with the scanned lining around it",
                f"one with no lining around it on {100 * (1 - inside.mean()):.0f} % of its {axis.length:.1f} m, "
                f"first at {first:.1f} m",
                "check its coordinates and its order x, y, z, or leave it out to have it found",
            )
        )
