# SPDX-License-Identifier: MIT
"""The store of kept stages: what is taken, what is computed again, and that it never stops a run."""

from pathlib import Path

import numpy as np
import pytest

from scanstrain.config import config_from_options
from scanstrain.stages import STAGES, StageStore, stage_keys
from scanstrain.stages.places import forget, gather, stage_folder

KEYS = {"registration": "1" * 64, "field": "2" * 64}
INPUTS = {"reference": "a" * 64, "current": "b" * 64, "labels": "ab"}


def never():
    pytest.fail("a kept stage was computed again")


def kept(folder, value=1.0):
    store = StageStore(folder, KEYS)
    store("field", lambda: (np.arange(3.0), value))
    return store


def test_a_kept_stage_is_taken_and_not_computed(tmp_path):
    first = kept(tmp_path)
    store = StageStore(tmp_path, KEYS)
    array, value = store("field", never)
    assert (array.tolist(), value) == ([0.0, 1.0, 2.0], 1.0)
    assert (first.computed, first.taken) == (["field"], [])
    assert (store.computed, store.taken, store.notes) == ([], ["field"], [])
    assert [path.name for path in tmp_path.iterdir()] == ["field.stage"]


def test_another_key_computes_again_and_replaces_without_a_note(tmp_path):
    kept(tmp_path)
    other = StageStore(tmp_path, {"field": "3" * 64})
    assert other("field", lambda: 5) == 5
    assert (other.computed, other.notes) == (["field"], [])
    assert StageStore(tmp_path, {"field": "3" * 64})("field", never) == 5


@pytest.mark.parametrize("where", [0, 10, 90, 120, 150, 400, -1])
def test_a_damaged_file_is_computed_again_with_a_note(tmp_path, where):
    kept(tmp_path)
    path = tmp_path / "field.stage"
    data = bytearray(path.read_bytes())
    data[where] ^= 0x40
    path.write_bytes(data)
    store = StageStore(tmp_path, KEYS)
    assert store("field", lambda: 7) == 7
    assert store.computed == ["field"]
    # a flipped bit in the key cannot be told from the key of other options
    assert len(store.notes) == (0 if 17 <= where < 81 else 1)
    assert StageStore(tmp_path, KEYS)("field", never) == 7


@pytest.mark.parametrize("length", [0, 5, 100, 300])
def test_a_cut_file_is_computed_again(tmp_path, length):
    kept(tmp_path)
    path = tmp_path / "field.stage"
    path.write_bytes(path.read_bytes()[:length])
    store = StageStore(tmp_path, KEYS)
    assert store("field", lambda: 7) == 7
    assert "damaged" in store.notes[0]


def test_a_place_that_cannot_be_written_to_stops_nothing(tmp_path):
    (tmp_path / "file").write_text("mine", encoding="utf-8")
    store = StageStore(tmp_path / "file" / "stages", KEYS)
    assert store("field", lambda: 7) == 7
    assert "not kept" in " ".join(store.notes)


def changed(**options):
    """Names of the stages that other options make void."""
    before, after = stage_keys(config_from_options({}), INPUTS), stage_keys(config_from_options(options), INPUTS)
    return [name for name in STAGES if before[name] != after[name]]


@pytest.mark.parametrize(
    ("options", "stages"),
    [
        ({"colour_by": "tilt"}, []), ({"no_data": -9999.0}, []), ({"report": False}, []), ({"keep_stages": False}, []),
        ({"thickness": 0.3}, ["strain"]), ({"measure": "hencky"}, ["strain"]),
        ({"false_discovery_rate": 0.1}, ["strain"]),
        ({"section_spacing": 1.0}, ["strain"]), ({"band": 0.5}, ["strain"]),
        ({"gauge_length": 0.5}, ["field", "strain"]), ({"min_points": 40}, ["field", "strain"]),
        ({"capture_range": 0.2}, list(STAGES)), ({"seed": 1}, list(STAGES)), ({"structure": "wall"}, list(STAGES)),
        ({"free_side": [0.0, 0.0, 1.0]}, list(STAGES)),
    ],
    ids=str,
)  # fmt: skip
def test_changed_options_make_void_what_depends_on_them(options, stages):
    assert changed(**options) == stages


def with_tables(**tables):
    from scanstrain.config import CompareConfig

    return stage_keys(CompareConfig.model_validate(tables), INPUTS)


def test_zones_and_triggers_concern_the_stages_that_use_them():
    zone = {"name": "north", "box": [[0.0, 0.0, 0.0], [1.0, 1.0, 1.0]]}
    before, plain = with_tables(), with_tables(zone=[zone])
    stable = with_tables(zone=[zone], registration={"stable_zones": ["north"]})
    trigger = {"name": "m", "quantity": "disp_n", "unit": "mm", "direction": "beyond", "levels": {"look": 5.0}}
    judged = with_tables(zone=[zone], trigger=[trigger])
    assert [name for name in STAGES if before[name] != plain[name]] == ["strain"]
    assert [name for name in STAGES if plain[name] != stable[name]] == list(STAGES)
    assert judged == plain


@pytest.mark.parametrize("part", [*INPUTS, "start_file"])
def test_every_input_counts(part):
    config = config_from_options({})
    before, after = stage_keys(config, INPUTS), stage_keys(config, {**INPUTS, part: "c" * 64})
    assert all(before[name] != after[name] for name in STAGES)


def test_another_program_or_library_counts(monkeypatch):
    from scanstrain.program import identity

    config = config_from_options({})
    before = stage_keys(config, INPUTS)
    for name, same in (("scanstrain", False), ("source", False), ("numpy", False), ("matplotlib", True)):
        monkeypatch.setattr("scanstrain.stages.keys.identity", lambda name=name: {**identity(), name: "0.0"})
        assert (stage_keys(config, INPUTS) == before) is same, name


def test_stages_move_into_the_folder_of_the_result_once_there_is_one(tmp_path):
    folder = tmp_path / "a_to_b"
    assert stage_folder(folder) == tmp_path / ".a_to_b.stages"
    kept(stage_folder(folder))
    (stage_folder(folder) / ".field.stage.ab12.part").touch()
    gather(folder)
    folder.mkdir()
    gather(folder)
    assert [path.name for path in tmp_path.iterdir()] == ["a_to_b"]
    assert [path.name for path in stage_folder(folder).iterdir()] == ["field.stage"]
    forget(folder)
    assert list(folder.iterdir()) == []


def test_the_present_folder_has_a_place_too(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert stage_folder(Path()).resolve() == tmp_path / ".stages"
    gather(Path())
