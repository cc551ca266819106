# SPDX-License-Identifier: MIT
"""Whether the current epoch is the reference in disguise: in another unit, or with its axes swapped or mirrored.

All of this runs only where the surfaces do not meet, or meet so loosely that chance will do.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import suppress

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import median_spacing
from scanstrain.epoch import Epoch
from scanstrain.errors import MissingDependencyError, OverlapError, explain
from scanstrain.registration.coarse import feature_starts, settle, share_close, to_grid
from scanstrain.registration.mixups import UNITS, axes_words, axis_orders, size, unit_words
from scanstrain.registration.rigid import rigid
from scanstrain.registration.surfaces import Surface, pyramid

FloatArray = NDArray[np.float64]
Found = tuple[FloatArray, FloatArray, str]

TIGHT = 0.05
"""A match is tight within this part of a block width, a fifth of what counts as close."""
TIGHT_PART = 0.75
"""Part of the close surface that is tight in a true fit: measured at 0.87 and more on rooms, walls and linings, with
10 mm of movement as well; 0.6 and less where rooms were fitted mirrored."""
BETTER = 1.3
"""How many times the tight share of a pose another one must reach to be believed instead."""
MORE = 1.1
"""The same for the close share, which differs less."""
SHARE_NEEDED = 0.25
"""Tight share that proves a disguise."""
LIKE_SIZES = 1.5
"""Largest factor between the sizes of two epochs of one place, beyond that of their units."""
OTHER_SIZE, LIKE_SPACINGS = 8.0, 3.0
"""Factor between sizes from which a unit is suspected at once; and between the ratios of spacings and of sizes."""
PLACE = 10.0
"""How far apart, in sizes of the reference, the middles of two scans of one place may lie."""
MIRROR = np.diag([-1.0, 1.0, 1.0])


def refuse_other_unit(reference: Epoch, current: Epoch) -> None:
    """Refuse epochs whose size and point spacing both differ by the factor of a unit that no pair of scans differs by.

    Feet are left to the surfaces: one scan may well be three times as large as the other.

    Parameters
    ----------
    reference, current : Epoch

    Raises
    ------
    OverlapError
        Names the unit.
    """
    ratio = size(current.points) / max(size(reference.points), np.finfo(float).tiny)
    if 1 / OTHER_SIZE < ratio < OTHER_SIZE:
        return
    words = unit_words(ratio, LIKE_SIZES, "the current epoch", "the reference")
    spacing = median_spacing(current.points) / max(median_spacing(reference.points), np.finfo(float).tiny)
    if words is not None and 1 / LIKE_SPACINGS < spacing / ratio < LIKE_SPACINGS:
        raise _disguised(f"sizes and point spacings in a ratio of {ratio:.4g} and {spacing:.4g}: {words}")


def far_words(reference: Epoch, current: Epoch) -> str | None:
    """Say which mistake would bring two far epochs together, by the places of their middles.

    Parameters
    ----------
    reference, current : Epoch

    Returns
    -------
    str or None
        None where no exchange of axes and no unit does.
    """
    mine, theirs = (np.median(epoch.points, axis=0) + epoch.origin for epoch in (reference, current))
    near = PLACE * size(reference.points)
    if np.linalg.norm(theirs - mine) < near:
        return None
    for M in (*axis_orders(mirrored=True), *axis_orders(mirrored=False)):
        words = axes_words(M)
        if words is not None and np.linalg.norm(M @ theirs - mine) < near:
            return f"the current epoch lies where the reference would with {words}"
    for factor in (*UNITS.values(), *(1 / each for each in UNITS.values())):
        if np.linalg.norm(theirs / factor - mine) < near:
            return unit_words(factor, 1.01, "the current epoch", "the reference")
    return None


def _disguised(got: str) -> OverlapError:
    required = "scans in one unit with the same order and sense of axes"
    return OverlapError(explain("registration", required, got, "export the scans alike, or state unit and axes"))


def tight_share(reference: Surface, current: Surface, T_ref_grid: FloatArray) -> float:
    """Return `share_close` for a fifth of the usual distance."""
    return share_close(reference, current, T_ref_grid, close=TIGHT)


def loose(reference: Surface, current: Surface, T_ref_grid: FloatArray) -> bool:
    """Say whether surfaces lie close but hardly anywhere tight, as they do by chance."""
    near = share_close(reference, current, T_ref_grid)
    return near == 0.0 or tight_share(reference, current, T_ref_grid) < TIGHT_PART * near


def confirm(
    mine: list[Surface],
    theirs: list[Surface],
    reference: Epoch,
    current: Epoch,
    found: Found,
    *,
    searching: bool,
    seed: int,
) -> Found:
    """Believe a start whose surfaces fit tightly; look for a better one, then for a disguise, where they do not.

    Parameters
    ----------
    mine, theirs : list of Surface
        From wide to fine.
    reference, current : Epoch
    found : tuple
        The start, the same after a rough alignment, and where it came from.
    searching : bool
        Whether another start may take its place.
    seed : int

    Returns
    -------
    tuple
        `found`, or what is better.

    Raises
    ------
    OverlapError
        The epochs fit far better in another unit or mirrored.
    """
    if not loose(mine[-1], theirs[-1], found[1]):
        return found
    tight = tight_share(mine[-1], theirs[-1], found[1])
    as_given = found[2] == "identity"
    if searching and as_given:
        share, T = _by_axes(mine, theirs, mirrored=False)
        close = [share_close(mine[-1], theirs[-1], each) for each in (found[1], T)]
        # Ground of which half moved fits tightly where only that half does: more of it must lie close as well.
        if share > BETTER * tight and close[1] > MORE * close[0]:
            found, tight = (T, T, "coarse"), share
    # Frames that fit roughly as they are can only be mixed up by whole axes: no need for features, which take long.
    refuse_disguise(mine, theirs, reference, current, best=tight, seed=None if as_given else seed)
    return found


def refuse_disguise(
    mine: list[Surface], theirs: list[Surface], reference: Epoch, current: Epoch, *, best: float, seed: int | None
) -> None:
    """Refuse a current epoch that fits far better in another unit, or mirrored.

    What is symmetric fits mirrored as well as turned, and a plane fits itself in any unit: the same search without
    the disguise must find nothing nearly as good.

    Parameters
    ----------
    mine, theirs : list of Surface
        From wide to fine.
    reference, current : Epoch
    best : float
        Tight share of the pose found so far, 0 for none.
    seed : int or None
        Of the search by features; None leaves it out.

    Raises
    ------
    OverlapError
        Names the disguise.
    """
    needed = max(SHARE_NEEDED, BETTER * best)
    found = _in_unit(mine, reference, current, needed, seed) or _mirrored(mine, current, needed, seed)
    if found is not None and found[0] > BETTER * max(share for share, _ in _search(mine, theirs, seed, mirrored=False)):
        raise _disguised(f"{found[1]}, with {found[0]:.0%} of the surface fitting")


def _in_unit(
    mine: list[Surface], reference: Epoch, current: Epoch, needed: float, seed: int | None
) -> tuple[float, str] | None:
    """Say in which unit one epoch fits the other, if in any, and how much of it."""
    ratio = size(current.points) / size(reference.points)
    words = unit_words(ratio, LIKE_SIZES, "the current epoch", "the reference")
    if words is None:
        return None
    factor = UNITS[words.rpartition(" ")[2]]
    factor = factor if ratio > 1 else 1 / factor
    scaled = (current.points + current.origin) / factor - current.origin
    theirs = pyramid(scaled, [surface.width for surface in mine], own_grid=True)
    as_given = _tightest(mine, theirs, [to_grid(np.eye(4), theirs[-1])])[0]
    if as_given >= needed:
        return as_given, words
    share = max(share for share, _ in _search(mine, theirs, seed, mirrored=False))
    return (share, words) if share >= needed else None


def _mirrored(mine: list[Surface], current: Epoch, needed: float, seed: int | None) -> tuple[float, str] | None:
    """Say which axes are mixed up, if the current epoch fits with one of them turned round, and how much of it."""
    theirs = pyramid(current.points @ MIRROR, [surface.width for surface in mine], own_grid=True)
    for share, T in _search(mine, theirs, seed, mirrored=True):
        if share >= needed:
            R = (T @ theirs[-1].T_grid_epoch)[:3, :3] @ MIRROR
            words = axes_words(R) or "axes swapped or one of them negated"
            return share, f"a current epoch that looks like the reference mirrored, {words}"
    return None


def _search(
    mine: list[Surface], theirs: list[Surface], seed: int | None, *, mirrored: bool
) -> Iterator[tuple[float, FloatArray]]:
    """Yield tight share and pose of the best order of axes, then of the features."""
    yield _by_axes(mine, theirs, mirrored=mirrored)
    if seed is not None:
        with suppress(MissingDependencyError):
            yield _tightest(mine, theirs, feature_starts(mine[-1], theirs[-1], seed))


def _by_axes(mine: list[Surface], theirs: list[Surface], *, mirrored: bool) -> tuple[float, FloatArray]:
    """Tight share and pose of the best order of axes, with the middles on one another."""
    back = MIRROR if mirrored else np.eye(3)
    starts = [_about_middles(mine[-1], theirs[-1], M @ back) for M in axis_orders(mirrored=mirrored)]
    wide = [settle(mine[:1], theirs[:1], T) for T in starts]
    return _tightest(mine, theirs, [max(wide, key=lambda each: each[1])[0]])


def _tightest(mine: list[Surface], theirs: list[Surface], starts: list[FloatArray]) -> tuple[float, FloatArray]:
    """Tight share and pose of the best of several starts after a rough alignment; 0 without any."""
    best = (0.0, np.eye(4))
    for start in starts:
        T = settle(mine, theirs, start)[0]
        best = max(best, (tight_share(mine[-1], theirs[-1], T), T), key=lambda each: each[0])
    return best


def _about_middles(mine: Surface, theirs: Surface, R: FloatArray) -> FloatArray:
    """Pose of the current grid frame that turns the epoch and puts the middles of both on one another."""
    turn = to_grid(rigid(R, np.zeros(3)), theirs)
    middle = turn[:3, :3] @ np.median(theirs.cells.centre, axis=0) + turn[:3, 3]
    turn[:3, 3] += np.median(mine.cells.centre, axis=0) - middle
    return turn
