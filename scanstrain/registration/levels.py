# SPDX-License-Identifier: MIT
"""How wide the blocks are, from the capture range down to a few point spacings, and whether they can serve."""

from __future__ import annotations

from itertools import compress

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import median_spacing
from scanstrain.errors import RegistrationError, explain
from scanstrain.registration.fit import MIN_MATCHES
from scanstrain.registration.surfaces import Surface, pyramid

FloatArray = NDArray[np.float64]

BLOCK_SPACINGS = 12.0
"""Final block width in point spacings: some 140 points a block, whose plane is known far better than its centre."""
CLUTTER_SPACINGS = (8.0, 6.0, 4.0)
"""Widths that are tried among furniture or vegetation, where wide blocks find few planes."""
KEPT_AREA = 0.85
"""A narrower width serves if its flat blocks cover at least this part of the area that the widest ones cover: where
they do not, they hold too few points."""
MIN_SPACINGS = 4.0
"""Blocks are never narrower than this."""
MIN_FLAT = 0.5
"""Share of the points in flat blocks below which a scan counts as cluttered."""
STEPS = 4
"""Block widths per factor of two."""
WANTED_BLOCKS = 60
"""Small objects get narrower blocks, so that about so many are left."""


def level_widths(points: int, spacing: float, spacings: float, capture_range: float) -> list[float]:
    """Choose block widths [m] from the capture range down to a number of point spacings, halving.

    Parameters
    ----------
    points : int
        Points of the smaller epoch.
    spacing : float
        Point spacing [m].
    spacings : float
        Wanted width of the finest blocks in point spacings.
    capture_range : float
        Wanted width of the widest blocks [m].

    Returns
    -------
    list of float

    Examples
    --------
    >>> level_widths(1_000_000, 0.01, 12, 0.3)
    [0.25, 0.125]
    """
    small = np.sqrt(points * spacing**2 / WANTED_BLOCKS)
    wanted = max(min(spacings * spacing, small, capture_range), MIN_SPACINGS * spacing)
    # In coarse steps, so that the result does not depend on which points the spacing was estimated from.
    widths = [float(2 ** (np.round(STEPS * np.log2(wanted)) / STEPS))]
    while widths[0] * 1.5 < capture_range:
        widths.insert(0, min(widths[0] * 2, capture_range))
    return widths


def cut_both(reference: FloatArray, current: FloatArray, capture_range: float) -> tuple[list[Surface], list[Surface]]:
    """Cut both epochs into blocks, from wide to fine.

    Parameters
    ----------
    reference, current : ndarray of shape (n, 3)
        Local coordinates [m].
    capture_range : float
        Width of the widest blocks [m].

    Returns
    -------
    reference, current : list of Surface
        The same widths in both.

    Raises
    ------
    RegistrationError
        The points do not span a surface.
    """
    spacing = max(median_spacing(reference), median_spacing(current))
    if not spacing > 0:
        got = "a spacing of zero"
        raise RegistrationError(explain("registration", "points in different places", got, "export the scans again"))
    _check_spread(reference, spacing)
    _check_spread(current, spacing)
    points = min(len(reference), len(current))
    widths = level_widths(points, spacing, BLOCK_SPACINGS, capture_range)
    mine = pyramid(reference, widths, own_grid=False)
    if mine[-1].flat_share() < MIN_FLAT:
        area = mine[-1].flat() * mine[-1].width ** 2
        for spacings in CLUTTER_SPACINGS:
            narrower = level_widths(points, spacing, spacings, capture_range)
            other = pyramid(reference, narrower, own_grid=False)
            if other[-1].flat() * other[-1].width ** 2 > KEPT_AREA * area:
                widths, mine = narrower, other
    theirs = pyramid(current, widths, own_grid=True)
    # A small object has too few wide blocks to be fitted by.
    enough = [min(a.flat(), b.flat()) >= 2 * MIN_MATCHES for a, b in zip(mine[:-1], theirs[:-1], strict=True)]
    enough.append(True)
    return list(compress(mine, enough)), list(compress(theirs, enough))


def _check_spread(points: FloatArray, spacing: float) -> None:
    """Refuse points along one line: every block would pass for flat."""
    sample = points[:: max(1, len(points) // 5000)]
    size = np.linalg.svd(sample - sample.mean(axis=0), compute_uv=False) / np.sqrt(len(sample))
    if size[1] < MIN_SPACINGS * spacing / 2:
        raise RegistrationError(
            explain(
                "registration",
                "points that span a surface",
                f"points within {size[1]:.3g} m (rms) of one line, at a spacing of {spacing:.3g} m",
                "check that this is a scan",
            )
        )


def check_blocks(surface: Surface) -> None:
    """Refuse a surface of too few flat blocks."""
    if surface.flat() < MIN_MATCHES:
        raise RegistrationError(
            explain(
                "registration",
                f"at least {MIN_MATCHES} flat blocks {surface.width:.3g} m wide on stable ground",
                f"{surface.flat()}",
                "give a larger stable zone or a denser scan",
            )
        )
