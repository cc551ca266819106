# SPDX-License-Identifier: MIT
"""Zones, triggers and even strain in the summary of a small comparison whose truth is known."""

from __future__ import annotations

import json
import runpy
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest

from scanstrain import compare_epochs
from scanstrain.config import CompareConfig
from scanstrain.damage import CAUTIONS
from scanstrain.epoch import make_epoch
from scanstrain.outputs.even_strain import budget_sentences
from scanstrain.outputs.summary import summary
from scanstrain.outputs.triggers import trigger_sentence
from scanstrain.screens import comparison_screen

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
LEAN = 0.003
"""The right third of the wall leans forward by this about its foot [rad]; the rest stands."""


def trigger(name, quantity, unit, zone, direction="beyond", **levels):
    each = {"name": name, "quantity": quantity, "unit": unit, "direction": direction, "levels": levels}
    return each if zone is None else each | {"zone": zone}


TRIGGERS = [
    trigger("top", "disp_n", "mm", "right", hardly=20.0, early=1.0),
    trigger("still", "disp_n", "mm", "left", early=2.0),
    trigger("lean", "lean", "mrad", "right", direction="above", half=1.5, exactly=3.0, double=6.0),
    trigger("mean", "mean_disp_n", "mm", "right", early=1.0, late=3.0),
    trigger("turned", "tilt", "mrad", "left", direction="above", far=30.0),
    trigger("stretch", "strain_u", "microstrain", None, direction="above", early=100.0),
    {"name": "published", "quantity": "strain_1", "classes": "boscardin_cording_1989"},
]


@pytest.fixture(scope="module")
def made():
    rng = np.random.default_rng(4)
    a, b = (SCENES["wall"](rng, 40_000, noise=0.001, relief=0.0) for _ in range(2))
    foot, edge = a[:, 2].min(), a[:, 0].max() / 3
    b[:, 1] += np.where(b[:, 0] > edge, LEAN * (b[:, 2] - foot), 0.0)
    boxes = {"right": [[edge + 0.15, -1.0, -3.0], [9.0, 1.0, 3.0]], "left": [[-9.0, -1, -3], [edge - 0.15, 1, 3]]}
    config = {
        "neighbourhood": {"gauge_length": 0.25},
        "strain": {"structure": "wall", "free_side": [0.0, 5.0, 0.0]},
        "zone": [{"name": name, "box": box} for name, box in boxes.items()],
        "trigger": TRIGGERS,
        "budget": {"temperature_change": 8.0, "temperature_change_sd": 2.0, "expansion": 1e-5, "expansion_sd": 1e-6},
    }
    epochs = (make_epoch(cloud, origin=np.zeros(3), label=label) for cloud, label in ((a, "a"), (b, "b")))
    result = compare_epochs(*epochs, CompareConfig.model_validate(config))
    return SimpleNamespace(result=result, foot=foot, content=summary(result))


def row(made, name):
    return next(each for each in made.content["triggers"] if each["name"] == name)


def test_zones_hold_what_happened_in_them(made):
    zones = made.content["zones"]
    assert list(zones) == ["whole object", "right", "left"]
    places = made.result.strain.position[made.result.zones["right"]]
    seen = np.isfinite(made.result.strain.values["disp_n"][made.result.zones["right"]])
    truth = {"right": LEAN * (places[seen, 2] - made.foot).mean(), "left": 0.0}
    for name, expected in truth.items():
        found = zones[name]["quantities"]["disp_n"]
        assert abs(found["mean"] - expected) < 3 * found["mean_sd"] < 0.3e-3
        tilt = zones[name]["quantities"]["tilt"]
        assert tilt["mean_low"] < (LEAN if name == "right" else 0.0) < tilt["mean_high"]
    spacing = made.result.strain.gauge_spacing
    assert zones["left"]["area"] == pytest.approx(made.result.zones["left"].sum() * spacing**2)
    assert zones["right"]["area_discovered"] > 0.7 * zones["right"]["area"]
    assert zones["left"]["area_discovered"] < 0.05 * zones["left"]["area"]
    assert zones["right"]["quantities"]["strain_u"]["extreme"] is None
    assert set(zones) == set(made.content["rigid_motion"])


