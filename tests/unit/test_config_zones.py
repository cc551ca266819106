# SPDX-License-Identifier: MIT
"""Zones in a configuration: what they may be, what is refused, and who may name them."""

import pytest

from scanstrain.config import CompareConfig, load_config
from scanstrain.config.faults import find_faults

BOX = {"name": "abutment", "box": [[0, 0, 0], [4.0, 1.0, 2.5]]}


def texts(data):
    return {fault.key: fault.text for fault in find_faults(CompareConfig, data)}


def test_zones_become_what_the_program_works_with():
    config = CompareConfig.model_validate({"zone": [BOX, {"name": "crown", "clock": [11, 1], "classes": [2]}]})
    assert config.zones()[0].box == ((0, 0, 0), (4.0, 1.0, 2.5))
    assert [zone.name for zone in config.zones(("crown",))] == ["crown"]
    assert config.zones()[1].needs_unrolled


@pytest.mark.parametrize(
    ("zone", "key", "says"),
    [
        ({"name": "a"}, "zone[1]", "at least one condition"),
        ({"name": "a", "box": [[0, 0, 0], [1, 1]]}, "zone[1].box", "2 corners"),
        ({"name": "a", "box": [[0, 0, 5], [1, 1, 1]]}, "zone[1].box", "lowest x, y and z first"),
        ({"name": "a", "polygon": [[0, 0], [1, 1]]}, "zone[1].polygon", "at least 3 corners"),
        ({"name": "a", "chainage": [5, 1]}, "zone[1].chainage", "exchange them"),
        ({"name": "a", "clock": [13, 1]}, "zone[1].clock", "from 0 to 12"),
        ({"name": "a", "classes": [300]}, "zone[1].classes", "whole numbers"),
        ({"name": "<a>", "classes": [3]}, "zone[1].name", "letters"),
        ({"name": "a", "radius": 3}, "zone[1].radius", "unknown key"),
    ],
)
def test_a_zone_that_is_none_is_one_fault(zone, key, says):
    found = texts({"zone": [zone]})
    assert list(found) == [key]
    assert says in found[key]


def test_names_must_exist_and_differ():
    found = texts({"registration": {"stable_zones": ["abutmnt"], "excluded_zones": ["x"]}, "zone": [BOX]})
    assert "did you mean 'abutment'" in found["registration.stable_zones"]
    assert "add a [[zone]]" in found["registration.excluded_zones"]
    assert "a different name" in texts({"zone": [BOX, {**BOX, "name": "Abutment"}]})["zone[2].name"]


def test_contradictions_of_the_datum_are_refused():
    assert "start_file" in texts({"registration": {"start": "targets"}})["registration.start"]
    assert "start_file" in texts({"registration": {"start_file": "a.csv"}})["registration.start_file"]
    both = {"registration": {"stable": "all", "stable_zones": ["abutment"]}, "zone": [BOX]}
    assert "one statement" in texts(both)["registration.stable"]


def test_a_start_file_is_found_from_the_batch_file(tmp_path):
    text = """
        [output]
        folder = "out"
        [registration]
        start = "targets"
        start_file = "site/targets.csv"
        stable_zones = ["abutment"]
        [[zone]]
        name = "abutment"
        box = [[0, 0, 0], [4.0, 1, 2.5]]
        [[epoch]]
        label = "a"
        file = "a.laz"
        [[epoch]]
        label = "b"
        file = "b.laz"
    """
    path = tmp_path / "batch.toml"
    path.write_text(text, encoding="utf-8")
    config = load_config(path).compare_config()
    assert config.registration.start_file == tmp_path / "site" / "targets.csv"
    assert config.zones()[0].name == "abutment"
