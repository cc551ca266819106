# SPDX-License-Identifier: MIT
"""The view in the report holds the cloud as it is: places, values, errors and colours survive the way into the page."""

import base64
import hashlib
import json
import re
import runpy
import zlib
from dataclasses import replace
from html.parser import HTMLParser
from importlib import resources
from pathlib import Path

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.errors import OptionError
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.colour import choose_scale, colours
from scanstrain.outputs.report3d import scene_data, scene_html
from scanstrain.outputs.report3d.thin import even_rows

make_result = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))["make_result"]
FOLDER = resources.files("scanstrain.outputs.report3d")
HOSTILE = "</script><script>alert('1')</script> \"été\" & \u2028 <!-- "
PICTURE = "data:image/png;base64," + base64.b64encode(b"not looked at").decode()


def wall(n=4000, seed=0, smooth=True, result=None):
    """A wall of n points in a survey frame, its values smooth along the wall, or drawn one by one."""
    random = np.random.default_rng(seed)
    points = np.column_stack([random.uniform(0, 20, n), random.normal(0, 0.002, n), random.uniform(0, 10, n)])
    result = result or make_result()
    wave = np.sin(points[:, 0]) * np.cos(points[:, 2]) if smooth else random.normal(0, 1, n)
    size = {"disp_n": 6e-3, "tilt": 2e-3, "strain_1": 3e-4, "strain_2": 3e-4, "curv_1": 5e-3, "significance": 1.0}
    values = {each.name: np.zeros(n, each.numpy_dtype) for each in ATTRIBUTES}
    for name, end in size.items():
        values[name] = (end * (np.abs(wave) if BY_NAME[name].kind != "signed" else wave)).astype(np.float32)
    for name in ("disp_n_sd", "tilt_sd", "strain_1_sd", "strain_2_sd", "curv_sd"):
        spread = 1 + 0.3 * wave if smooth else random.uniform(0.5, 2.0, n)
        values[name] = (size[name.replace("_sd", "").replace("curv", "curv_1")] / 40 * spread).astype(np.float32)
    bare = points[:, 0] > 15
    for name in ("strain_1", "strain_2", "strain_1_sd", "strain_2_sd"):
        values[name][bare] = np.nan
    values["status"][points[:, 2] > 9.5] = Status.EDGE
    values["disp_n"][points[:, 2] > 9.5] = np.nan
    values["discovery"] = (np.abs(wave) > 0.4).astype(np.uint8)
    values["observed"] = random.integers(0, 128, n).astype(np.uint8)
    values["gauge_points"] = random.integers(0, 900, n).astype(np.uint16)
    return replace(result, reference=replace(result.reference, points=points), points=values)


