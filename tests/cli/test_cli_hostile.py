# SPDX-License-Identifier: MIT
"""Names that would do harm if any output took them for markup, a path or a command: through the whole program."""

import csv
import json
import os
import runpy
from html.parser import HTMLParser
from pathlib import Path

import laspy
import numpy as np
import pytest
from plyfile import PlyData

from scanstrain.synthetic import Dome, Scene, Wall, sample_epoch

CHROMIUM = runpy.run_path(str(Path(__file__).parents[1] / "chromium.py"))
# no slash, which no file name holds; with it all of this stands in the labels of other tests
FIRST = "a <script>alert('1')<b> \"q\" $\\alpha$ {{ 7 * 7 }} %s é Ω.laz"
SECOND = "-" + "ü" * 80 + "x" * 35 + ".laz"
FAR = np.array([4_123_456.0, -7_654_321.0, -399.0])
"""Coordinates that take seven digits, some of them negative [m]."""


class Page(HTMLParser):
    def __init__(self, text):
        super().__init__()
        self.tags, self.words = [], []
        self.feed(text)

    def handle_starttag(self, tag, attributes):
        self.tags.append((tag, dict(attributes)))

    def handle_data(self, data):
        self.words.append(data)


@pytest.fixture(scope="module")
def hostile(tmp_path_factory):
    """Two small scans of a wall with a dome, under names that hold everything but a slash."""
    folder = tmp_path_factory.mktemp("täst & <b>")
    scene = Scene(Wall(3.0, 2.5), Dome(0.006, (1.5, 1.2), 1.0))
    for number, name in enumerate((FIRST, SECOND)):
        epoch = sample_epoch(scene, deformed=bool(number), spacing=0.04, noise=3e-4, seed=number)
        header = laspy.LasHeader(point_format=6, version="1.4")
        header.scales, header.offsets = [0.0001] * 3, FAR
        las = laspy.LasData(header)
        las.xyz = epoch.points + epoch.origin + FAR
        las.intensity = np.zeros(len(epoch), np.uint16)
        las.write(str(folder / name))
    return folder


@pytest.fixture(scope="module")
def outcome(hostile):
    from scanstrain.cli import main

    out = hostile / "out 'é' <i>"
    code = main(["compare", str(hostile / FIRST), str(hostile / SECOND), "--out", str(out), "--gauge-length", "0.8",
                 "--structure", "wall", "--quiet"])  # fmt: skip
    return code, out


def test_the_comparison_runs_and_names_its_inputs_as_they_are(outcome):
    code, out = outcome
    assert code == 0
    inputs = json.loads((out / "summary.json").read_text(encoding="utf-8"))["inputs"]
    assert [Path(inputs[each]["file"]).name for each in ("reference", "current")] == [FIRST, SECOND]


def test_the_report_shows_the_names_as_text(outcome):
    _, out = outcome
    text = (out / "report.html").read_text(encoding="utf-8")
    page = Page(text)
    assert "<script>alert" not in text
    assert FIRST.removesuffix(".laz") in " ".join(page.words)
    assert "{{ 7 * 7 }}" in " ".join(page.words)
    handlers = [name for _, attributes in page.tags for name in attributes if name.startswith("on")]
    assert handlers == []
    assert {attributes.get("href", "#")[0] for _, attributes in page.tags} == {"#"}


def test_far_and_negative_coordinates_come_out_as_they_went_in(outcome, hostile):
    _, out = outcome
    scan = laspy.read(str(hostile / FIRST))
    vertex = PlyData.read(out / "strain_disp_n.ply")["vertex"]
    places = np.column_stack([vertex[axis] for axis in "xyz"])
    np.testing.assert_allclose(places, scan.xyz, rtol=0, atol=2e-9 * 7e6 / 7)
    with (out / "gauges.csv").open(encoding="utf-8", newline="") as stream:
        rows = list(csv.DictReader(stream))[1:]
    assert min(float(row["y"]) for row in rows) > FAR[1] - 1
    assert max(float(row["y"]) for row in rows) < FAR[1] + 1


@pytest.mark.skipif(
    CHROMIUM["CHROMIUM"] is None and not os.environ.get("CI"), reason="needs the Debian package chromium"
)
def test_a_browser_runs_nothing_of_the_names(outcome, tmp_path):
    _, out = outcome
    with CHROMIUM["Browser"](tmp_path) as browser:
        browser.open(out / "report.html")
        browser.wait("document.querySelector('.cv-drawn') !== null")
        assert (browser.console, browser.errors) == ([], [])
        assert [url for url in browser.requests if not url.startswith(("file:", "data:"))] == []
        assert browser.run("document.title").startswith("a <script>alert('1')<b>")
        assert browser.run("document.documentElement.scrollWidth") <= 1200
