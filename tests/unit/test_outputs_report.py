# SPDX-License-Identifier: MIT
"""The report of a comparison and the overview of a batch: what they say, and that they load and run nothing foreign."""

import json
import re
import runpy
import time
from dataclasses import dataclass, field, replace
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from jinja2 import UndefinedError

from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.report import write_index, write_report
from scanstrain.outputs.report.head import head_of
from scanstrain.outputs.report.page import render
from scanstrain.outputs.report.parts import trigger_table, zone_table
from scanstrain.outputs.report.places import places_of
from scanstrain.outputs.report.tables import neat
from scanstrain.outputs.report.tunnel import section_tables
from scanstrain.outputs.report.write import layout_of
from scanstrain.outputs.summary import summary

TESTS = Path(__file__).parents[1]
MADE = runpy.run_path(str(TESTS / "outputs_result.py"))
BROWSER = runpy.run_path(str(TESTS / "chromium.py"))
HOSTILE = "\"><script>alert('x')</script>&lt;{{ 7 * 7 }}\u202e Stützmauer " + "x" * 200
VOID = {"meta", "img", "br", "input", "link", "hr", "col", "area", "base", "embed", "source", "track", "wbr"}
MB = 1e6


class Page(HTMLParser):
    """Elements with their attributes, words, and whether every element is closed in its place."""

    def __init__(self, text):
        super().__init__()
        self.elements, self.words, self.open, self.wrong = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_endtag(self, tag):
        if not self.open or self.open.pop() != tag:
            self.wrong.append(tag)

    def handle_data(self, data):
        if not self.open or self.open[-1] not in ("script", "style"):
            self.words.append(data)

    @property
    def text(self):
        return plain(" ".join(self.words))

    def all(self, tag):
        return [attributes for name, attributes in self.elements if name == tag]


def plain(text):
    return re.sub(r"\s+", " ", neat(text)).strip()


def tables(text):
    return re.findall(r"<table>.*?</table>", text, re.DOTALL)


def quiet(result, changed=()):
    """The same result with changes at these gauges only."""
    discovery = np.isin(np.arange(len(result.strain)), changed).astype(np.uint8)
    strain = replace(result.strain, values={**result.strain.values, "discovery": discovery})
    return replace(result, strain=strain)


@pytest.fixture(scope="module")
def result():
    made = MADE["make_result"](path=f"/scans/{HOSTILE}.laz")
    return replace(made, reference=replace(made.reference, label=HOSTILE))


@pytest.fixture(scope="module")
def path(result, tmp_path_factory):
    return write_report(result, tmp_path_factory.mktemp("report"), OutputOptions())


@pytest.fixture(scope="module")
def text(path):
    return path.read_text(encoding="utf-8")


@pytest.fixture(scope="module")
def page(text):
    return Page(text)


def test_the_page_is_whole_html(path, text, page):
    assert path.name == "report.html"
    assert text.startswith("<!doctype html>")
    assert page.wrong == []
    assert page.open == []
    assert page.all("html") == [{"lang": "en"}]
    ids = [attributes["id"] for _, attributes in page.elements if "id" in attributes]
    assert len(ids) == len(set(ids))
    inner = [a["href"][1:] for a in page.all("a") if a["href"].startswith("#")]
    assert set(inner) <= set(ids)
    assert page.all("a")[0]["class"] == "skip"


def test_verdict_cautions_and_warnings_are_all_there(result, page):
    content = summary(result)
    for sentence in (*head_of(content, places_of(result, layout_of(result))).verdict, *content["cautions"]):
        assert plain(sentence) in page.text
    assert "Twice said." in page.text


def test_the_run_can_be_repeated_from_the_record(page):
    for text in ("ab" * 32, "cd" * 32, "gauge_length", "2031-03-01", "EPSG:25832", "scanstrain", "neighbourhood"):
        assert text in page.text


