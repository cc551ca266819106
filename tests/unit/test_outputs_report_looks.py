# SPDX-License-Identifier: MIT
"""What a page looks like: printed on A4 with no table cut, readable in both schemes, words on every picture."""

import base64
import json
import os
import re
import runpy
import shutil
import subprocess
from pathlib import Path

import pytest

from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.report import write_report
from scanstrain.outputs.report.page import render
from scanstrain.outputs.report.tables import Cell, table

TESTS = Path(__file__).parents[1]
make_result = runpy.run_path(str(TESTS / "outputs_result.py"))["make_result"]
chromium = runpy.run_path(str(TESTS / "chromium.py"))
Browser = chromium["Browser"]
CI = os.environ.get("CI")
pytestmark = pytest.mark.skipif(chromium["CHROMIUM"] is None and not CI, reason="needs the Debian package chromium")
needs_poppler = pytest.mark.skipif(shutil.which("pdftotext") is None and not CI, reason="needs poppler-utils")

MM = 72 / 25.4
"""Points of a PDF."""
SIDE = 15 * MM
ROUNDING = 1.5
"""The browser lays out in whole dots [points of a PDF]."""
ROWS, COLUMNS = 90, 7
ENOUGH = 4.5
"""Least contrast of text (WCAG 2.1, success criterion 1.4.3, from memory)."""


@pytest.fixture(scope="module")
def report(tmp_path_factory):
    return write_report(make_result(), tmp_path_factory.mktemp("report"), OutputOptions())


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    with Browser(tmp_path_factory.mktemp("profile"), size=(1280, 800)) as opened:
        yield opened


def printed(browser, page, target):
    """The page as the browser prints it, and its words: (page, left, right, word)."""
    browser.open(page)
    data = browser.call("Page.printToPDF", preferCSSPageSize=True)["data"]
    target.write_bytes(base64.b64decode(data))
    boxes = subprocess.run(["pdftotext", "-bbox", target, "-"], capture_output=True, text=True, check=True).stdout
    sheets = boxes.split("<page ")[1:]
    words = [
        (number, float(left), float(right), word)
        for number, sheet in enumerate(sheets)
        for left, right, word in re.findall(r'<word xMin="([\d.]+)"[^>]*xMax="([\d.]+)"[^>]*>([^<]*)</word>', sheet)
    ]
    sizes = {tuple(map(float, re.search(r'width="([\d.]+)" height="([\d.]+)"', sheet).groups())) for sheet in sheets}
    return words, sizes, len(sheets)


@needs_poppler
def test_a_long_table_prints_whole_with_its_head_on_every_page(browser, tmp_path):
    """Seven columns and ninety rows of six lines, so that two lines at an edge do not keep a row together."""
    heads = [f"head{k}" for k in range(COLUMNS)]
    cells = [[Cell(f"r{row}c{k}\nand\nso\nit\ngoes\nx{row}c{k}") for k in range(COLUMNS)] for row in range(ROWS)]
    page = tmp_path / "long.html"
    page.write_text(
        render("index.html", overview=table("Long", heads, cells), matrix=None, count=1, failed=0, series=None),
        encoding="utf-8",
    )
    words, sizes, _ = printed(browser, page, tmp_path / "long.pdf")
    ((width, height),) = sizes
    assert (width, height) == (pytest.approx(210 * MM, abs=1), pytest.approx(297 * MM, abs=1))
    found = {word: (number, left, right) for number, left, right, word in words}
    for row in range(ROWS):
        mine = [found[f"{letter}{row}c{k}"] for letter in "rx" for k in range(COLUMNS)]
        assert len({number for number, *_ in mine}) == 1, f"row {row} is cut"
        assert min(left for _, left, _ in mine) >= SIDE - ROUNDING
        assert max(right for *_, right in mine) <= width - SIDE + ROUNDING
    filled = {found[f"r{row}c0"][0] for row in range(ROWS)}
    assert len(filled) > 2
    assert [number for number, *_, word in words if word == heads[-1]] == sorted(filled)


