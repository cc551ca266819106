# SPDX-License-Identifier: MIT
"""From gauges in space to places on a flat map: a lining unrolled, a wall in elevation, anything else projected."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.result import Status
from scanstrain.result import Result
from scanstrain.strain.axes import UP, axis_of_normals
from scanstrain.zones import Unrolled

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

FACING = 0.5
"""Cosine between a gauge's normal and the view below which the map would show it edge-on (60 degrees)."""
SEAM = 8.0
"""Neighbours farther apart on the map than this many gauge spacings lie on two sides of the line where it was cut."""
EDGE_ON = 0.4
"""Metres on the map per metre on the surface below which the map shows a gauge edge-on: a bulkhead, a return wall."""
ALIKE = 0.87
"""Cosine within which normals count as one side of a wall (30 degrees)."""
CANDIDATES = 200
"""Normals that are tried as the side of a wall."""
NEIGHBOURS = 9
"""Gauges, itself included, from which the directions of the map at a gauge are taken."""
FLAT = 1e-6
"""Ratio of two extents below which gauges stand in a row."""
ROUNDS = 12
"""Reweighted rounds of the circle fit; floors and cabinets lose their weight in half of them."""


@dataclass(frozen=True, slots=True)
class Layout:
    """Places of the gauges on a map.

    Parameters
    ----------
    along, across : ndarray of shape (g,)
        To the right and upwards on the map [m]; NaN where a gauge cannot be shown.
    horizontal, vertical : str
        What the two axes are.
    view : str
        How the surface is looked at, as a phrase.
    radius : float, optional
        Arc length per radian about a tunnel's axis [m].
    pixels : dict
        Cells that were computed for a page, for the next figure of the same size.
    """

    along: FloatArray
    across: FloatArray
    horizontal: str
    vertical: str
    view: str
    radius: float | None = None
    pixels: dict[tuple[float, ...], NDArray[np.intp]] = field(default_factory=dict, compare=False, repr=False)

    @property
    def shown(self) -> BoolArray:
        """Which gauges have a place on the map."""
        return np.asarray(np.isfinite(self.along) & np.isfinite(self.across))


def structure_of(result: Result) -> str:
    """Name the structure of a result: tunnel, wall or free."""
    options = result.config.model_dump(mode="json")
    return str(options.get("strain", options).get("structure", "free"))


def lay_out(result: Result, unrolled: Unrolled | Layout | None = None) -> Layout:
    """Lay the gauges of a result flat.

    Parameters
    ----------
    result : Result
    unrolled : Unrolled or Layout, optional
        The gauges in coordinates of the structure, or a layout made before, so that many figures share the work. By
        default a tunnel is unrolled about a straight axis with a circle fitted to it, a wall is seen in elevation, and
        anything else is projected on its principal plane.

    Returns
    -------
    Layout
    """
    if isinstance(unrolled, Layout):
        return unrolled
    strain = result.strain
    return lay_flat(
        strain.position, strain.normal, fine=strain.status == Status.FINE, spacing=strain.gauge_spacing,
        structure=structure_of(result), base=float(result.reference.origin[2]), unrolled=unrolled,
    )  # fmt: skip


def lay_flat(
    position: FloatArray,
    normal: FloatArray,
    *,
    fine: BoolArray,
    spacing: float,
    structure: str,
    base: float = 0.0,
    unrolled: Unrolled | None = None,
) -> Layout:
    """Lay gauges flat that stand in arrays, for example out of a table.

    Parameters
    ----------
    position, normal : ndarray of shape (g, 3)
        Gauges in a local frame [m].
    fine : ndarray of shape (g,), bool
        Gauges with a fit; the others do not say where the surface is.
    spacing : float
        Gauge spacing [m].
    structure : {"tunnel", "wall", "free"}
    base : float
        Height of the local origin [m], added to the heights of a wall.
    unrolled : Unrolled, optional
        The gauges in coordinates of the structure.

    Returns
    -------
    Layout
    """
    if unrolled is not None:
        return _given(unrolled, position, normal, spacing)
    use = fine if fine.sum() >= 3 else np.ones(len(fine), bool)
    if structure == "tunnel":
        axis = axis_of_normals(normal[use])
        if axis is not None:
            return _tunnel(position, normal, use, axis, spacing)
    if structure == "wall":
        facing = _side(normal[use])
        if facing is not None:
            return _wall(position, normal, facing, spacing, base)
    return _free(position, normal, use, spacing)


