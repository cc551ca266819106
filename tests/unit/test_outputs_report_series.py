# SPDX-License-Identifier: MIT
"""Series, rates, joints and places on the pages: the right numbers, in the overview and in the reports."""

import csv
import datetime as dt
import json
import re
import runpy
from dataclasses import dataclass, field, replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.report import Compared, show_series, write_index, write_report
from scanstrain.outputs.report.joints import joint_tables
from scanstrain.outputs.report.rates import rate_map
from scanstrain.outputs.report.series import rate_table, series_pictures
from scanstrain.outputs.summary import summary
from scanstrain.outputs.table import write_gauge_table
from scanstrain.series import Track, follow, rows_of

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))
DAYS = (dt.date(2031, 1, 1), dt.date(2031, 7, 2), dt.date(2032, 1, 1))
HOSTILE = "<script>alert('1')</script> \"pier\" é"


@dataclass
class Outcome:
    name: str
    folder: Path
    summary: dict[str, Any] | None = None
    error: str = ""
    place: str = field(default="")


class Words(HTMLParser):
    def __init__(self, text):
        super().__init__()
        self.found = []
        self.feed(text)

    def handle_data(self, data):
        self.found.append(data)


def words(cells):
    return [cell.text.replace("\u00a0", " ").replace("\u202f", " ") for cell in cells]


def rows(**tracks):
    """Rows of a place that moves by these changes [m], each with a standard error of 0.1 mm."""
    made = []
    for quantity, changes in tracks.items():
        for number, values in enumerate(changes):
            track = Track(f"{HOSTILE} {number}", quantity, "m", ("a", "b", "c"), DAYS, np.array(values),
                          np.full(2, 1e-4))  # fmt: skip
            made += rows_of(follow(track))
    return made


def test_every_quantity_is_drawn_from_the_first_epoch_with_its_bars():
    made = dict(series_pictures(rows(shift=[(1e-3, 2e-3)], chord_10_2_change=[(-1e-3, -2e-3)]), ("a", "2031-01-01")))
    assert list(made) == ["series_shift", "series_chord_10_2_change"]
    assert made["series_chord_10_2_change"].title == "Change of the chord 10 to 2"
    (axes,) = made["series_shift"].figure.axes
    lines = [line for line in axes.lines if len(line.get_xdata()) == 3]
    np.testing.assert_allclose(lines[0].get_ydata(), [0.0, 1.0, 2.0])
    # 1.96 standard errors of 0.1 mm either way, and none at the epoch that all is counted from
    segments = axes.collections[0].get_segments()
    np.testing.assert_allclose([np.ptp(each[:, 1]) for each in segments], [0.0, 0.392, 0.392], atol=1e-9)


def test_of_many_places_the_clearest_are_drawn_and_the_rest_is_named():
    many = [(1e-3 * k, 2e-3 * k) for k in range(9)]
    ((_, picture),) = series_pictures(rows(shift=many), ("a", "2031-01-01"))
    curves = [line for line in picture.figure.axes[0].lines if line.get_linestyle() == "-"]
    lines = [line for line in curves if len(line.get_xdata()) == 3]
    assert sorted(line.get_ydata()[-1] for line in lines) == pytest.approx([6, 8, 10, 12, 14, 16])
    assert "3 more stand in series.csv" in " ".join(text.get_text() for text in picture.figure.texts).replace(
        "\u00a0", " "
    )


def test_rates_are_given_with_the_interval_of_the_fit():
    # on the line through both changes the rate is 2 mm in a year of 365.25 days; 2031 has 365
    made = rate_table(rows(shift=[(1e-3 * 182 / 182.5, 2e-3)]))
    (cells,) = made.rows
    rate, half = (float(part) for part in words(cells)[2].removesuffix(" mm").split(" ± "))
    assert rate == pytest.approx(2.0 * 365.25 / 365, abs=0.01)
    # both changes share the error of the first epoch; the rate cannot be surer than the last change alone by far
    assert 0.1 < half < 0.4
    assert rate_table([]) is None


@pytest.fixture
def compared(tmp_path):
    """Two comparisons of one wall whose normal displacement doubles in the second half year."""
    made = MADE["make_result"]()
    found = []
    for label, day, factor in (("b", DAYS[1], 1.0), ("c", DAYS[2], 2.0)):
        folder = tmp_path / f"a_to_{label}"
        folder.mkdir()
        strain = replace(made.strain, values={**made.strain.values, "disp_n": made.strain.values["disp_n"] * factor})
        write_gauge_table(replace(made, strain=strain), folder, OutputOptions())
        found.append(Compared(label, day, folder, json.loads(json.dumps(summary(made)))))
    return found


