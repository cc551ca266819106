# SPDX-License-Identifier: MIT
"""The main face of a wall found in a cloud or given by its user, or the reason why there is none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.cells import BLOCK_WIDTH, Cells, make_cells, median_spacing
from scanstrain.errors import OptionError, explain
from scanstrain.structures.wall import UP, Wall, axes_of
from scanstrain.structures.wall_plane import STEEP, agreeing, best_plane, find_plane, lean_error

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

CELL = 3.0
"""Cell width in point spacings; normals are those of patches twelve cells wide."""

PLANAR = 0.1
"""Patches less planar than this ratio are edges or clutter and carry no normal."""

FEWEST = 12
"""Patches that a face consists of at least; fewer fix no plane."""

OFF_SHARE, OFF_LEAST, OFF_MOST = 0.01, 0.03, 0.15
"""How far from the plane a face may lie: a hundredth of its extent, not less and not more than this [m]. Old walls
bulge by that much; pilasters and pipes stand out farther."""

MAIN = 0.4
"""Share of all upright surface that the main face has at least; the plane that fits a lining best has a tenth."""

RIVAL = 0.6
"""A second face with more than this share of the first: nobody could tell which one is meant."""

END_SHARE = 0.25
"""The face ends where a strip holds less than this share of the usual amount of surface."""

BULK, AMPLE = 0.97, 2.0
"""What lies on the face is at most twice as far from its plane as all but three hundredths of it: a pipe is not."""

TIGHT = 4.0
"""Surface within this many standard deviations of the plane shows where the face ends."""

ONE_SIDED, ENOUGH = 0.7, 20
"""Share of the surface off the plane that lies before the wall, and cells of it, that tell the free side."""


def fit_wall(points: FloatArray, *, given: ArrayLike | None = None, free_side: ArrayLike | None = None) -> Wall:
    """Find the plane of a wall, with clutter, openings, floor and return walls in the scan, or take it from the user.

    Of all upright planes the one wins that most surface patches agree with. Tukey's weights then fit it to the face,
    every piece of surface with the same weight however densely it was scanned.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        The reference scan, local coordinates [m].
    given : array_like of shape (2, 3) or (3, 3), optional
        Two places at the foot, from left to right for somebody who faces the wall: a vertical plane through them, its
        distances counted from the first. A third place higher up gives it a batter. Nothing is then fitted.
    free_side : array_like of shape (3,), optional
        A place before the wall. Without it the side counts as free on which the other surfaces of the scan lie.

    Returns
    -------
    Wall

    Raises
    ------
    OptionError
        The cloud shows no wall, several of like size, or none where it was said to be.
    """
    spacing = median_spacing(points) if len(points) > FEWEST else 0.0
    if spacing == 0:
        raise _no_wall(f"{len(points)} points")
    cells = make_cells(points, CELL * spacing)
    if given is not None:
        return _given(np.asarray(given, float), cells)
    upright = (cells.planarity < PLANAR) & (np.abs(cells.normal[:, 2]) <= STEEP)
    tolerance = float(np.clip(OFF_SHARE * np.linalg.norm(np.ptp(points, axis=0)), OFF_LEAST, OFF_MOST))
    place, normal = _main_face(cells.centre[upright], cells.normal[upright], tolerance)
    on = agreeing(cells.centre, cells.normal, place, normal, tolerance) & upright
    face = cells.position[on[cells.block]]
    place, normal, scale = best_plane(face, place, normal)
    right, up = axes_of(normal)
    error = lean_error(face, place, normal, scale)
    band = float(np.clip(AMPLE * np.quantile(np.abs((face - place) @ normal), BULK), OFF_LEAST, tolerance))
    wall = _bounded(Wall(place, normal, right, up, 0.0, 0.0, band, error), cells, min(TIGHT * scale, band))
    return _facing(wall, cells, free_side)


def _main_face(centre: FloatArray, normal: FloatArray, tolerance: float) -> tuple[FloatArray, FloatArray]:
    """Place and normal of the face that is larger than all others by far."""
    found = find_plane(centre, normal, tolerance)
    share = float(found[2].mean()) if found is not None else 0.0
    if found is None or found[2].sum() < FEWEST:
        raise _no_wall(f"less than {FEWEST} patches of {CELL * BLOCK_WIDTH:.0f} point spacings on one upright plane")
    if share < MAIN:
        raise _no_wall(f"a plane that {100 * share:.0f} % of its upright surface lies on")
    place, across, agree = found
    second = find_plane(centre[~agree], normal[~agree], tolerance)
    if second is not None and second[2].sum() > RIVAL * agree.sum():
        raise _no_wall(
            f"several faces of like size, the second {100 * second[2].sum() / agree.sum():.0f} % of the first"
        )
    return place, across


def _bounded(wall: Wall, cells: Cells, tight: float) -> Wall:
    """Let the face reach as far as the cloud shows it, and its distances begin at its lower left corner."""
    on = cells.position[np.abs(wall.offsets(cells.position)) <= tight]
    flat = wall.unroll(on)
    left, to_right = _ends(flat.along, cells.block_size)
    within = (flat.along >= left) & (flat.along <= to_right)
    foot, top = _ends(flat.across[within], cells.block_size)
    corner = wall.origin + left * wall.right + foot * wall.up
    return replace(wall, origin=corner, length=to_right - left, height=top - foot)


def _ends(values: FloatArray, step: float) -> tuple[float, float]:
    """First and last value [m], those of strips that hold too little left out: pavement before other ground."""
    if len(values) < FEWEST:
        raise _no_wall("hardly any points near its plane")
    strips = max(1, int(np.ceil(np.ptp(values) / step)))
    counts, edges = np.histogram(values, bins=strips)
    full = np.flatnonzero(counts >= END_SHARE * np.median(counts[counts > 0]))
    inside = values[(values >= edges[full[0]]) & (values <= edges[full[-1] + 1])]
    return float(inside.min()), float(inside.max())


def _facing(wall: Wall, cells: Cells, free_side: ArrayLike | None) -> Wall:
    """Turn the normal to the free side."""
    if free_side is not None:
        side = np.asarray(free_side, float)
        if side.shape != (3,) or not np.isfinite(side).all():
            raise OptionError(explain("free_side", "a place x, y, z", f"{side.tolist()}", "give one before the wall"))
        return wall if wall.offsets(side[None])[0] >= 0 else _turned(wall)
    off, flat = wall.offsets(cells.position), wall.unroll(cells.position)
    beside = (flat.along > 0) & (flat.along < wall.length) & (flat.across < wall.height) & (np.abs(off) > wall.band)
    before = float((off[beside] > 0).mean()) if beside.sum() >= ENOUGH else 0.5
    if max(before, 1 - before) >= ONE_SIDED:
        return wall if before > 0.5 else _turned(wall)
    turned = wall if wall.normal[np.argmax(np.abs(wall.normal))] > 0 else _turned(wall)
    side_word = "xyz"[int(np.argmax(np.abs(turned.normal)))]
    warning = (
        f"Nothing in the scan tells which side of the wall is free; the one towards larger {side_word} is taken. "
        "Give free_side, a place before the wall, to settle it."
    )
    return replace(turned, warnings=(warning,))


def _turned(wall: Wall) -> Wall:
    """Return the same wall seen from its other side."""
    corner = wall.origin + wall.length * wall.right
    return replace(wall, origin=corner, normal=-wall.normal, right=-wall.right)


def _given(places: FloatArray, cells: Cells) -> Wall:
    """Lay the plane through the places of the user."""
    if places.shape not in ((2, 3), (3, 3)) or not np.isfinite(places).all():
        raise OptionError(
            explain("wall", "two or three places x, y, z", f"{places.tolist()}", "give two at the foot of the wall")
        )
    right = (places[1] - places[0]) * [1.0, 1.0, 0.0]
    length = float(np.linalg.norm(right))
    rising = UP if len(places) == 2 else places[2] - places[0]
    normal = np.cross(right, rising)
    size = float(np.linalg.norm(normal))
    if size == 0 or abs(normal[2]) > STEEP * size or (places[-1, 2] < places[0, 2] and len(places) == 3):
        raise OptionError(
            explain(
                "wall",
                "places of an upright plane, left and right at its foot and one higher up",
                f"{places.tolist()}",
                "check their coordinates and their order x, y, z",
            )
        )
    normal = normal / size
    right, up = axes_of(normal)
    tolerance = float(np.clip(OFF_SHARE * length, OFF_LEAST, OFF_MOST))
    wall = Wall(places[0], normal, right, up, length, np.inf, tolerance, 0.0)
    on = wall.members(cells.position, cells.normal[cells.block])
    if on.sum() < FEWEST:
        raise OptionError(
            explain(
                "wall",
                "a plane with scanned surface on it",
                f"{int(on.sum())} patches within {tolerance:.2f} m of it",
                "check its coordinates and their order x, y, z, or leave it out to have it found",
            )
        )
    return replace(wall, height=_ends(wall.unroll(cells.position[on]).across, cells.block_size)[1])


def _no_wall(got: str) -> OptionError:
    return OptionError(
        explain(
            "structure",
            "a wall whose face is the main upright surface of the scan",
            got,
            'give two places at its foot, or set structure = "tunnel" or "free"',
        )
    )
