# SPDX-License-Identifier: MIT
"""The series of a batch on its pages: in the overview, and in the report of each comparison that is part of it."""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from scanstrain.io.atomic import replacing
from scanstrain.outputs.report.images import Shown, show
from scanstrain.outputs.report.index import Finished, write_index
from scanstrain.outputs.report.page import fragment
from scanstrain.outputs.report.rates import Compared, rate_map
from scanstrain.outputs.report.series import Row, rate_table, series_pictures
from scanstrain.outputs.report.tables import Table

REPORT = "report.html"
_SECTION = re.compile(r"(<!-- series -->).*?(<!-- end of series -->)", re.DOTALL)
_LINK = re.compile(r"(<!-- link to series -->).*?(<!-- end of link -->)", re.DOTALL)
"""Places in a report that are empty until there is a series; text from outside is escaped and cannot look like them."""


@dataclass(frozen=True, slots=True)
class SeriesPart:
    """What a page shows of the series: figures, and the rates as a table."""

    figures: tuple[Shown, ...]
    table: Table | None


def show_series(
    outcomes: Sequence[Finished],
    folder: Path,
    rows: Sequence[Row],
    *,
    first: tuple[str, dt.date],
    later: Sequence[Compared],
    structure: str,
) -> SeriesPart:
    """Put the series into the overview of a batch and into the reports of its comparisons.

    Parameters
    ----------
    outcomes : sequence of Finished
        All comparisons of the batch.
    folder : Path
        Output folder of the batch.
    rows : sequence of ChangeRow or RateRow
        Of the followed epochs.
    first : (str, date)
        Label and date of the first epoch.
    later : sequence of Compared
        The comparisons with it, in order of date.
    structure : {"tunnel", "wall", "free"}

    Returns
    -------
    SeriesPart

    Raises
    ------
    OutputError
        A page could not be written; it then stands as it did before.
    """
    pictures = [*series_pictures(rows, (first[0], first[1].isoformat()))]
    rate = rate_map(first, later, structure=structure)
    if rate is not None:
        pictures.append(("rate_disp_n", rate))
    part = SeriesPart(tuple(show(name, picture) for name, picture in pictures), rate_table(rows))
    write_index(outcomes, folder, series=part)
    for each in later:
        _put_in(each.folder / REPORT, part)
    return part


def _put_in(report: Path, part: SeriesPart) -> None:
    """Fill the place that a report keeps for the series; one without such a place, or none at all, is left alone."""
    if not report.is_file():
        return
    before = report.read_text(encoding="utf-8")
    section = fragment("series.html", series=part)
    text = _SECTION.sub(lambda found: f"{found[1]}\n{section}{found[2]}", before, count=1)
    text = _LINK.sub(lambda found: f'{found[1]}<a href="#series">Series</a>{found[2]}', text, count=1)
    if text != before:
        with replacing(report) as path:
            path.write_text(text, encoding="utf-8")
