# SPDX-License-Identifier: MIT
"""The view in a real browser: drawn, read by mouse and keys, silent, and replaced by its picture without WebGL."""

import base64
import io
import json
import os
import runpy
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.colour import NOT_SIGNIFICANT, choose_scale
from scanstrain.outputs.report3d import scene_data, scene_html
from scanstrain.outputs.words import interval

HERE = Path(__file__).parent
make_result = runpy.run_path(str(HERE.parent / "outputs_result.py"))["make_result"]
chromium = runpy.run_path(str(HERE.parent / "chromium.py"))
Browser = chromium["Browser"]

pytestmark = pytest.mark.skipif(
    chromium["CHROMIUM"] is None and not os.environ.get("CI"), reason="needs the Debian package chromium"
)

HOSTILE = "</script><script>alert('1')</script> \"été\" & <b>"
# what a report may say of itself: nothing is loaded, whatever the page holds
POLICY = "default-src 'none'; img-src data:; style-src 'unsafe-inline'; script-src 'unsafe-inline'"
STAGE = (0xDF, 0xE4, 0xE8)


@pytest.fixture(scope="module")
def result():
    """A wall of 6 m x 3 m: a bump on the left, no texture on the right, no number along the top."""
    x, z = (axis.ravel() for axis in np.meshgrid(np.arange(150) * 0.04, np.arange(75) * 0.04, indexing="ij"))
    n = len(x)
    values = {each.name: np.zeros(n, each.numpy_dtype) for each in ATTRIBUTES}
    bump = np.exp(-((x - 1.5) ** 2) - (z - 1.5) ** 2)
    values["disp_n"] = np.where(z > 2.8, np.nan, 6e-3 * bump).astype(np.float32)
    values["tilt"] = np.where(z > 2.8, np.nan, 4e-3 * np.abs(x - 1.5) * bump).astype(np.float32)
    values["strain_1"] = np.where((z > 2.8) | (x > 4), np.nan, 3e-4 * bump).astype(np.float32)
    for name, sd in (("disp_n_sd", 1.5e-4), ("tilt_sd", 1e-4), ("strain_1_sd", 5e-5)):
        values[name] = np.full(n, sd, np.float32)
    values["tilt_sd"][x > 5] = np.nan
    values["curv_1"][:] = values["strain_2"][:] = np.nan
    values["status"] = np.where(z > 2.8, Status.EDGE, Status.FINE).astype(np.uint8)
    values["discovery"] = (bump > 0.1).astype(np.uint8)
    base = make_result()
    reference = replace(base.reference, points=np.column_stack([x, np.zeros(n), z]), label=HOSTILE)
    return replace(base, reference=reference, points=values)


@pytest.fixture(scope="module")
def page(result, tmp_path_factory):
    from matplotlib.image import imsave

    picture = io.BytesIO()
    imsave(picture, np.full((40, 60, 3), 0.3), format="png")
    uri = "data:image/png;base64," + base64.b64encode(picture.getvalue()).decode()
    view = scene_html(scene_data(result), picture=uri, alt=HOSTILE)
    path = tmp_path_factory.mktemp("view") / "page ü.html"
    path.write_text(
        f'<!doctype html><html lang="en"><head><meta charset="utf-8"><title>View</title>'
        f'<meta http-equiv="Content-Security-Policy" content="{POLICY}"></head><body>{view}</body></html>',
        encoding="utf-8",
    )
    return path


@pytest.fixture(scope="module")
def browser(page, tmp_path_factory):
    with Browser(tmp_path_factory.mktemp("profile"), size=(1200, 900)) as opened:
        yield opened


@pytest.fixture
def view(browser, page):
    """The page, opened anew, its view drawn."""
    browser.open(page)
    browser.wait("document.querySelector('.cv-drawn') !== null")
    browser.settle()
    return browser


def text(view, selector=".cv-panel"):
    return view.run(f"document.querySelector({json.dumps(selector)}).innerText")


def place_of(view, share_x, share_y):
    left, top, width, height = view.box(".cv-canvas")
    return left + share_x * width, top + share_y * height


def drawn(pixels):
    """Where the canvas shows something else than its ground, the frame of the focus left out."""
    inner = pixels[8:-8, 8:-8]
    return (np.abs(inner - STAGE) > 2).any(axis=2)


def picked(view, result):
    """The reference point that the panel speaks of, from its coordinates."""
    rows = view.run(
        "[...document.querySelectorAll('.cv-place dd')].map(each => parseFloat("
        "each.innerText.replace(/\\u202f/g, '').replace('\\u2212', '-')))"
    )
    at = np.array(rows[:3]) - result.reference.origin
    away = np.linalg.norm(result.reference.points - at, axis=1)
    assert away.min() < 0.01
    return int(np.argmin(away))


def as_python_writes(words):
    return words.replace("\u2212", "-").replace("\u202f", " ")


