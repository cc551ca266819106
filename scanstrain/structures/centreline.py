# SPDX-License-Identifier: MIT
"""The axis of a tunnel from its scanned lining: found, followed, and refined by sections normal to it."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.cells import make_cells, median_spacing
from scanstrain.errors import OptionError, explain
from scanstrain.structures.axis import Axis, curve_through
from scanstrain.structures.cylinder import MIN_SECTORS, find_cylinder, sectors_seen
from scanstrain.structures.smoothing import smooth
from scanstrain.structures.tracking import TUKEY, Surface, fit_circle, follow

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

CELL = 3.0
"""Cell width in point spacings; normals are those of patches twelve cells wide."""

CELLS = 150_000
"""Cells that are used; more do not make the axis better."""

PLANAR = 0.1
"""Patches less planar than this ratio are edges or clutter and carry no normal."""

SLAB = 1 / 6
"""Length of the slabs whose centres carry the axis, in radii: the axis is straight in one to a fraction of a mm."""

LINING = 0.15
"""The lining lies within this share of the radius about the rough axis."""

FACING_AXIS = 0.5
"""Normals with a larger cosine to the axis belong to end walls and faces."""

MIN_RINGS = 0.5
"""Share of the slabs that must show a ring; gaps are bridged, but most of a tunnel is there."""

ROUNDS = 6
"""Rounds of cutting and smoothing; the change falls about tenfold with each."""

STILL = 1e-5
"""Change of the axis at which the rounds end [m]."""

TURN_BINS, TURN_SHARE, TURN_MIN = 36, 0.5, 12
"""The normals of a tunnel turn evenly: of 36 bins of 10 degrees, 12 hold at least half of an even share. The normals
of a room or of walls point in four directions only."""

SHARPEST = 2.0
"""Smallest radius of a bend in radii of the lining."""

END_SHARE = 0.25
"""The tunnel ends where a slice holds less than this share of the usual amount of lining."""


def fit_axis(points: FloatArray, *, guide: ArrayLike | None = None) -> Axis:
    """Find the axis of a tunnel or shaft: straight, bent or inclined, with services, floor and end walls in the scan.

    A cylinder that most of the surface agrees with is followed to both ends. Then, in turns, the lining is cut into
    slabs normal to the axis, the centre of each is fitted by Tukey's weights on radial distances, and a smoothing
    curve is laid through the centres. The axis is that of the circle that fits the lining best; of the ring at
    least 120 degrees must show.

    Parameters
    ----------
    points : ndarray of shape (n, 3)
        The reference epoch, local coordinates [m].
    guide : array_like of shape (3,), optional
        Rough direction of rising chainage; tunnels more than 30 degrees off are not considered.

    Returns
    -------
    Axis
        Chainage 0 at the first lining. It rises along the guide, or else so that the largest component of the mean
        direction is positive: to the east, to the north, or upwards.

    Raises
    ------
    OptionError
        The cloud shows no tunnel: a wall, a room, a floor, or too little of a ring.
    """
    sense = None if guide is None else _unit(guide)
    place, normal = _thinned(points)
    planar = np.isfinite(normal[:, 0])
    seed = find_cylinder(place[planar], normal[planar], guide=sense)
    if seed is None:
        raise _no_tunnel("no stretch of it")
    surface = Surface(place, np.where(planar[:, None], normal, 0.0))
    centres = follow(surface, seed)
    if len(centres) < 2:
        raise _no_tunnel("no stretch of it")
    axis = curve_through(_in_sense(centres, sense), seed.radius)
    for _ in range(ROUNDS):
        finer = _refine(axis, surface)
        probe = np.linspace(0.0, finer.length, 50)
        moved = float(np.linalg.norm(axis.project(finer.at(probe)[0])[1], axis=1).max())
        axis = finer
        if moved < STILL:
            break
    _must_turn(axis, surface)
    return axis


def _thinned(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Cells of the cloud and the normals of their blocks, NaN where a block is no plane."""
    spacing = median_spacing(points)
    if len(points) <= MIN_SECTORS or spacing == 0:
        raise _no_tunnel(f"{len(points)} points")
    cells = make_cells(points, CELL * spacing)
    normal = np.where((cells.planarity < PLANAR)[:, None], cells.normal, np.nan)
    some = slice(None, None, int(np.ceil(len(cells) / CELLS)))
    return cells.position[some], normal[cells.block[some]]


def _refine(axis: Axis, surface: Surface) -> Axis:
    """Cut the lining into slabs normal to the axis, and lay the axis anew through their centres."""
    s, right, up, lining = _lining(axis, surface)
    low, high = _ends(s, axis.radius * SLAB)
    edges = np.linspace(low, high, max(5, round((high - low) / (axis.radius * SLAB))) + 1)
    centre, radius = _slab_centres(s, right, up, edges, axis.radius)
    weight = np.isfinite(radius).astype(float)
    if weight.mean() < MIN_RINGS:
        raise _no_tunnel(f"one on {100 * weight.mean():.0f} % of the length followed")
    # one node more at each end, without weight: the curve itself carries the axis to the ends
    step = edges[1] - edges[0]
    nodes = edges[0] + step * (np.arange(len(edges) + 1) - 0.5)
    shift = np.einsum("kij,kj->ki", axis.frames(nodes)[:, :, :2], np.pad(centre, ((1, 1), (0, 0))))
    places = smooth(axis.at(nodes)[0] + shift, np.pad(_trusted(centre, weight), 1))
    return _trimmed(curve_through(places, float(np.nanmedian(radius))), surface.place[lining])


