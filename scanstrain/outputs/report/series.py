# SPDX-License-Identifier: MIT
"""What zones and sections did through the epochs of a batch: curves with their intervals, and a table of rates."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import replace

import numpy as np

from scanstrain.attributes import BY_NAME, Attribute
from scanstrain.outputs.figures import Picture, draw_series
from scanstrain.outputs.report.tables import MISSING, Cell, Table, neat, table
from scanstrain.outputs.words import digits, number
from scanstrain.series.rows import ChangeRow, RateRow

LINES = 6
"""Places in one figure: more lines cross, and `series.csv` has all of them."""
FIRST = "first"
"""Changes that are counted from the first epoch."""

_RATIO = replace(BY_NAME["dilation"], person="%", factor=100.0)
_OF_UNIT = {"m": BY_NAME["disp_n"], "rad": BY_NAME["spin"], "1": _RATIO, "1/m": BY_NAME["curv_1"]}
"""How a stored unit is written for a person."""
_TITLES = {
    "mean_disp_n": "Mean normal displacement",
    "mean_strain_u": "Mean strain along u",
    "mean_strain_v": "Mean strain along v",
    "shift": "Shift to the free side",
    "lean": "Change of lean",
    "yaw": "Change of yaw",
    "horizontal_diameter_change": "Change of the horizontal diameter",
    "vertical_diameter_change": "Change of the vertical diameter",
    "ovality_change": "Change of the ovality",
    "crown_up": "Movement of the crown, upwards",
}

Row = ChangeRow | RateRow


def series_pictures(rows: Sequence[Row], first: tuple[str, str]) -> Iterator[tuple[str, Picture]]:
    """Draw each quantity through the epochs, one line a place, with 95 % bars.

    Parameters
    ----------
    rows : sequence of ChangeRow or RateRow
        Of a followed batch; only changes from the first epoch are drawn.
    first : (str, str)
        Label and ISO date of the epoch that all changes are counted from.

    Yields
    ------
    name : str
        series_<quantity>
    picture : Picture
    """
    changes = [row for row in rows if isinstance(row, ChangeRow) and row.against == FIRST]
    for quantity, unit in dict.fromkeys((row.quantity, row.unit) for row in changes):
        found = [row for row in changes if row.quantity == quantity]
        places = _clearest(found)
        dates = [first[1], *sorted({row.date.isoformat() for row in found})]
        values, sd = np.full((len(places), len(dates)), np.nan), np.full((len(places), len(dates)), np.nan)
        values[:, 0], sd[:, 0] = 0.0, 0.0
        for row in found:
            if row.place in places:
                at = places.index(row.place), dates.index(row.date.isoformat())
                values[at], sd[at] = row.value, row.sd
        hidden = len({row.place for row in found}) - len(places)
        facts = [f"Changes since {first[0]}."]
        if hidden:
            facts.append(f"The {len(places)} places with the clearest change; {hidden} more stand in series.csv.")
        title = title_of(quantity)
        yield (
            f"series_{quantity}",
            draw_series(dates, values, sd, places, attribute=_attribute(quantity, unit), title=title, facts=facts),
        )


def rate_table(rows: Sequence[Row]) -> Table | None:
    """Put the rates of all places into a table; None where there is none."""
    rates = [row for row in rows if isinstance(row, RateRow) and math.isfinite(row.fit.rate)]
    if not rates:
        return None
    made = [
        [row.place, title_of(row.quantity), _rate(row), Cell(str(row.fit.epochs), row.fit.epochs),
         MISSING if row.fit.first_significant is None else row.fit.first_significant.isoformat(),
         "widened" if row.fit.widened else ""]
        for row in rates
    ]  # fmt: skip
    heads = ("Place", "Quantity", "Rate per year, 95 %", "Epochs", "Significant from", "Interval")
    note = (
        "Mean rate from the first to the last epoch. With three epochs one residual judges the fit, so that intervals "
        "are wide. Widened: the standard errors do not explain the residuals."
    )
    return table("Rates", heads, made, note=note)


def title_of(quantity: str) -> str:
    """Name a followed quantity in words.

    >>> title_of("lean"), title_of("chord_10_2_change")
    ('Change of lean', 'Change of the chord 10 to 2')
    """
    if quantity.startswith("chord_"):
        return f"Change of the chord {quantity.removeprefix('chord_').removesuffix('_change').replace('_', ' to ')}"
    return _TITLES.get(quantity, quantity.replace("_", " "))


def _attribute(quantity: str, unit: str) -> Attribute:
    if "strain" in quantity:
        return BY_NAME["strain_u"]
    return _OF_UNIT.get(unit, replace(_RATIO, person=unit, factor=1.0))


def _clearest(rows: Sequence[ChangeRow]) -> list[str]:
    """Places whose change passes its error most, in the order in which they came."""
    strength: dict[str, float] = {}
    for row in rows:
        ratio = abs(row.value) / row.sd if row.sd > 0 and math.isfinite(row.value) else 0.0
        strength[row.place] = max(strength.get(row.place, 0.0), ratio)
    chosen = sorted(strength, key=lambda place: -strength[place])[:LINES]
    return [place for place in strength if place in chosen]


def _rate(row: RateRow) -> Cell:
    """Write a rate with its interval; it is wider than 1.96 standard errors where epochs are few."""
    attribute = _attribute(row.quantity, row.unit)
    value, half = row.fit.rate * attribute.factor, (row.fit.rate_high - row.fit.rate_low) / 2 * attribute.factor
    if not math.isfinite(half):
        return Cell(MISSING)
    decimals = digits(half)
    text = f"{number(value, decimals, sign=True)} ± {number(half, decimals)} {attribute.person}"
    return Cell(neat(text), value)