def test_limits_that_are_passed_for_certain_perhaps_and_not(made):
    top = row(made, "top")
    assert (top["grade"], top["exceeded"], top["possible"]) == ("exceeded", "early", None)
    assert list(top["levels"]) == ["early", "hardly"]
    assert top["levels"]["early"]["limit"] == 0.001
    assert sum(top["levels"]["early"]["areas"].values()) == pytest.approx(made.content["zones"]["right"]["area"])
    assert top["furthest"]["low"] < top["furthest"]["value"] < top["furthest"]["high"]
    assert row(made, "still")["grade"] in ("below", "possible")
    lean = row(made, "lean")
    grades = {level: each["grade"] for level, each in lean["levels"].items()}
    assert grades == {"half": "exceeded", "exactly": "possible", "double": "below"}
    assert (lean["of"], lean["exceeded"], lean["possible"]) == ("body", "half", "exactly")
    mean = {level: each["grade"] for level, each in row(made, "mean")["levels"].items()}
    assert mean == {"early": "exceeded", "late": "below"}


def test_what_noise_drives_up_says_so(made):
    turned = row(made, "turned")
    assert turned["grade"] != "exceeded"
    assert turned["furthest"]["noise_bias"] > 0
    assert "Noise drives this quantity up" in turned["note"]
    assert row(made, "top")["note"] is None


def test_what_is_nowhere_observable_is_neither_below_nor_quiet(made):
    for name in ("stretch", "published"):
        assert row(made, name)["grade"] == "not observable"
        assert row(made, name)["furthest"] is None
        assert any(f"Trigger {name!r} could not be judged" in said for said in made.content["warnings"])
    assert not any("'top'" in said for said in made.content["warnings"])


def test_published_classes_bring_their_cautions_and_only_they_do(made):
    assert set(CAUTIONS["boscardin_cording_1989"]) <= set(made.content["cautions"])
    plain = replace(made.result, config=made.result.config.model_copy(update={"trigger": ()}))
    assert not set(CAUTIONS["boscardin_cording_1989"]) & set(summary(plain)["cautions"])
    assert summary(plain)["triggers"] == []


def test_each_trigger_is_one_line_on_the_screen(made):
    lines = comparison_screen("a to b", Path("there"), made.content).splitlines()
    assert sum(line.startswith("  Trigger ") for line in lines) == len(TRIGGERS)
    said = trigger_sentence(row(made, "lean"))
    assert said.startswith("lean (lean, zone 'right'): 'half' exceeded, 'exactly' possible; furthest +")
    assert "mrad (95 %)" in said
    assert trigger_sentence(row(made, "stretch")) == "stretch (strain_u, whole object): not observable."


def test_even_strain_from_temperature_stands_beside_what_was_measured(made):
    budget = made.content["budget"]
    assert budget["dilation"] is None
    lines = {line["name"]: line for line in budget["lines"]}
    # 8 K +- 2 K at 10 +- 1 microstrain a kelvin: 80 +- 21.6 microstrain, twice that as a change of area
    assert lines["temperature"]["dilation"] == pytest.approx(160e-6)
    assert lines["temperature"]["dilation_sd"] == pytest.approx(43.3e-6, rel=0.01)
    assert lines["scale"]["strain"] is None
    assert any("+160 ± 85 µε" in sentence for sentence in budget_sentences(budget))
    assert "+160 ± 85 µε" in comparison_screen("a to b", Path("there"), made.content, verbose=True)


def test_sections_are_held_against_limits_in_their_stretch_of_tunnel(made):
    """Three sections by hand: the first squat by 6 mm, the second by 2 mm, the third by 9 mm outside of the zone."""
    changes = {2.0: (-6e-3, 1e-4), 4.0: (-2e-3, 1e-4), 9.0: (-9e-3, 1e-4), 5.0: (np.nan, np.nan)}
    sections = tuple(
        SimpleNamespace(chainage=s, values={"vertical_diameter_change": value}, errors={"vertical_diameter_change": sd})
        for s, (value, sd) in changes.items()
    )
    each = trigger("squat", "vertical_diameter_change", "mm", "half", direction="below", early=-3.0, late=-8.0)
    tables = {"strain": {"structure": "tunnel"}, "zone": [{"name": "half", "chainage": [0.0, 5.0]}], "trigger": [each]}
    config = CompareConfig.model_validate(tables)
    from scanstrain.outputs.triggers import trigger_data

    (found,) = trigger_data(replace(made.result, config=config, sections=sections), {})
    assert (found["of"], found["exceeded"]) == ("sections", "early")
    assert found["levels"]["late"]["grade"] == "below"
    assert found["levels"]["early"]["sections"] == {"exceeded": 1, "possible": 0, "below": 1, "not observable": 1}
    assert found["furthest"]["chainage"] == 2.0
    assert "at chainage 2.00 m" in trigger_sentence(found)


def test_the_summary_is_strict_json(made):
    assert json.loads(json.dumps(made.content, allow_nan=False)) == made.content
