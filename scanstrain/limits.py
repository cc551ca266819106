# SPDX-License-Identifier: MIT
"""How values stand to limits that the user set, by their 95 % intervals. No limit comes with the program."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.float64]
Direction = Literal["above", "below", "beyond"]

NORMAL_95 = 1.959963984540054
"""Half-width of a 95 % interval in standard errors [1]."""
BELOW, POSSIBLE, EXCEEDED, UNSEEN = "below", "possible", "exceeded", "not observable"


def grade(
    value: ArrayLike, sd: ArrayLike, limit: float, *, direction: Direction, reach: float = NORMAL_95
) -> NDArray[np.str_]:
    """Grade values against a limit.

    "exceeded" where the whole interval `value +- reach sd` lies past the limit, "below" where none of it does (the
    limit is not reached), "possible" where the interval straddles or touches it, "not observable" where value or
    standard error is missing.

    Parameters
    ----------
    value, sd : array of shape (...)
        In one unit, that of the limit.
    limit : float
        Above 0 for "beyond".
    direction : {"above", "below", "beyond"}
        Which side is past the limit: larger values, smaller values, or larger absolute values.
    reach : float
        Half-width of the interval in standard errors [1].

    Returns
    -------
    ndarray of shape (...), str

    Examples
    --------
    >>> grade([1.0, 2.5, 4.0, float("nan")], 0.5, 2.0, direction="above").tolist()
    ['below', 'possible', 'exceeded', 'not observable']
    """
    value, sd = np.broadcast_arrays(np.asarray(value, float), np.asarray(sd, float))
    low, high = value - reach * sd, value + reach * sd
    if direction == "above":
        past, short = low > limit, high < limit
    elif direction == "below":
        past, short = high < limit, low > limit
    else:
        past, short = (low > limit) | (high < -limit), (low > -limit) & (high < limit)
    seen = np.isfinite(value) & np.isfinite(sd)
    return np.select([~seen, past, short], [UNSEEN, EXCEEDED, BELOW], POSSIBLE)


@dataclass(frozen=True, slots=True)
class ZoneGrade:
    """How a zone stands to one limit.

    Parameters
    ----------
    grade : str
        Of the zone: of its gauge that goes furthest, by intervals that hold for all of its gauges together.
    areas : dict of str to float
        Area of the gauges of each grade, each gauge judged by itself [m^2].
    furthest : int or None
        Position of the gauge whose value goes furthest; None where none is observable.
    """

    grade: str
    areas: dict[str, float]
    furthest: int | None


def grade_zone(
    values: FloatArray,
    sd: FloatArray,
    areas: FloatArray,
    limit: float,
    *,
    direction: Direction,
    independent: int | None = None,
) -> ZoneGrade:
    """Grade the gauges of a zone against a limit.

    Of many gauges that lie at a limit or just short of it, some seem past it by noise alone. So the grade of the zone
    rests on wider intervals, which hold for all gauges at once in 95 % of cases (Sidak 1967): a single gauge among
    thousands must be clearer to make the zone "exceeded", and the zone is "below" only if all of it is.

    Parameters
    ----------
    values, sd : ndarray of shape (g,)
        Of the gauges in the zone; NaN where not observable.
    areas : ndarray of shape (g,)
        Surface that each gauge stands for [m^2].
    limit : float
    direction : {"above", "below", "beyond"}
    independent : int, optional
        Gauges that share no points with one another; all observable ones if it is not known, which is cautious.

    Returns
    -------
    ZoneGrade
    """
    from scipy.special import ndtri

    single = grade(values, sd, limit, direction=direction)
    sums = {word: float(areas[single == word].sum()) for word in (EXCEEDED, POSSIBLE, BELOW, UNSEEN)}
    seen = np.flatnonzero(single != UNSEEN)
    if not seen.size:
        return ZoneGrade(UNSEEN, sums, None)
    count = min(independent or seen.size, seen.size)
    reach = float(ndtri(0.5 + 0.5 * 0.95 ** (1.0 / count)))
    together = grade(values[seen], sd[seen], limit, direction=direction, reach=reach)
    worst = next(word for word in (EXCEEDED, POSSIBLE, BELOW) if (together == word).any())
    distance = {"above": values, "below": -values, "beyond": np.abs(values)}[direction]
    return ZoneGrade(worst, sums, int(seen[np.argmax(distance[seen])]))


@dataclass(frozen=True, slots=True)
class WorstLevel:
    """The most severe level that is exceeded, and the most severe one that may be; None where there is none."""

    exceeded: str | None
    possible: str | None


def worst_level(grades: Mapping[str, str]) -> WorstLevel:
    """Find the worst of several levels.

    Parameters
    ----------
    grades : mapping of str to str
        Grade of each level by its name, the least severe level first.

    Returns
    -------
    WorstLevel

    Examples
    --------
    >>> worst_level({"look again": "exceeded", "act": "possible"})
    WorstLevel(exceeded='look again', possible='act')
    """
    last = {word: name for name, word in grades.items()}
    return WorstLevel(last.get(EXCEEDED), last.get(POSSIBLE))


def by_severity(limits: Mapping[str, float], *, direction: Direction) -> dict[str, float]:
    """Return levels with the least severe one first: the smallest limit, or the largest for "below"."""
    return dict(sorted(limits.items(), key=lambda item: item[1], reverse=direction == "below"))