def test_the_first_screen_names_the_region_with_its_largest_change_both_ways(page):
    start = page.text.index("Answer")
    first = page.text[start : start + 600]
    assert "Changed: one region of 0.75 m²." in first
    # largest and smallest of MADE["DISP_N"], 1.96 times 0.15 mm
    assert "+6.20 ± 0.29 mm" in first
    assert "−4.00 ± 0.29 mm" in first


def test_no_change_is_said_as_nothing_above_the_limits_and_not_observable():
    made = quiet(MADE["make_result"]())
    head = head_of(summary(made), places_of(made, layout_of(made)))
    assert head.tone == "quiet"
    assert plain(head.answer) == "Nothing above 0.29 mm normal displacement, 0.24 mrad tilt and 98 µε in-plane strain."
    blind = {**made.strain.values, "strain_1": np.full(12, np.nan)}
    limits = {**made.strain.detection_limit, "strain": np.full(12, np.nan)}
    made = replace(made, strain=replace(made.strain, values=blind, detection_limit=limits))
    assert head_of(summary(made), places_of(made, layout_of(made))).answer.endswith("Not observable: in-plane strain.")


def test_single_gauges_are_no_change():
    made = quiet(MADE["make_result"](), changed=[0, 8])
    head = head_of(summary(made), places_of(made, layout_of(made)))
    assert head.tone == "quiet"
    assert "Only isolated gauges stand out: 2." in head.answer
    assert "nowhere three side by side" in head.verdict[0]
    assert "reaches" not in head.verdict[1]


def test_a_doubtful_datum_is_said_first(result):
    doubt = "stable ground is ambiguous: 55% of the matched surface shares one motion and 40% shares another"
    registration = replace(result.registration, warnings=(doubt,), converged=False)
    made = replace(result, registration=registration)
    said = head_of(summary(made), places_of(made, layout_of(made))).doubts
    assert said[0].startswith("The registration did not converge")
    assert said[1].startswith("Stable ground is ambiguous: 55%")


def test_the_page_may_load_nothing_and_names_no_address(text, page):
    policy = page.all("meta")[1]["content"]
    assert policy.startswith("default-src 'none';")
    assert "script-src 'sha256-" in policy
    for tag, attributes in page.elements:
        assert tag not in ("link", "iframe", "object", "embed", "base")
        assert not any(name.startswith("on") for name in attributes), tag
        for name in ("src", "srcset", "action", "poster", "background"):
            assert attributes.get(name, "data:").startswith("data:"), tag
        assert attributes.get("href", "#").startswith("#")
    style = re.findall(r"<style>(.*?)</style>", text, re.DOTALL)
    assert not any("url(" in each or "@import" in each for each in style)
    assert "http" not in page.text
    own = re.findall(r"<script>(.*?)</script>", text, re.DOTALL)[-1]
    assert "fetch" not in own
    assert "XMLHttp" not in own


def test_hostile_labels_are_shown_and_do_nothing(text, page):
    assert "alert('x')</script>" not in text
    assert "&gt;&lt;script&gt;alert(&#39;x&#39;)&lt;/script&gt;" in text
    assert "{{ 7 * 7 }}" in page.text
    assert len(page.all("script")) == 3  # data and script of the view, and our own
    assert HOSTILE in " ".join(page.words)


def test_tables_have_captions_and_heads_with_scope(text):
    found = tables(text)
    assert len(found) > 8
    for each in found:
        assert re.search(r"<caption>[^<]+</caption>", each)
        assert all('scope="col"' in head for head in re.findall(r"<th\b[^>]*>", each.split("</thead>")[0]))
        rows = re.findall(r"<tr>(<\w+[^>]*>)", each.split("</thead>")[1])
        assert rows
        assert all("scope=row" in row for row in rows)


def test_pictures_have_words_and_sizes(page):
    pictures = page.all("img")
    assert len(pictures) > 10
    assert all(len(picture["alt"]) > 20 for picture in pictures)
    assert all(picture["src"].startswith("data:image/png;base64,") for picture in pictures)


def test_the_page_is_small(path):
    assert path.stat().st_size < 3 * MB