def map_directions(
    position: FloatArray, normal: FloatArray, layout: Layout, spacing: float
) -> tuple[FloatArray, FloatArray]:
    """Find the unit tangents that run along the two axes of the map at each gauge.

    Taken from how the places of neighbouring gauges change, so that it holds for any way of unrolling.

    Parameters
    ----------
    position, normal : ndarray of shape (g, 3)
        Gauges [m].
    layout : Layout
    spacing : float
        Gauge spacing [m].

    Returns
    -------
    right, up : ndarray of shape (g, 3)
        NaN where too few neighbours show them.
    """
    gradient = _gradient(position, normal, np.stack([layout.along, layout.across], axis=1), spacing)
    length = np.linalg.norm(gradient, axis=1)
    unit = np.where((length > EDGE_ON)[:, None], gradient / np.where(length > 0, length, 1.0)[:, None], np.nan)
    whole = np.asarray(np.isfinite(unit).all(axis=(1, 2)))
    right, up = np.moveaxis(np.where(whole[:, None, None], unit, np.nan), 2, 0)
    return right, up


def _gradient(position: FloatArray, normal: FloatArray, flat: FloatArray, spacing: float) -> FloatArray:
    """How the two coordinates of the map change along the surface, (g, 3, 2) [1]; NaN where neighbours are too few."""
    from scipy.spatial import cKDTree

    out = np.full((len(position), 3, 2), np.nan)
    shown = np.flatnonzero(np.isfinite(flat).all(axis=1))
    if len(shown) < NEIGHBOURS:
        return out
    places, here, there = flat[shown], position[shown], normal[shown]
    _, near = cKDTree(here).query(here, NEIGHBOURS)
    step = places[near] - places[:, None]
    space = here[near] - here[:, None]
    space -= np.einsum("gki,gi->gk", space, there)[..., None] * there[:, None]
    space = np.where((np.linalg.norm(step, axis=2) < SEAM * spacing)[..., None], space, 0.0)
    # the normal gets a weight of its own: the neighbours say nothing about it
    square = np.einsum("gki,gkj->gij", space, space) + np.einsum("gi,gj->gij", there, there) * spacing**2
    solvable = np.linalg.cond(square) < 1e3
    out[shown[solvable]] = np.linalg.solve(square[solvable], np.einsum("gki,gkm->gim", space, step)[solvable])
    return out


def _given(unrolled: Unrolled, position: FloatArray, normal: FloatArray, spacing: float) -> Layout:
    places = np.stack([unrolled.along, unrolled.across], axis=1)
    change = np.linalg.norm(_gradient(position, normal, places, spacing), axis=1).min(axis=1)
    facing = np.isfinite(places).all(axis=1) & ~(change < EDGE_ON)
    seen = _in_front(places, position, normal, facing, spacing)
    along, across = (np.where(seen, part, np.nan) for part in (unrolled.along, unrolled.across))
    if np.isnan(unrolled.clock).all():
        return Layout(along, across, "along the wall [m]", "height [m]", "seen from the free side")
    turned = np.abs(unrolled.clock) > 0.2
    radius = float(np.nanmedian(unrolled.across[turned] / unrolled.clock[turned])) if turned.any() else None
    return Layout(along, across, *_LINING, radius)


_LINING = ("chainage [m]", "arc length from the crown [m]", "unrolled, seen from inside")


def _tunnel(position: FloatArray, normal: FloatArray, use: BoolArray, axis: FloatArray, spacing: float) -> Layout:
    up = UP if abs(axis[2]) < 0.9 else np.array([1.0, 0.0, 0.0])
    up = up - (up @ axis) * axis
    up /= np.linalg.norm(up)
    section = np.stack([position @ np.cross(axis, up), position @ up], axis=1)
    lining = np.abs(normal @ axis) < FACING
    centre, radius = _circle(section[use & lining] if (use & lining).sum() >= 3 else section)
    away = section - centre
    clock = np.arctan2(away[:, 0], away[:, 1])
    along = position @ axis
    seen = _in_front(np.stack([along, clock * radius], axis=1), position, normal, lining, spacing)
    start = along[seen].min() if seen.any() else 0.0
    return Layout(np.where(seen, along - start, np.nan), np.where(seen, clock * radius, np.nan), *_LINING, radius)