def test_the_map_of_rates_has_the_rate_of_every_gauge(compared):
    picture = rate_map(("a", DAYS[0]), compared, structure="wall")
    # the strongest of the made gauges moved by 12.4 mm in the year
    assert re.search(r"largest \+12\.4\d* ± [\d.]+ mm per year", picture.alt), picture.alt
    assert "of 11 gauges" in picture.alt
    assert "1.5 m by" in picture.alt


def test_no_map_of_rates_from_gauges_that_are_not_the_same(compared):
    path = compared[1].folder / "gauges.csv"
    table = list(csv.reader(path.open(encoding="utf-8")))
    table[3][1] = str(float(table[3][1]) + 0.01)
    with path.open("w", encoding="utf-8", newline="") as stream:
        csv.writer(stream).writerows(table)
    assert rate_map(("a", DAYS[0]), compared, structure="wall") is None
    path.unlink()
    assert rate_map(("a", DAYS[0]), compared, structure="wall") is None


def test_the_series_stand_in_the_overview_and_in_the_reports_once(compared, tmp_path):
    write_report(MADE["make_result"](), compared[0].folder, OutputOptions())
    before = (compared[0].folder / "report.html").read_text(encoding="utf-8")
    assert 'id="series"' not in before
    outcomes = [Outcome(each.folder.name, each.folder, dict(each.summary)) for each in compared]
    found = rows(shift=[(1e-3, 2e-3)])
    for _ in range(2):
        show_series(outcomes, tmp_path, found, first=("a", DAYS[0]), later=compared, structure="wall")
    for page in (tmp_path / "index.html", compared[0].folder / "report.html"):
        text = page.read_text(encoding="utf-8")
        assert text.count('id="series"') == 1
        assert text.count('id="rate_disp_n"') == 1
        assert HOSTILE not in text
        assert HOSTILE in " ".join(Words(text).found).replace("  ", " ")
    assert text.count('href="#series"') == 1
    # all else in the report stays, and a folder without a report is left alone
    assert len(text) > len(before)
    assert text.partition("<!-- link to series -->")[0] == before.partition("<!-- link to series -->")[0]
    assert not (compared[1].folder / "report.html").exists()


def test_places_stand_beside_epochs_with_value_and_link(tmp_path):
    done = json.loads(json.dumps(summary(MADE["make_result"]())))
    outcomes = []
    for place in ("heading", HOSTILE):
        for label, day in (("b", "2031-07-02"), ("c", "2032-01-01")):
            one = json.loads(json.dumps(done))
            one["inputs"]["current"]["date"] = day
            failed = place == HOSTILE and label == "c"
            outcomes.append(Outcome(f"a_to_{label}", tmp_path / place[:1] / f"a_to_{label}", None if failed else one,
                                    "none" if failed else "", place))  # fmt: skip
    text = write_index(outcomes, tmp_path).read_text(encoding="utf-8")
    first = re.search(r"<table>.*?</table>", text, re.DOTALL)[0]
    cells = [[" ".join(Words(cell).found).replace("\u00a0", " ") for cell in re.findall(r"<t[hd].*?</t[hd]>", row)]
             for row in re.findall(r"<tr>.*?</tr>", first, re.DOTALL)]  # fmt: skip
    # the comparison that failed has no date: its column is named by the epoch
    assert cells == [
        ["Place", "2031-07-02", "2032-01-01", "c"],
        ["heading", "+6.20 ± 0.29 mm", "+6.20 ± 0.29 mm", "–"],
        [HOSTILE, "+6.20 ± 0.29 mm", "–", "failed"],
    ]
    assert re.findall(r'<a href="([^"]+)">\+6', first)[0] == "h/a_to_b/report.html"


def test_joints_are_tables_with_intervals_and_a_reason_where_nothing_is_known():
    jump = {"opening": 2e-3, "opening_sd": 1e-4, "slip": None, "slip_sd": None, "step": -1e-3, "step_sd": 5e-5,
            "hinge": 1e-3, "hinge_sd": 1e-4, "significance": 1e-9, "along": 0.5, "reason": ""}  # fmt: skip
    bare = dict.fromkeys(jump, None) | {"along": 1.0, "reason": "no texture"}
    whole, places = joint_tables(
        {"joints": [{"joint": "ring 3", "place": 1, **jump}, {"joint": "ring 3", "place": 2, **bare},
                    {"joint": "ring 3", "place": "whole", **jump}]}
    )  # fmt: skip
    opened = ["+2.00 ± 0.20 mm", "–", "−1.000 ± 0.098 mm", "+1.00 ± 0.20 mrad", "under 0.0001"]
    assert [words(row) for row in whole.rows] == [["ring 3", *opened]]
    assert words(places.rows[0]) == ["ring 3, 1", "0.50 m", *opened, ""]
    assert words(places.rows[1]) == ["ring 3, 2", "1.00 m", "–", "–", "–", "–", "–", "no texture"]
    assert joint_tables({"joints": None}) == []