def _lining(axis: Axis, surface: Surface) -> tuple[FloatArray, FloatArray, FloatArray, BoolArray]:
    """Chainage and offsets to the right and up of the cells on the lining, and which of all cells these are."""
    s, offset = axis.project(surface.place)
    frames = axis.frames(s)
    right, up, _ = np.einsum("nij,ni->jn", frames, offset)
    lining = np.abs(np.hypot(right, up) - axis.radius) < LINING * axis.radius
    lining &= np.abs(np.einsum("ni,ni->n", surface.normal, frames[:, :, 2])) < FACING_AXIS
    return s[lining], right[lining], up[lining], lining


def _slab_centres(
    s: FloatArray, right: FloatArray, up: FloatArray, edges: FloatArray, radius: float
) -> tuple[FloatArray, FloatArray]:
    """Centre (k, 2) and radius (k,) of every slab [m]; 0 and NaN where less than 120 degrees of a ring show."""
    order = np.argsort(s, kind="stable")
    bounds = np.searchsorted(s[order], edges)
    centre, found = np.zeros((len(edges) - 1, 2)), np.full(len(edges) - 1, np.nan)
    for k in range(len(found)):
        mine = order[bounds[k] : bounds[k + 1]]
        circle = fit_circle(right[mine], up[mine], radius)
        if circle is None:
            continue
        dx, dy, own, used = circle
        seen = sectors_seen(np.arctan2(up[mine] - dy, right[mine] - dx)[used > 0])
        if seen >= MIN_SECTORS and np.hypot(dx, dy) < LINING * radius:
            centre[k], found[k] = (dx, dy), own
    return centre, found


def _trusted(centre: FloatArray, weight: FloatArray) -> FloatArray:
    """Weigh down slabs whose centre jumps off its neighbours': niches, cross passages, equipment."""
    if weight.sum() < 5:
        return weight
    used = weight > 0
    jump = np.linalg.norm(centre - np.stack([_running_median(column, used) for column in centre.T], axis=1), axis=1)
    scale = 1.4826 * float(np.median(jump[used])) + 1e-6
    return weight * np.clip(1.0 - (jump / (2 * TUKEY * scale)) ** 2, 0.0, None) ** 2


def _running_median(values: FloatArray, used: BoolArray) -> FloatArray:
    """Median over five neighbours each way of the values in use."""
    padded = np.pad(np.where(used, values, np.nan), 5, constant_values=np.nan)
    windows = np.lib.stride_tricks.sliding_window_view(padded, 11)
    middle = np.zeros(len(values))
    some = np.isfinite(windows).any(axis=1)
    middle[some] = np.nanmedian(windows[some], axis=1)
    return middle


def _ends(s: FloatArray, step: float) -> tuple[float, float]:
    """First and last chainage with lining: slices from the first to the last that is no stray."""
    if len(s) < MIN_SECTORS:
        raise _no_tunnel("less than a third of a ring")
    slices = max(1, int(np.ceil(np.ptp(s) / (step / 4))))
    counts, edges = np.histogram(s, bins=slices)
    full = np.flatnonzero(counts >= END_SHARE * np.median(counts[counts > 0]))
    inside = s[(s >= edges[full[0]]) & (s <= edges[full[-1] + 1])]
    return float(inside.min()), float(inside.max())


def _trimmed(axis: Axis, lining: FloatArray) -> Axis:
    """Let chainage begin at the first and end at the last of the lining."""
    low, high = _ends(axis.project(lining)[0], axis.radius * SLAB)
    count = max(4, int(np.ceil((high - low) / (axis.radius * SLAB))) + 1)
    return curve_through(axis.at(np.linspace(low, high, count))[0], axis.radius)


def _must_turn(axis: Axis, surface: Surface) -> None:
    """Refuse what is hollow but has flat sides only, or goes round and round: sections of it would cross."""
    bend = np.linalg.norm(np.diff(axis.tangents, axis=0), axis=1) / np.diff(axis.chainage)
    if bend.max() * axis.radius * SHARPEST > 1.0:
        raise _no_tunnel("a hollow that does not run along a line")
    s, right, up, lining = _lining(axis, surface)
    n_right, n_up, _ = np.einsum("nij,ni->jn", axis.frames(s), surface.normal[lining])
    outwards = n_right * right + n_up * up
    facing = np.abs(outwards) > 0.5 * np.hypot(right, up)
    angle = np.arctan2(n_right * np.sign(outwards), n_up * np.sign(outwards))[facing]
    share = np.histogram(angle, bins=TURN_BINS, range=(-np.pi, np.pi))[0] / max(1, len(angle))
    turned = int((share >= TURN_SHARE / TURN_BINS).sum())
    if turned < TURN_MIN:
        raise _no_tunnel(f"surfaces that face {turned * 360 // TURN_BINS} degrees of a ring")


def _in_sense(places: FloatArray, guide: FloatArray | None) -> FloatArray:
    way = places[-1] - places[0]
    rising = way @ guide if guide is not None else way[np.argmax(np.abs(way))]
    return places if rising > 0 else places[::-1]


def _unit(guide: ArrayLike) -> FloatArray:
    direction = np.asarray(guide, float)
    if direction.shape != (3,) or not np.isfinite(direction).all() or not direction.any():
        raise OptionError(
            explain(
                "axis", "three numbers that are not all zero", f"{direction.tolist()}", "give for example [0, 1, 0]"
            )
        )
    return np.asarray(direction / np.linalg.norm(direction))


def _no_tunnel(got: str) -> OptionError:
    return OptionError(
        explain(
            "structure",
            "a tunnel or shaft whose lining shows over at least 120 degrees of its ring",
            got,
            'give the axis, or set structure = "wall" or "free"',
        )
    )
