# SPDX-License-Identifier: MIT
"""The table of series: one row for each change and one for each rate, readable by any spreadsheet.

The first row holds names, the second one units; in pandas: `read_csv(path, skiprows=[1])`.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Mapping, Sequence
from pathlib import Path

from scanstrain.io.atomic import replacing
from scanstrain.series.rows import ChangeRow, RateRow

UNIT = "as in column unit"

COLUMNS: Mapping[str, tuple[str, str]] = {
    "row": ("", "change, or rate"),
    "place": ("", "zone, section or gauge"),
    "quantity": ("", "what is followed there"),
    "unit": ("", "unit of value, sd, low and high in this row; a is a year of 365.25 days"),
    "against": ("", "epoch that a change is counted from: first or previous"),
    "epoch": ("", "label of the epoch of a change"),
    "date": ("", "its date"),
    "value": (UNIT, "the change; in a rate row the mean rate from the first to the last epoch"),
    "sd": (UNIT, "its standard error"),
    "low": (UNIT, "lower end of its 95 % interval"),
    "high": (UNIT, "upper end of its 95 % interval"),
    "grade": ("", "how a change from the first epoch stands to the user's own limits"),
    "model": ("", "terms of the model that a rate belongs to"),
    "epochs": ("1", "epochs that a rate rests on"),
    "first_significant": ("", "date of the first epoch from which on every change is beyond its 95 % limit"),
    "last_rate": (UNIT, "rate at the last epoch"),
    "last_rate_sd": (UNIT, "its standard error"),
    "acceleration": (f"{UNIT}, per a", "acceleration, where its test asks for one"),
    "acceleration_sd": (f"{UNIT}, per a", "its standard error"),
    "acceleration_p": ("1", "p-value of that test"),
    "misfit_p": ("1", "probability of residuals this large if model and standard errors are right"),
    "widened": ("", "yes: standard errors were widened because they do not explain the residuals"),
    "median_slope": (UNIT, "median of the slopes between all pairs of epochs"),
    "trend_p": ("1", "p-value of a monotonic trend, from ranks"),
}
"""Unit and meaning of every column."""

ON_RATE_ROWS = ("last_rate", "last_rate_sd", "acceleration", "acceleration_sd", "acceleration_p", "misfit_p",
                "median_slope", "trend_p")  # fmt: skip


def write_series_table(rows: Sequence[ChangeRow | RateRow], folder: Path) -> Path:
    """Write `series.csv`; a cell is empty where there is no value.

    Parameters
    ----------
    rows : sequence of ChangeRow or RateRow
        In the order in which they shall stand.
    folder : Path
        Where it goes; an older table there is replaced.

    Returns
    -------
    Path

    Raises
    ------
    OutputError
        The file cannot be written; what stood there before stands there still.
    """
    target = folder / "series.csv"
    with replacing(target) as part, part.open("w", encoding="utf-8", newline="") as stream:
        writer = csv.DictWriter(stream, list(COLUMNS), restval="", lineterminator="\n")
        writer.writeheader()
        writer.writerow({name: unit for name, (unit, _) in COLUMNS.items()})
        writer.writerows(_change(row) if isinstance(row, ChangeRow) else _rate(row) for row in rows)
    return target


def _change(row: ChangeRow) -> dict[str, str]:
    numbers = {name: _number(getattr(row, name)) for name in ("value", "sd", "low", "high")}
    words = {name: getattr(row, name) for name in ("place", "quantity", "unit", "against", "epoch", "grade")}
    return {"row": "change", **words, "date": row.date.isoformat(), **numbers}


def _rate(row: RateRow) -> dict[str, str]:
    fit = row.fit
    ends = {"value": fit.rate, "sd": fit.rate_sd, "low": fit.rate_low, "high": fit.rate_high}
    numbers = {name: _number(value) for name, value in ends.items()}
    return {
        "row": "rate",
        "place": row.place,
        "quantity": row.quantity,
        "unit": f"{row.unit} per a",
        **numbers,
        "model": fit.model,
        "epochs": str(fit.epochs),
        "first_significant": "" if fit.first_significant is None else fit.first_significant.isoformat(),
        "widened": "yes" if fit.widened else "no",
        **{name: _number(getattr(fit, name)) for name in ON_RATE_ROWS},
    }


def _number(value: float) -> str:
    return f"{value:.7g}" if math.isfinite(value) else ""
