# SPDX-License-Identifier: MIT
"""Named parts of the object: by a box, a polygon, a range of chainage and clock angle, or LAS classes."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Range = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Unrolled:
    """Places in the coordinates of a structure's own surface, laid flat.

    Parameters
    ----------
    along : ndarray of shape (n,)
        Chainage along a tunnel axis, or distance along a wall to the right for somebody who faces it [m].
    across : ndarray of shape (n,)
        Arc length from the crown, clockwise for somebody who looks along the axis, or height on a wall [m].
    clock : ndarray of shape (n,)
        Angle about the tunnel axis from the crown, clockwise for somebody who looks along the axis [rad], in
        (-pi, pi]; NaN on a wall.
    """

    along: FloatArray
    across: FloatArray
    clock: FloatArray


@dataclass(frozen=True, slots=True)
class Zone:
    """A part of the object; a point belongs to it if it meets every condition that is given.

    Parameters
    ----------
    name : str
    box : tuple of two corners, optional
        Lowest and highest x, y, z in file coordinates [m].
    polygon : tuple of (x, y), optional
        Corners in plan, file coordinates [m].
    surface_polygon : tuple of (along, across), optional
        Corners on the surface laid flat, see `Unrolled` [m].
    height : (float, float), optional
        Lowest and highest z in file coordinates [m].
    chainage : (float, float), optional
        From and to, along the tunnel axis [m].
    clock : (float, float), optional
        From and to, in hours of a clock face with 12 at the crown, for somebody who looks along the axis; a range
        that passes the crown runs for example from 11 to 1.
    classes : tuple of int, optional
        LAS classification codes.
    """

    name: str
    box: tuple[tuple[float, float, float], tuple[float, float, float]] | None = None
    polygon: tuple[tuple[float, float], ...] | None = None
    surface_polygon: tuple[tuple[float, float], ...] | None = None
    height: Range | None = None
    chainage: Range | None = None
    clock: Range | None = None
    classes: tuple[int, ...] | None = None

    @property
    def needs_unrolled(self) -> bool:
        """Whether the zone is given in coordinates of the structure."""
        return any(part is not None for part in (self.surface_polygon, self.chainage, self.clock))


def in_zone(
    zone: Zone,
    points: FloatArray,
    *,
    origin: FloatArray,
    classification: NDArray[np.uint8] | None = None,
    unrolled: Unrolled | None = None,
) -> BoolArray:
    """Say which points belong to a zone.

    Parameters
    ----------
    zone : Zone
    points : ndarray of shape (n, 3)
        Local coordinates [m].
    origin : ndarray of shape (3,)
        What was subtracted from file coordinates [m].
    classification : ndarray of shape (n,), uint8, optional
        LAS classification codes.
    unrolled : Unrolled, optional
        The same points in coordinates of the structure.

    Returns
    -------
    ndarray of shape (n,), bool

    Raises
    ------
    OptionError
        The zone needs classification codes or structure coordinates that are not there.
    """
    inside = np.ones(len(points), bool)
    if zone.box is not None:
        low, high = (np.asarray(corner) - origin for corner in zone.box)
        inside &= ((points >= low) & (points <= high)).all(axis=1)
    if zone.height is not None:
        inside &= within(points[:, 2] + origin[2], zone.height)
    if zone.polygon is not None:
        inside &= in_polygon(points[:, :2], np.asarray(zone.polygon, float) - origin[:2])
    if zone.classes is not None:
        inside &= np.isin(_known(zone, classification), zone.classes)
    if zone.needs_unrolled:
        inside &= _on_structure(zone, unrolled)
    return inside


def mask_of(zones: tuple[Zone, ...], epoch: Epoch, unrolled: Unrolled | None = None) -> BoolArray:
    """Say which points of an epoch belong to any of the zones.

    Raises
    ------
    OptionError
        A zone without points, or one that cannot be judged.
    """
    mask = np.zeros(len(epoch), bool)
    for zone in zones:
        mine = in_zone(
            zone, epoch.points, origin=epoch.origin, classification=epoch.classification, unrolled=unrolled
        )  # fmt: skip
        if not mine.any():
            corners = (epoch.points.min(axis=0), epoch.points.max(axis=0))
            span = " to ".join("({:.2f}, {:.2f}, {:.2f})".format(*(epoch.origin + corner)) for corner in corners)
            raise OptionError(
                explain(f"zone {zone.name!r}", "points of the reference scan in it", "none", f"the scan spans {span}")
            )
        mask |= mine
    return mask


def within(values: FloatArray, limits: Range) -> BoolArray:
    """Say which values lie within limits, ends included."""
    return np.asarray((values >= limits[0]) & (values <= limits[1]))


def in_polygon(places: FloatArray, corners: FloatArray) -> BoolArray:
    """Say which places (n, 2) lie inside a polygon (k, 2), by the number of edges that a ray to the right crosses."""
    x, y = places.T
    inside = np.zeros(len(places), bool)
    for (x0, y0), (x1, y1) in zip(corners, np.roll(corners, -1, axis=0), strict=True):
        if y0 == y1:
            continue
        crosses = (y0 <= y) != (y1 <= y)
        inside ^= crosses & (x < x0 + (y - y0) * (x1 - x0) / (y1 - y0))
    return inside


def on_clock(angle: FloatArray, hours: Range) -> BoolArray:
    """Say which angles from the crown [rad] lie between two hours of a clock face."""
    first, last = (hour % 12 for hour in hours)
    hour = np.asarray(angle) * 6 / np.pi % 12
    if first <= last:
        return within(hour, (first, last))
    return np.asarray((hour >= first) | (hour <= last))


def _on_structure(zone: Zone, unrolled: Unrolled | None) -> BoolArray:
    if unrolled is None:
        raise OptionError(
            explain(
                f"zone {zone.name!r}",
                "a structure whose surface can be laid flat, for chainage, clock or a polygon on the surface",
                'structure = "free"',
                'set structure = "tunnel" or "wall", or give a box or a polygon in plan',
            )
        )
    inside = np.ones(len(unrolled.along), bool)
    if zone.chainage is not None:
        inside &= within(unrolled.along, zone.chainage)
    if zone.clock is not None:
        if np.isnan(unrolled.clock).all():
            raise OptionError(
                explain(f"zone {zone.name!r}", "a tunnel, for a clock range", "a wall", "give a box or a polygon")
            )
        inside &= on_clock(unrolled.clock, zone.clock)
    if zone.surface_polygon is not None:
        inside &= in_polygon(np.stack([unrolled.along, unrolled.across], axis=1), np.asarray(zone.surface_polygon))
    return inside


def _known(zone: Zone, classification: NDArray[np.uint8] | None) -> NDArray[np.uint8]:
    if classification is None:
        raise OptionError(
            explain(f"zone {zone.name!r}", "a scan with classification codes", "one without", "give a box or a polygon")
        )
    return classification
