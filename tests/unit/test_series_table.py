# SPDX-License-Identifier: MIT
"""From followed quantities to rows, and to `series.csv`."""

from __future__ import annotations

import csv
import dataclasses
import datetime as dt

import numpy as np
import pytest

from scanstrain.errors import OptionError, OutputError
from scanstrain.outputs.series_table import COLUMNS, write_series_table
from scanstrain.series import ChangeRow, RateRow, Track, follow, rows_of

DATES = tuple(dt.date(2031, 1, 1) + dt.timedelta(days=1461 * n) for n in range(5))
TRACK = Track(
    "crown, east", "disp_n", "m", ("a", "b", "c", "d", "e"), DATES,
    np.array([0.004, 0.008, np.nan, 0.016]), np.array([0.001, 0.001, np.nan, 0.001]),
)  # fmt: skip


def test_a_followed_quantity_has_a_row_for_each_change_and_one_for_its_rate():
    rows = rows_of(follow(TRACK), grades=("below", "possible", "not observable", "exceeded"))
    assert [type(row) for row in rows] == [ChangeRow] * 8 + [RateRow]
    assert [(row.epoch, row.against) for row in rows[:8]] == [(e, w) for w in ("first", "previous") for e in "bcde"]
    assert [row.grade for row in rows[:5]] == ["below", "possible", "not observable", "exceeded", ""]
    assert rows[1].value == pytest.approx(0.008)
    assert rows[1].high == pytest.approx(0.008 + 1.959964 * 0.001)
    assert rows[5].value == pytest.approx(0.004)
    # half the variance of each change is the baseline's; the other two halves meet here
    assert rows[5].sd == pytest.approx(0.001)
    assert np.isnan([rows[6].value, rows[7].value]).all()
    assert rows[8].fit.rate == pytest.approx(0.001)


def test_a_quantity_that_is_seen_nowhere_still_has_its_rows():
    unseen = dataclasses.replace(TRACK, values=np.full(4, np.nan))
    rows = rows_of(follow(unseen))
    assert rows[-1].fit.model == "not observable"


def test_a_change_without_a_standard_error_is_refused_by_place_and_quantity():
    with pytest.raises(OptionError, match="disp_n at 'crown, east': required a standard error above 0"):
        follow(dataclasses.replace(TRACK, sd=np.zeros(4)))


def test_the_table_has_names_and_units_and_empty_cells_for_what_is_not_there(tmp_path):
    path = write_series_table(rows_of(follow(TRACK), grades=("", "", "", "exceeded")), tmp_path)
    assert [entry.name for entry in tmp_path.iterdir()] == ["series.csv"]
    with path.open(encoding="utf-8", newline="") as stream:
        units, *rows = csv.DictReader(stream)
    assert list(units) == list(COLUMNS)
    assert (units["place"], units["value"], units["trend_p"]) == ("", "as in column unit", "1")
    assert [row["row"] for row in rows] == ["change"] * 8 + ["rate"]
    assert rows[0] | {"low": "", "high": ""} == dict.fromkeys(COLUMNS, "") | {
        "row": "change", "place": "crown, east", "quantity": "disp_n", "unit": "m", "against": "first", "epoch": "b",
        "date": DATES[1].isoformat(), "value": "0.004", "sd": "0.001",
    }  # fmt: skip
    assert (rows[2]["epoch"], rows[2]["value"], rows[2]["sd"]) == ("d", "", "")
    assert rows[3]["grade"] == "exceeded"
    rate = rows[8]
    assert (rate["unit"], rate["value"], rate["model"], rate["epochs"]) == ("m per a", "0.001", "rate", "4")
    assert (rate["first_significant"], rate["widened"], rate["acceleration"]) == (DATES[1].isoformat(), "no", "")
    assert float(rate["low"]) < 0.001 < float(rate["high"])


def test_a_table_that_cannot_be_written_is_one_sentence(tmp_path):
    with pytest.raises(OutputError, match=r"create the folder first\.$"):
        write_series_table([], tmp_path / "nowhere")