@needs_poppler
def test_the_report_prints_inside_its_margins_with_picture_and_without_controls(browser, report, tmp_path):
    words, sizes, count = printed(browser, report, tmp_path / "report.pdf")
    ((width, _),) = sizes
    assert 3 < count < 30
    assert min(left for _, left, *_ in words) >= SIDE - ROUNDING
    assert max(right for *_, right, _ in words) <= width - SIDE + ROUNDING
    text = " ".join(word for *_, word in words)
    assert "Copy as text" not in text
    assert "Mouse, touch and keys" not in text
    # the answer and the regions stand on the first sheet of paper as well
    first = " ".join(word for number, *_, word in words if number == 0)
    assert "Changed: one region" in first
    assert "Regions that changed" in first


CONTRAST = """(() => {
    const parse = text => text.match(/[\\d.]+/g).map(Number);
    const light = ([r, g, b]) => [r, g, b].map(c => c / 255)
        .map(c => c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4)
        .reduce((sum, c, k) => sum + c * [0.2126, 0.7152, 0.0722][k], 0);
    const ground = element => {
        for (let each = element; each; each = each.parentElement) {
            const colour = parse(getComputedStyle(each).backgroundColor);
            if (colour.length < 4 || colour[3] === 1) return colour;
        }
        return [255, 255, 255];
    };
    const found = [];
    const walker = document.createTreeWalker(document.body, NodeFilter.SHOW_TEXT);
    while (walker.nextNode()) {
        const element = walker.currentNode.parentElement;
        if (!walker.currentNode.textContent.trim() || !element.getClientRects().length) continue;
        if (["SCRIPT", "STYLE", "OPTION"].includes(element.tagName)) continue;
        const [a, b] = [parse(getComputedStyle(element).color), ground(element)].map(light);
        const ratio = (Math.max(a, b) + 0.05) / (Math.min(a, b) + 0.05);
        found.push([Math.round(100 * ratio) / 100, walker.currentNode.textContent.trim().slice(0, 40)]);
    }
    return JSON.stringify(found);
})()"""
"""Contrast of every text with what stands behind it (WCAG 2.1, relative luminance, from memory)."""


@pytest.mark.parametrize("scheme", ["light", "dark"])
def test_every_text_stands_out_from_its_ground(browser, report, scheme):
    browser.call("Emulation.setEmulatedMedia", features=[{"name": "prefers-color-scheme", "value": scheme}])
    browser.open(report)
    browser.wait("document.querySelector('.cv-drawn') !== null")
    found = json.loads(browser.run(CONTRAST))
    ground = browser.run("getComputedStyle(document.body).backgroundColor")
    browser.call("Emulation.setEmulatedMedia", features=[])
    assert ground == {"light": "rgb(255, 255, 255)", "dark": "rgb(22, 28, 34)"}[scheme]
    assert len(found) > 300
    assert [each for each in found if each[0] < ENOUGH] == []


BARE = """(() => {
    const named = each => each.ariaLabel || each.getAttribute("aria-labelledby");
    const lost = each => !document.getElementById(each.getAttribute("aria-labelledby"));
    return JSON.stringify({
        pictures: [...document.images].filter(each => each.alt.trim().length < 20).length,
        parts: [...document.querySelectorAll("section, article")].filter(each => !named(each)).length,
        labels: [...document.querySelectorAll("[aria-labelledby]")].filter(lost).length,
        canvases: [...document.querySelectorAll("canvas")].filter(e => !(e.ariaLabel || e.role)).length,
    });
})()"""
"""What a person who does not see the page would meet without a word."""


def test_every_picture_has_words_and_every_part_a_heading(browser, report):
    browser.open(report)
    browser.wait("document.querySelector('.cv-drawn') !== null")
    assert json.loads(browser.run(BARE)) == {"pictures": 0, "parts": 0, "labels": 0, "canvases": 0}


def test_the_page_is_drawn_and_small(browser, report):
    """A budget, not a stopwatch: what opens in three seconds was measured by hand, at these sizes."""
    assert report.stat().st_size < 8e6
    browser.open(report)
    browser.wait("document.querySelector('.cv-drawn') !== null")
    assert [url for url in browser.requests if not url.startswith(("file:", "data:"))] == []
    assert browser.errors == []