def test_a_value_that_a_template_misses_is_an_error():
    with pytest.raises(UndefinedError):
        render("index.html")


def words(made):
    """Texts of a table's rows."""
    return [[plain(cell.text) for cell in row] for row in made.rows]


def test_limits_and_zones_are_tables_only_where_there_are_some():
    content = summary(MADE["make_result"]())
    assert trigger_table(content) is None
    assert zone_table(content) is None
    furthest = {"value": 6.2e-3, "sd": 1.5e-4, "at": [1.0, 2.0, 3.0]}
    row = {"name": "crown", "zone": None, "quantity": "disp_n", "unit": "m", "grade": "exceeded", "exceeded": "amber",
           "possible": None, "furthest": furthest}  # fmt: skip
    (found,) = words(trigger_table({"triggers": [row]}))
    assert found[:6] == ["crown", "whole object", "Normal displacement", "exceeded", "amber", "–"]
    assert "+6.20 ± 0.29 mm" in found[6]


def test_sections_show_changes_with_intervals_and_a_dash_where_arcs_do_not_support_them():
    row = {"chainage": 4.0, "coverage": 0.63, "horizontal_diameter_change": 8.75e-3,
           "horizontal_diameter_change_sd": 2.6e-4, "crown_up": None, "crown_up_sd": None, "ovality_change": -4.4e-3,
           "ovality_change_sd": 2.3e-4, "chord_10_2_change": 1e-3, "chord_10_2_change_sd": 1e-4}  # fmt: skip
    every, chords = section_tables({"sections": {"rows": [row]}})
    assert words(every) == [["4.00 m", "63 %", "+8.75 ± 0.51 mm", "−0.440 ± 0.045 %", "–"]]
    assert words(chords) == [["4.00 m", "63 %", "+1.00 ± 0.20 mm"]]
    assert section_tables({"sections": None}) == []


@dataclass
class Outcome:
    name: str
    folder: Path
    summary: dict[str, Any] | None = None
    error: str = ""
    details: str = field(default="", repr=False)


def strict(result):
    return json.loads(json.dumps(summary(result)))


@pytest.fixture
def batch(tmp_path):
    done = strict(MADE["make_result"]())
    still = strict(quiet(MADE["make_result"]()))
    earlier = tmp_path / "march_to_may"
    earlier.mkdir()
    (earlier / "summary.json").write_text(json.dumps(still))
    (earlier / "report.html").touch()
    (tmp_path / "no result").mkdir()
    (tmp_path / "no result" / "summary.json").write_text("[]")
    (tmp_path / "no result" / "report.html").touch()
    return [
        Outcome("march_to_june", tmp_path / "march_to_june", done),
        Outcome("march_to_july", tmp_path / "march_to_july", still),
        Outcome(HOSTILE, tmp_path / "third", None, "july.laz: required a scan; got <b>none</b>; give one."),
    ]


def test_the_overview_has_every_comparison_with_value_verdict_and_link(batch, tmp_path):
    text = write_index(batch, tmp_path).read_text(encoding="utf-8")
    page = Page(text)
    assert page.wrong == []
    rows = [plain(" ".join(Page(row).words)) for row in re.findall(r"<tr>.*?</tr>", text, re.DOTALL)[1:]]
    assert len(rows) == 4
    assert "march_to_june" in rows[0]
    assert "Changed: one region" in rows[0]
    assert "+6.20 ± 0.29 mm" in rows[0]
    assert "Nothing above 0.29 mm" in rows[1]
    assert rows[2].endswith("Failed. july.laz: required a scan; got <b>none</b>; give one. –")
    assert "march_to_may" in rows[3]
    links = [a["href"] for a in page.all("a")[1:]]
    assert links == ["march_to_june/report.html", "march_to_july/report.html", "march_to_may/report.html"]
    assert "alert('x')</script>" not in text