def test_the_page_says_nothing_asks_for_nothing_and_draws_the_cloud(view):
    pixels = view.pixels(".cv-canvas")
    assert drawn(pixels).mean() > 0.2
    assert len(np.unique(pixels.reshape(-1, 3), axis=0)) > 50
    assert (view.console, view.errors) == ([], [])
    assert [url for url in view.requests if not url.startswith(("file:", "data:"))] == []


def test_colours_on_the_screen_are_those_of_the_table(view, result):
    seen = np.unique(view.pixels(".cv-canvas")[8:-8, 8:-8].reshape(-1, 3), axis=0)
    table = choose_scale(BY_NAME["disp_n"], result.points["disp_n"]).table.astype(int)
    on_screen = (seen[:, None] == table[None]).all(axis=2).any(axis=0)
    values = result.points["disp_n"]
    wanted = np.unique(choose_scale(BY_NAME["disp_n"], values).rows(values[np.isfinite(values)]))
    # steps of one colour are wider than a point nearly everywhere
    assert on_screen[wanted].mean() > 0.9


def test_a_point_has_the_colour_of_its_own_value(view, result):
    scale = choose_scale(BY_NAME["disp_n"], result.points["disp_n"])
    pixels, off = view.pixels(".cv-canvas"), []
    for share in np.linspace(0.3, 0.5, 7):
        left, top, width, height = view.box(".cv-canvas")
        x, y = int(share * width), int(height / 2)
        view.click(left + x, top + y)
        there = np.flatnonzero((scale.table == pixels[y, x]).all(axis=1))
        assert len(there), "a colour that is not in the table"
        off.append(np.abs(there - scale.rows(result.points["disp_n"][[picked(view, result)]])).min())
    # a neighbour can lie over the point that is nearest to the click
    assert max(off) <= 4
    assert np.median(off) <= 1


def test_a_click_shows_the_values_of_that_point_with_their_intervals(view, result):
    view.click(*place_of(view, 0.35, 0.5))
    row = picked(view, result)
    left, top, width, height = view.box(".cv-ring")
    assert (
        np.hypot(left + width / 2 - place_of(view, 0.35, 0.5)[0], top + height / 2 - place_of(view, 0.35, 0.5)[1]) < 7
    )
    said = as_python_writes(text(view))
    for name in ("disp_n", "tilt"):
        value, sd = float(result.points[name][row]), float(result.points[f"{name}_sd"][row])
        number, half = said_interval(said, BY_NAME[name])
        assert abs(number - value * BY_NAME[name].factor) <= 0.02 * sd * BY_NAME[name].factor + 0.005
        assert interval(value, sd, BY_NAME[name]).split(" ± ")[1] == f"{half} {BY_NAME[name].person}"
    assert "95 % interval" in said
    assert "significant change at this place" in said
    assert view.run("document.querySelector('.cv-ring').hidden") is False


def said_interval(said, attribute):
    """Value and half width, as written, of the only interval in this unit."""
    found = [line for line in said.replace("\t", "\n").splitlines() if line.endswith(f" {attribute.person}")]
    number, half = next(line for line in found if "±" in line).removesuffix(f" {attribute.person}").split(" ± ")
    return float(number.replace(" ", "")), half


def test_places_without_a_number_say_why(view, result):
    view.run("document.querySelector('select').value = '2', document.querySelector('select')"
             ".dispatchEvent(new Event('change'))")  # fmt: skip
    view.click(*place_of(view, 0.8, 0.5))
    assert result.points["status"][picked(view, result)] == Status.FINE
    assert "not observable here" in text(view)
    assert "too little texture or relief" in text(view).lower()


def test_a_value_without_a_standard_error_says_that_no_interval_is_given(view, result):
    view.click(*place_of(view, 0.5, 0.5))
    assert "no interval" not in text(view)
    view.click(*place_of(view, 0.9, 0.5))
    row = picked(view, result)
    assert np.isnan(result.points["tilt_sd"][row])
    rows = [line for line in text(view).splitlines() if line.startswith("Tilt")]
    assert rows[0].endswith("mrad (no interval given)")


def test_a_click_beside_the_cloud_says_so(view):
    view.click(*place_of(view, 0.02, 0.03))
    assert text(view).startswith("No point there.")


def test_another_attribute_changes_colours_key_and_panel(view):
    view.click(*place_of(view, 0.35, 0.5))
    before, key = view.pixels(".cv-canvas"), text(view, ".cv-key")
    view.run("document.querySelector('select').value = '1', document.querySelector('select')"
             ".dispatchEvent(new Event('change'))")  # fmt: skip
    view.settle()
    assert (before != view.pixels(".cv-canvas")).any(axis=2).mean() > 0.1
    assert text(view).startswith("Tilt")
    assert "Normal displacement [mm]" in key
    assert "Tilt [mrad]" in text(view, ".cv-key")


