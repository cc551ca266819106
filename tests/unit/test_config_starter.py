# SPDX-License-Identifier: MIT
"""Starter files come from the models, say everything, and are valid as they stand."""

import tomllib
from pathlib import Path

import pytest

from scanstrain.config import BatchConfig, check_batch, load_config, option_names
from scanstrain.config.demonstration import demonstration_configs
from scanstrain.config.faults import find_faults
from scanstrain.config.starter import PLACEHOLDERS, starter_text, write_starter
from scanstrain.errors import OptionError

ROOT = Path(__file__).parents[2]


def test_the_starter_is_valid_and_asks_for_scans(tmp_path):
    path = write_starter(tmp_path / "start.toml")
    *remarks, verdict = check_batch(path)
    assert "valid" in verdict
    assert [name in remark for name, remark in zip(PLACEHOLDERS, remarks, strict=True)] == [True, True]


def test_the_starter_names_every_option_once():
    lines = starter_text().splitlines()
    for names in option_names().values():
        for name in names:
            assert sum(line.lstrip("#").startswith(f"{name} = ") for line in lines) == 1, name


def test_every_option_that_is_commented_out_is_valid_once_it_is_not():
    lines = starter_text(chosen={"comparisons": "first"}).splitlines()
    # A file to start from contradicts the default start, on purpose.
    names = {name for stage in option_names().values() for name in stage} - {"start_file"}
    keys = [f"{name} = " for name in (*names, "assume_same_crs")]
    opened = [line[1:] if line.startswith("#") and line[1:].startswith(tuple(keys)) else line for line in lines]
    assert opened != lines
    data = tomllib.loads("\n".join(opened))
    assert find_faults(BatchConfig, data) == []
    assert set(data["neighbourhood"]) == set(option_names()["neighbourhood"])


def test_lines_stay_short():
    assert max(map(len, starter_text().splitlines())) <= 100


def test_scans_become_epochs_seen_from_the_file(tmp_path):
    (tmp_path / "scans").mkdir()
    scans = [tmp_path / "scans" / "lining 1.laz", tmp_path / "scans" / "lining 2.laz"]
    for scan in scans:
        scan.touch()
    (tmp_path / "work").mkdir()
    path = write_starter(tmp_path / "work" / "start.toml", scans)
    assert 'file = "../scans/lining 1.laz"' in path.read_text(encoding="utf-8")
    config = load_config(path)
    assert [epoch.label for epoch in config.epoch] == ["lining_1", "lining_2"]
    assert [epoch.file.resolve() for epoch in config.epoch] == [scan.resolve() for scan in scans]
    assert len(check_batch(path)) == 1


def test_scans_that_are_not_there_are_named_with_their_lines(tmp_path):
    path = write_starter(tmp_path / "start.toml", [tmp_path / "a.laz", tmp_path / "b.laz"])
    (tmp_path / "b.laz").mkdir()
    with pytest.raises(OptionError) as caught:
        check_batch(path)
    first, second = str(caught.value).splitlines()[1:]
    assert "epoch[1].file: required a scan file; got no such file" in first
    assert "epoch[2].file: required a scan file; got a folder" in second


def test_an_existing_file_is_not_replaced(tmp_path):
    path = tmp_path / "start.toml"
    path.write_text("mine", encoding="utf-8")
    with pytest.raises(OptionError, match="there already"):
        write_starter(path)
    assert path.read_text(encoding="utf-8") == "mine"


@pytest.mark.parametrize(("name", "scans"), [("scan.laz", []), ("start.toml", ["one.laz"])])
def test_a_call_that_was_meant_otherwise_is_refused(tmp_path, name, scans):
    with pytest.raises(OptionError):
        write_starter(tmp_path / name, [Path(scan) for scan in scans])
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("name", ["adit.toml", "wall.toml"])
def test_the_committed_batch_files_are_what_the_generator_gives(name):
    texts = demonstration_configs(clouds="../sample_clouds/", results="../results/")
    assert (ROOT / "configs" / name).read_text(encoding="utf-8") == texts[name]


def test_the_committed_batch_files_say_what_they_shall():
    adit, wall = (load_config(ROOT / "configs" / name) for name in ("adit.toml", "wall.toml"))
    assert [f"{a.label} {b.label}" for a, b in adit.pairs()] == ["march june", "march september"]
    assert [f"{a.label} {b.label}" for a, b in wall.pairs()] == ["march september"]
    assert (adit.strain.structure, wall.strain.structure) == ("tunnel", "wall")
    assert adit.neighbourhood.gauge_length == wall.neighbourhood.gauge_length == 0.8
    assert [str(epoch.date) for epoch in adit.epoch] == ["2031-03-04", "2031-06-10", "2031-09-12"]
    assert adit.epoch[0].file.name == "adit_2031-03-04.laz"
    assert adit.output.folder.resolve() == ROOT / "results" / "adit"