def test_the_overview_has_a_column_for_each_zone(batch, tmp_path):
    zone = {"quantities": {"disp_n": {"extreme": {"value": -3e-3, "sd": 1e-4, "low": -3.4e-3, "high": -2.6e-3}}}}
    calm = {"quantities": {"disp_n": {"extreme": {"value": 1e-4, "sd": 1e-4, "low": -2e-4, "high": 4e-4}}}}
    batch[0].summary["zones"] = {"whole object": {}, "pier": zone, "arch": calm, "roof": {"quantities": {}}}
    text = write_index(batch, tmp_path).read_text(encoding="utf-8")
    first = plain(" ".join(Page(re.findall(r"<tr>.*?</tr>", text, re.DOTALL)[1]).words))
    assert "Pier" in Page(text).text
    assert first.endswith("+6.20 ± 0.29 mm −3.00 ± 0.20 mm nothing above 0.40 mm –")


if BROWSER["CHROMIUM"]:

    @pytest.fixture(scope="module")
    def browser(path, tmp_path_factory):
        with BROWSER["Browser"](tmp_path_factory.mktemp("profile"), size=(1280, 800)) as opened:
            opened.open(path)
            yield opened

    def test_the_browser_finds_no_fault_and_asks_for_nothing(browser, path):
        asked = [url for url in browser.requests if not url.startswith("data:")]
        assert asked == [path.as_uri()]
        assert browser.errors == []
        assert [said for kind, said in browser.console if kind == "error"] == []

    def test_answer_map_and_regions_stand_on_the_first_screen(browser):
        for selector in (".short", ".brief table", ".main img"):
            left, top, width, height = browser.box(selector)
            assert top >= 0
            assert top + height <= 800, selector
            assert left + width <= 1280

    @pytest.mark.parametrize("width", [420, 1280])
    def test_nothing_sticks_out_sideways(browser, width):
        browser.resize(width, 800)
        assert browser.run("document.documentElement.scrollWidth") <= width
        browser.resize(1280, 800)

    def test_tables_sort_by_keyboard_both_ways_with_missing_numbers_last(browser):
        head = "[...document.querySelectorAll('table')].find(t => t.caption.textContent === 'All quantities')"
        column = f"[...{head}.tBodies[0].rows].map(r => r.cells[5].textContent)"
        browser.run(f"{head}.tHead.rows[0].cells[5].querySelector('button').focus()")
        orders = []
        for direction in ("ascending", "descending"):
            browser.key("Enter")
            assert browser.run(f"{head}.tHead.rows[0].cells[5].getAttribute('aria-sort')") == direction
            orders.append([each for each in browser.run(column) if each != "–"])
            assert browser.run(column)[len(orders[-1]) :] == ["–"] * (17 - len(orders[-1]))
        assert orders[0] == orders[1][::-1] or sorted(orders[0]) == sorted(orders[1])
        assert orders[0][0].endswith("mrad")  # 0.24, the smallest of the limits
        assert orders[1][0].endswith("µε")  # 98

    def test_a_table_is_copied_as_text_with_tabs_and_plain_minus_signs(browser):
        browser.run(
            "navigator.clipboard.writeText = text => { window.copied = text; return Promise.resolve(); };"
            "document.querySelector('.brief .copy').click()"
        )
        until = time.monotonic() + 20
        while not browser.run("window.copied || ''"):
            assert time.monotonic() < until
        lines = browser.run("window.copied").split("\n")
        assert lines[0].split("\t")[0] == "No."
        assert lines[1].split("\t")[3] == "+6.20 ± 0.29 mm -4.00 ± 0.29 mm"

    def test_everything_that_can_be_used_is_reached_by_the_tab_key_and_shows_it(browser, path):
        browser.open(path)
        browser.key("Tab")
        assert browser.run("document.activeElement.className") == "skip"
        assert browser.run("getComputedStyle(document.activeElement).outlineStyle") == "solid"
        wanted = "[...document.querySelectorAll('a[href], .sorter, .copy')].filter(e => e.tabIndex !== 0).length"
        assert browser.run(wanted) == 0