def _wall(position: FloatArray, normal: FloatArray, facing: FloatArray, spacing: float, base: float) -> Layout:
    right = np.cross(UP, facing)
    along, height = position @ right, position[:, 2]
    places, turned = np.stack([along, height], axis=1), normal @ facing > FACING
    seen = _in_front(places, position, normal, turned, spacing)
    start = along[seen].min() if seen.any() else 0.0
    return Layout(
        np.where(seen, along - start, np.nan),
        np.where(seen, height + base, np.nan),
        "along the wall [m]",
        "height [m]",
        "elevation, seen from the free side",
    )


def _free(position: FloatArray, normal: FloatArray, use: BoolArray, spacing: float) -> Layout:
    middle = position[use].mean(axis=0) if use.any() else np.zeros(3)
    _, spread, directions = np.linalg.svd(position[use] - middle, full_matrices=True)
    right, up, facing = (_largest_positive(direction) for direction in directions)
    if len(spread) < 2 or spread[1] <= FLAT * spread[0]:
        # one gauge or a row of them spans no plane: look at its surface instead
        facing = normal[use].mean(axis=0) if use.any() else facing
        right, up = np.linalg.svd(facing[None])[2][1:]
    if abs(right[2]) > abs(up[2]):
        right, up = up, right
    if np.cross(right, up) @ facing < 0:
        facing = -facing
    if (normal[use] @ facing).sum() < 0:
        right, facing = -right, -facing
    along, across = (position - middle) @ right, (position - middle) @ up
    places = np.stack([along, across], axis=1)
    seen = _in_front(places, position, normal, normal @ facing > FACING, spacing)
    return Layout(
        np.where(seen, along, np.nan),
        np.where(seen, across, np.nan),
        f"along ({_components(right)}) [m]",
        f"along ({_components(up)}) [m]",
        "projected on the two principal directions of the object, from its middle",
    )


def _in_front(
    places: FloatArray, position: FloatArray, normal: FloatArray, facing: BoolArray, spacing: float
) -> BoolArray:
    """Which gauges the viewer sees: turned to him, and nothing nearer to him in the same place of the map."""
    from scipy.spatial import cKDTree

    seen = facing.copy()
    rows = np.flatnonzero(facing)
    if len(rows) < 2:
        return seen
    first, second = rows[cKDTree(places[rows]).query_pairs(0.7 * spacing, output_type="ndarray")].T
    # normals point to the viewer, so what lies along them is nearer to him
    step = np.einsum("ki,ki->k", position[second] - position[first], (normal[first] + normal[second]) / 2)
    seen[first[step > spacing]] = False
    seen[second[step < -spacing]] = False
    return seen


def _side(normal: FloatArray) -> FloatArray | None:
    """Horizontal direction that most of the upright surface faces; None where nothing is upright."""
    level = normal * [1.0, 1.0, 0.0]
    length = np.linalg.norm(level, axis=1)
    level = level[length > ALIKE] / length[length > ALIKE][:, None]
    if not len(level):
        return None
    tried = level[:: max(1, len(level) // CANDIDATES)]
    best = tried[np.argmax(((level @ tried.T) > ALIKE).sum(axis=0))]
    mean = level[level @ best > ALIKE].mean(axis=0)
    return np.asarray(mean / np.linalg.norm(mean))


def _circle(places: FloatArray) -> tuple[FloatArray, float]:
    """Fit a circle to places (n, 2): algebraic fit after Kåsa 1976, reweighted so that a floor does not pull it."""
    weight = np.ones(len(places))
    middle = places.mean(axis=0)
    rows = np.column_stack([2 * (places - middle), np.ones(len(places))])
    square = ((places - middle) ** 2).sum(axis=1)
    centre, radius = np.zeros(2), 1.0
    for _ in range(ROUNDS):
        a, b, c = np.linalg.lstsq(rows * weight[:, None], square * weight, rcond=None)[0]
        centre, radius = np.array([a, b]), float(np.sqrt(max(c + a * a + b * b, 1e-12)))
        off = np.abs(np.hypot(*(places - middle - centre).T) - radius)
        scale = max(1.5 * float(np.median(off)), 1e-6)
        weight = 1.0 / (1.0 + (off / scale) ** 2)
    return middle + centre, radius


def _largest_positive(direction: FloatArray) -> FloatArray:
    return np.asarray(direction * np.sign(direction[np.argmax(np.abs(direction))]))


def _components(direction: FloatArray) -> str:
    return ", ".join(f"{part + 0.0:.2f}" for part in np.round(direction, 2)).replace("-", "−")