class Page(HTMLParser):
    """Counts elements and keeps the text of scripts."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.scripts, self.pictures = [], [], []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        if tag == "script":
            self.scripts.append("")
        if tag == "img":
            self.pictures.append(dict(attrs))

    def handle_data(self, data):
        if self.tags and self.tags[-1] == "script" and self.get_starttag_text().startswith("<script"):
            self.scripts[-1] += data


def unpacked(text, count, bits):
    """What the page reads; written here a second time, so that both ends must agree."""
    plane = np.frombuffer(zlib.decompress(base64.b64decode(text)), np.uint8).reshape(-1, count).astype(np.int64)
    folded = plane[0] + (256 * plane[1] if bits == 16 else 0)
    steps = np.where(folded % 2 == 1, -(folded + 1) // 2, folded // 2)
    return np.cumsum(steps) % (1 << bits)


def in_page(scene, **options):
    """The JSON of a view as a browser finds it."""
    return json.loads(Page(scene_html(scene, **options)).scripts[0])


def values_of(layer, count):
    codes = unpacked(layer["codes"], count, 16)
    rows = len(base64.b64decode(layer["table"])) // 3
    share = (codes - 1 + layer["first"] + 0.5) / (layer["perRow"] * rows)
    if layer["form"] == "log":
        number = layer["low"] * (layer["high"] / layer["low"]) ** share
    else:
        number = layer["low"] + share * (layer["high"] - layer["low"])
    return np.where(codes == 0, np.nan, number)


def colours_of(layer, count):
    table = np.frombuffer(base64.b64decode(layer["table"]), np.uint8).reshape(-1, 3)
    index = unpacked(layer["codes"], count, 16) - 1 + layer["first"]
    return table[np.clip(index // layer["perRow"], 0, len(table) - 1)]


def test_places_come_back_within_half_a_step():
    result = wall()
    scene = scene_data(result)
    page = in_page(scene)
    codes = np.stack([unpacked(text, page["count"], 16) for text in page["position"]], axis=1)
    places = np.array(page["corner"]) + page["step"] * codes
    truth = (result.reference.points + result.reference.origin)[scene.rows]
    assert page["step"] == pytest.approx(20 / 65535, rel=1e-3)
    # half a step, and the rounding of survey coordinates
    assert np.abs(places - truth).max() <= page["step"] / 2 + 1e-8
    assert sorted(scene.rows) == list(range(4000))


def test_values_and_standard_errors_come_back_well_within_the_interval():
    result = wall()
    scene = scene_data(result)
    page = in_page(scene)
    assert [each["name"] for each in page["layers"]] == ["disp_n", "tilt", "curv_1", "strain_1", "strain_2"]
    for layer, sd_name in zip(
        page["layers"], ("disp_n_sd", "tilt_sd", "curv_sd", "strain_1_sd", "strain_2_sd"), strict=True
    ):
        truth, sd = result.points[layer["name"]][scene.rows], result.points[sd_name][scene.rows]
        found, known = values_of(layer, page["count"]), np.isfinite(truth)
        np.testing.assert_array_equal(np.isfinite(found), known)
        assert (np.abs(found - truth)[known] <= 0.02 * sd[known]).all(), layer["name"]
        codes = unpacked(layer["error"]["codes"], page["count"], 8)
        error = layer["error"]["low"] * layer["error"]["ratio"] ** (codes - 1.0)
        np.testing.assert_allclose(error[known], sd[known], rtol=0.01)
        assert (codes[~known] == 0).all()


@pytest.mark.parametrize("name", ["disp_n", "tilt", "tilt_sd", "significance", "status", "observed", "gauge_points"])
def test_colours_are_those_of_the_coloured_cloud(name):
    result = wall()
    scene = scene_data(result, attributes=(name,))
    page = in_page(scene)
    values = result.points[name]
    truth = colours(values, choose_scale(BY_NAME[name], values))[scene.rows] // 257
    shown = np.isfinite(np.asarray(values, float))[scene.rows]
    np.testing.assert_array_equal(colours_of(page["layers"][0], page["count"])[shown], truth[shown])


def test_limits_are_those_given_and_values_on_the_borders_of_colours_keep_their_side():
    result = wall(n=1025)
    borders = np.linspace(-2e-3, 2e-3, 257)
    result.points["disp_n"][:] = np.concatenate([np.repeat(borders, 3), borders[:254]]).astype(np.float32)
    result.points["disp_n"][257:514] *= np.float32(7.3)
    scene = scene_data(result, attributes=("disp_n",), limits={"disp_n": 2e-3})
    page = in_page(scene)
    layer = page["layers"][0]
    assert (layer["low"], layer["high"]) == (-2e-3, 2e-3)
    scale = choose_scale(BY_NAME["disp_n"], result.points["disp_n"], limits=2e-3)
    truth = colours(result.points["disp_n"], scale)[scene.rows] // 257
    np.testing.assert_array_equal(colours_of(layer, page["count"]), truth)


def test_values_far_beyond_narrow_limits_keep_their_colour_and_say_that_their_number_is_cut():
    result = wall(n=2000)
    result.points["disp_n"][:] = np.linspace(-6e-3, 6e-3, 2000)
    scene = scene_data(result, attributes=("disp_n",), limits={"disp_n": 1e-9})
    page = in_page(scene)
    layer = page["layers"][0]
    assert layer["beyond"] == [True, True] or layer["beyond"] == [False, True]
    truth = colours(result.points["disp_n"], choose_scale(BY_NAME["disp_n"], np.zeros(1), limits=1e-9))[scene.rows]
    np.testing.assert_array_equal(colours_of(layer, page["count"]), truth // 257)


def test_status_discovery_and_the_reason_for_missing_numbers_are_in_the_page():
    result = wall()
    scene = scene_data(result)
    page = in_page(scene)
    np.testing.assert_array_equal(unpacked(page["status"], 4000, 8), result.points["status"][scene.rows])
    np.testing.assert_array_equal(unpacked(page["changed"], 4000, 8), result.points["discovery"][scene.rows])
    assert page["words"][str(int(Status.EDGE))].startswith("the patch is one-sided")
    assert "texture" in {each["name"]: each["missing"] for each in page["layers"]}["strain_1"]


def test_chainage_comes_back_within_half_a_step_and_stays_unknown_where_it_is():
    result = wall()
    chainage = 1200.0 + result.reference.points[:, 0]
    chainage[::7] = np.nan
    scene = scene_data(result, along=chainage, along_name="chainage of the north tube")
    along = in_page(scene)["along"]
    codes = unpacked(along["codes"], 4000, 16)
    found = np.where(codes == 0, np.nan, along["low"] + along["step"] * (codes - 1))
    np.testing.assert_allclose(found, chainage[scene.rows], atol=along["step"] / 2 + 1e-9)
    assert (along["name"], along["step"]) == ("chainage of the north tube", 0.01)


def test_without_chainage_the_longest_horizontal_direction_serves():
    result = wall()
    turned = np.column_stack([0.6 * result.reference.points[:, 0], 0.8 * result.reference.points[:, 0],
                              result.reference.points[:, 2]])  # fmt: skip
    along = in_page(scene_data(replace(result, reference=replace(result.reference, points=turned))))["along"]
    np.testing.assert_allclose(along["direction"], [0.6, 0.8], atol=1e-3)


def test_a_wall_is_first_seen_from_its_free_side():
    view = scene_data(wall()).view
    assert np.cos(view.pitch) * np.array([np.cos(view.yaw), np.sin(view.yaw)]) @ [0.0, -1.0] > 0.8
    assert not view.hollow


def test_a_tube_is_seen_into():
    result = wall()
    clock = np.linspace(0, 2 * np.pi, 12, endpoint=False)
    normal = np.column_stack([np.zeros(12), np.sin(clock), np.cos(clock)])
    view = scene_data(replace(result, strain=replace(result.strain, normal=normal))).view
    assert view.hollow


def test_many_points_are_thinned_evenly_and_always_alike():
    random = np.random.default_rng(3)
    even = np.column_stack([random.uniform(0, 20, 60_000), np.zeros(60_000), random.uniform(0, 10, 60_000)])
    crowd = np.column_stack([random.normal(5, 0.5, 240_000), np.zeros(240_000), random.normal(5, 0.5, 240_000)])
    points = np.vstack([even, crowd])
    rows = even_rows(points, 8000)
    assert 7000 <= len(rows) <= 8000
    assert (np.diff(rows) > 0).all()
    counts, _, _ = np.histogram2d(points[rows, 0], points[rows, 2], bins=(20, 10), range=((0, 20), (0, 10)))
    # 36 to 40 a square metre are wanted, though the crowd is fifty times as dense as the rest
    assert counts.min() > 0.75 * counts.mean()
    assert counts.max() < 1.25 * counts.mean()
    np.testing.assert_array_equal(rows, even_rows(points, 8000))


def test_repeated_points_do_not_pass_the_limit():
    points = np.repeat(np.random.default_rng(0).uniform(0, 1, (3, 3)), 500, axis=0)
    assert 1 <= len(even_rows(points, 2)) <= 2
    assert len(even_rows(np.zeros((5000, 3)), 100)) <= 100


def test_the_default_view_of_200_000_points_is_small():
    scene = scene_data(wall(n=400_000), limit=200_000)
    assert 170_000 <= len(scene.rows) <= 200_000
    assert len(scene.text) <= 3_000_000


def test_data_that_do_not_pack_cost_points_and_not_size():
    scene = scene_data(wall(n=200_000, smooth=False))
    assert len(scene.text) <= 3_000_000
    assert len(scene.rows) > 90_000


def test_what_is_nowhere_observable_is_not_offered():
    result = wall(n=500)
    for name in ("strain_1", "strain_2"):
        result.points[name][:] = np.nan
    assert [each.scale.attribute.name for each in scene_data(result).layers] == ["disp_n", "tilt", "curv_1"]
    result.points.update({name: np.full(500, np.nan, np.float32) for name in ("disp_n", "tilt", "curv_1")})
    page = in_page(scene_data(result))
    assert [each["name"] for each in page["layers"]] == ["disp_n"]
    assert (unpacked(page["layers"][0]["codes"], 500, 16) == 0).all()


def test_hostile_labels_stay_text():
    result = wall(n=300)
    result = replace(result, reference=replace(result.reference, label=HOSTILE))
    text = scene_html(scene_data(result, along=np.zeros(300), along_name=HOSTILE), picture=PICTURE, alt=HOSTILE + '"')
    page = Page(text)
    assert page.tags.count("script") == 2
    found = json.loads(page.scripts[0])
    assert found["epochs"] == f"{HOSTILE} → epoch 1"
    assert found["along"]["name"] == HOSTILE
    # a browser ends a script at "</script" before a space or a slash, too
    assert not set("<>&") & set(page.scripts[0])
    assert page.pictures == [{"src": PICTURE, "alt": HOSTILE + '"'}]


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda result, scene: scene_data(result, attributes=("disp_m",)), "disp_n"),
        (lambda result, scene: scene_data(result, attributes=()), "at least one name"),
        (lambda result, scene: scene_data(result, limit=0), "a number of points above 0; got 0"),
        (lambda result, scene: scene_data(result, along=np.zeros(7)), r"shape \(300,\); got shape \(7,\)"),
        (lambda result, scene: scene_data(result, limits={"disp_n": (2.0, 1.0)}), "the lower one first"),
        (lambda result, scene: scene_html(scene, element_id='a"b'), "element_id"),
        (lambda result, scene: scene_html(scene, picture="https://example.org/a.png"), "data URI"),
    ],
)
def test_wrong_calls_are_refused_in_one_sentence(call, said):
    result = wall(n=300)
    with pytest.raises(OptionError, match=said):
        call(result, scene_data(result))


def test_the_script_is_small_and_has_no_means_to_load_anything():
    script = (FOLDER / "view.js").read_text(encoding="utf-8")
    assert len(script.encode()) <= 600_000
    # names of XML name spaces are no addresses to load from
    assert set(re.findall(r"https?://[^\"'`\s)]+", script)) <= {"http://www.w3.org/1999/xhtml"}
    for means in ("fetch(", "XMLHttpRequest", "WebSocket", "EventSource", "sendBeacon", "importScripts", "import(",
                  "new Worker", "new Function", "eval(", "document.write", "innerHTML"):  # fmt: skip
        assert means not in script, means
    assert "</script" not in script.lower()


def test_the_script_carries_its_licence_and_was_built_from_this_source():
    script = (FOLDER / "view.js").read_text(encoding="utf-8")
    licence = (FOLDER / "three_licence.txt").read_text(encoding="utf-8")
    assert "MIT License" in licence
    assert "three.js authors" in licence
    assert licence.strip() in script
    sources = sorted((each for each in (FOLDER / "source").iterdir()), key=lambda each: each.name)
    digest = hashlib.sha256(b"".join(each.read_bytes() for each in sources)).hexdigest()
    assert f"source: {digest}" in script, "view.js is older than its source: build it as DEVELOPERS.md says"