def test_keys_alone_reach_and_work_everything(view, result):
    view.run("document.activeElement.blur()")
    reached = []
    for _ in range(14):
        view.key("Tab")
        reached.append(view.run(
            "[document.activeElement.tagName, document.activeElement.type ?? '',"
            "getComputedStyle(document.activeElement).outlineStyle !== 'none'].join(' ')"
        ))  # fmt: skip
        if reached[-1].startswith("SUMMARY"):
            break
    assert [each.split()[0] for each in reached] == ["SELECT", "INPUT", "INPUT", "CANVAS", *["INPUT"] * 5, "BUTTON",
                                                     "SUMMARY"]  # fmt: skip
    assert all(each.endswith("true") for each in reached)
    view.run("document.querySelector('.cv-canvas').focus()")
    view.key("Enter")
    picked(view, result)
    view.key("Escape")
    assert text(view).startswith("Click a point")
    start = view.pixels(".cv-canvas")
    for key, shift in (("ArrowLeft", False), ("ArrowUp", False), ("ArrowRight", True), ("+", False)):
        before = view.pixels(".cv-canvas")
        view.key(key, shift=shift)
        assert (before != view.pixels(".cv-canvas")).any(axis=2).mean() > 0.01, key
    view.key("Home")
    np.testing.assert_array_equal(start, view.pixels(".cv-canvas"))


def test_dragging_turns_and_the_wheel_zooms_only_once_the_view_is_chosen(view):
    start = view.pixels(".cv-canvas")
    view.wheel(*place_of(view, 0.5, 0.5), 120)
    np.testing.assert_array_equal(drawn(start), drawn(view.pixels(".cv-canvas")))
    view.drag(place_of(view, 0.5, 0.5), place_of(view, 0.6, 0.4))
    turned = view.pixels(".cv-canvas")
    assert (drawn(start) != drawn(turned)).mean() > 0.01
    assert text(view).startswith("Click a point")
    view.run("scrollTo(0, 0)")
    view.wheel(*place_of(view, 0.5, 0.5), 600)
    assert drawn(view.pixels(".cv-canvas")).mean() < 0.8 * drawn(turned).mean()


@pytest.mark.parametrize(("label", "value"), [("distance along to", 100), ("height from", 120)])
def test_sliders_cut_the_cloud_and_reset_brings_it_back(view, label, value):
    whole = view.pixels(".cv-canvas")
    view.run(f"(() => {{const each = document.querySelector('[aria-label=\"{label}\"]'); each.value = {value};"
             "each.dispatchEvent(new Event('input'))})()")  # fmt: skip
    view.settle()
    assert 0.2 < drawn(view.pixels(".cv-canvas")).mean() / drawn(whole).mean() < 0.7
    view.run("document.querySelector('.cv-bottom button').click()")
    view.settle()
    np.testing.assert_array_equal(whole, view.pixels(".cv-canvas"))


def test_the_point_size_changes_what_is_covered(view):
    whole = drawn(view.pixels(".cv-canvas")).mean()
    view.run("(() => {const each = document.querySelector('[aria-label=\"point size\"]'); each.value = 0.5;"
             "each.dispatchEvent(new Event('input'))})()")  # fmt: skip
    view.settle()
    assert drawn(view.pixels(".cv-canvas")).mean() < 0.8 * whole


def test_places_without_a_significant_change_turn_grey_on_request(view):
    def grey():
        return (view.pixels(".cv-canvas") == NOT_SIGNIFICANT).all(axis=2).mean()

    assert grey() < 0.001
    view.run("document.querySelector('.cv-tick input').click()")
    view.settle()
    assert grey() > 0.1


def test_hostile_labels_are_shown_as_text(view):
    assert HOSTILE in view.run("document.querySelector('.cv-canvas').getAttribute('aria-label')")
    assert view.run("document.querySelectorAll('script').length") == 2
    assert view.run("document.querySelectorAll('.cloud-view b').length") == 0


def test_nothing_runs_out_of_a_narrow_page(view):
    view.resize(360, 800)
    view.settle()
    assert view.run("document.documentElement.scrollWidth") <= 360
    assert drawn(view.pixels(".cv-canvas")).mean() > 0.05
    view.resize(1200, 900)


def test_in_print_the_picture_stands_for_the_view(view):
    view.call("Emulation.setEmulatedMedia", media="print")
    shown = view.run(
        "['.cv-picture img', '.cv-tool'].map(each => document.querySelector(each).getClientRects().length > 0)"
    )
    view.call("Emulation.setEmulatedMedia", media="")
    assert shown == [True, False]


def test_without_webgl_the_picture_stays_and_a_sentence_says_why(page, tmp_path):
    with Browser(tmp_path, flags=("--disable-3d-apis",)) as bare:
        bare.open(page)
        bare.wait("document.querySelector('figcaption').innerText.includes('WebGL, which')")
        assert text(bare, "figcaption").endswith("; the picture shows the same cloud.")
        assert bare.run("document.querySelector('.cv-picture img').getClientRects().length") == 1
        assert bare.run("document.querySelector('.cv-tool')") is None
        assert (bare.console, bare.errors) == ([], [])
