# SPDX-License-Identifier: MIT
"""Wrong calls and wrong files: the right exit code, one plain sentence, nothing written, inputs untouched."""

import math

import pytest


def snapshot(folder):
    return {path: path.read_bytes() for path in folder.rglob("*") if path.is_file()}


@pytest.fixture
def refused(call, tmp_path):
    """Call with something wrong; return the one sentence."""

    def called(code, *arguments):
        before = snapshot(tmp_path)
        said = call(*arguments)
        assert said.code == code, said.err
        assert said.out == ""
        assert len(said.errors) == 1, said.err
        assert "Traceback" not in said.err
        assert snapshot(tmp_path) == before
        return said.errors[0]

    return called


COMPARE = ("compare", "a.las", "b.las", "--out", "result")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("ru", "batch.toml"), "No such command 'ru'. Did you mean 'run'?"),
        (("compare", "a.las", "b.las"), "Missing option '--out'"),
        (("compare", "a.las", "--out", "x"), "Missing argument 'CURRENT'"),
        ((*COMPARE, "--gauge-lenght", "1"), "--gauge-length"),
        (("run", "batch.toml", "--workers", "0"), "'--workers'"),
        (("run", "batch.toml", "--workers", "many"), "'--workers'"),
        (("inspect",), "Missing argument"),
        (("colour", "strain.laz"), "Missing option '--by'"),
        (("colour", "strain.laz", "--by", "tilt", "--limits", "1"), "--limits"),
        (("config", "chek", "batch.toml"), "'check'"),
    ],
)
def test_unknown_and_missing_words_of_the_command_line(refused, arguments, words):
    assert words in refused(2, *arguments)


def test_no_command_at_all_shows_the_help_and_is_a_wrong_call(call):
    said = call()
    assert said.code == 2
    assert "Usage: scanstrain" in said.err


@pytest.mark.parametrize(
    ("option", "value", "got"),
    [
        ("--gauge-length", "-1", "-1"),
        ("--gauge-length", "0", "0"),
        ("--gauge-length", "nan", "NaN"),
        ("--gauge-length", "inf", "Infinity"),
        ("--gauge-length", "1e999", "Infinity"),
        ("--gauge-length", "0,6", '"0,6"'),
        ("--gauge-length", "long", '"long"'),
        ("--gauge-spacing", "-0.1", "-0.1"),
        ("--thickness", "0", "0"),
        ("--thickness", "auto", '"auto"'),
        ("--structure", "bridge", '"bridge"'),
        ("--measure", "engineering", '"engineering"'),
        ("--colour-by", "stress", "'stress'"),
        ("--no-data", "0", "0"),
    ],
)
def test_nonsense_in_an_option_names_the_option_what_it_takes_and_what_came(refused, fake, scans, option, value, got):
    sentence = refused(2, *COMPARE, option, value)
    assert sentence.startswith(f"Error: {option}: required ")
    assert f"got {got}" in sentence
    assert fake.configs == []


@pytest.mark.parametrize(
    ("options", "word"),
    [
        (("--gauge-length", "0.2", "--gauge-spacing", "0.5"), "--gauge-spacing: required at most the gauge_length"),
        (("--colour-by", "bend_1"), "--colour-by: required strain.thickness"),
    ],
)
def test_contradictory_options(refused, fake, scans, options, word):
    assert word in refused(2, *COMPARE, *options)


def test_every_wrong_option_is_reported_at_once(call, fake, scans):
    said = call(*COMPARE, "--gauge-length", "-1", "--structure", "bridge")
    assert said.code == 2
    assert "--gauge-length: " in said.err
    assert "--structure: " in said.err


@pytest.mark.parametrize("place", ["a.las", "b.las", "notes.txt", "notes.txt/below"])
def test_the_result_folder_is_a_file_or_an_input(refused, fake, scans, tmp_path, place):
    (tmp_path / "notes.txt").write_text("mine", encoding="utf-8")
    sentence = refused(2, "compare", "a.las", "b.las", "--out", place)
    assert place.split("/")[0] in sentence
    assert "choose another output folder" in sentence
    assert fake.configs == []


def test_the_result_would_take_the_place_of_an_input(refused, fake, scans, tmp_path):
    scans[0].rename(tmp_path / "strain.laz")
    assert "strain.laz" in refused(2, "compare", "strain.laz", "b.las", "--out", ".")


def test_the_folder_of_the_inputs_serves_where_nothing_is_overwritten(call, fake, scans, tmp_path):
    before = snapshot(tmp_path)
    assert call("compare", "a.las", "b.las", "--out", ".").code == 0
    after = snapshot(tmp_path)
    assert {path: after[path] for path in before} == before
    assert (tmp_path / "summary.json").exists()


def test_a_folder_that_cannot_be_written_to(refused, fake, scans, tmp_path, monkeypatch):
    import os

    monkeypatch.setattr(os, "access", lambda path, mode: False)
    assert "no permission" in refused(2, *COMPARE)


@pytest.mark.parametrize(
    ("arguments", "code"),
    [
        (("inspect", "none.las"), 1),
        (("colour", "none.laz", "--by", "tilt"), 1),
        (("run", "none.toml"), 2),
        (("config", "check", "none.toml"), 2),
    ],
)
def test_a_file_that_is_not_there(call, arguments, code):
    said = call(*arguments)
    assert said.code == code
    assert len(said.errors) == 1
    assert "none." in said.errors[0]


def test_an_attribute_that_a_cloud_does_not_have(refused, scans):
    assert "tilt" in refused(2, "colour", "a.las", "--by", "tillt")


@pytest.mark.parametrize(
    ("extra", "key", "word"),
    [
        ("[neighbourhood]\ngauge_lenght = 0.6\n", "neighbourhood.gauge_lenght", "did you mean gauge_length?"),
        ("[neighbourhood]\ngauge_length = -0.6\n", "neighbourhood.gauge_length", "a number above 0 [m]"),
        ("[neighbourhood]\ngauge_length = nan\n", "neighbourhood.gauge_length", "a number above 0 [m]"),
        ('[neighbourhood]\ngauge_length = "0.6"\n', "neighbourhood.gauge_length", 'got "0.6"'),
        ("[neighbourhood]\ngauge_length = 0.1\ngauge_spacing = 0.2\n", "neighbourhood.gauge_spacing", "at most"),
        ("[strian]\n", "strian", "did you mean strain?"),
        ('[[comparison]]\nreference = "a"\ncurrent = "b"\n', "comparison", "both"),
    ],
)
@pytest.mark.parametrize("command", [("run",), ("config", "check")])
def test_a_faulty_batch_file(refused, fake, batch_file, command, extra, key, word):
    path = batch_file(extra)
    sentence = refused(2, *command, path)
    assert sentence.startswith(f"Error: {path}:")
    assert f": {key}: " in sentence
    assert word in sentence
    assert fake.configs == []


def test_a_batch_file_with_a_scan_that_is_not_there(refused, batch_file, scans):
    path = batch_file()
    scans[1].unlink()
    assert f"{path}:9: epoch[2].file: required a scan file; got no such file" in refused(2, "config", "check", path)


def test_only_a_label_that_is_not_there(refused, fake, batch_file):
    assert "did you mean 'a_to_b'" in refused(2, "run", batch_file(), "--only", "a_to_bb")


@pytest.mark.parametrize(("error", "word"), [(MemoryError(), "memory"), (ZeroDivisionError("by zero"), "by zero")])
def test_unforeseen_errors_end_in_a_sentence_and_exit_1(refused, call, fake, scans, error, word):
    fake.broken["b.las"] = error
    assert word in refused(1, "--quiet", *COMPARE)
    assert "Traceback" in call(*COMPARE, "--verbose").err


def test_a_disk_that_is_full_leaves_nothing(refused, fake, scans, monkeypatch):
    import errno

    def full(source, target, values, **options):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr("scanstrain.io.write_result_cloud", full)
    sentence = refused(1, *COMPARE)
    assert "No space left on device" in sentence
    assert "free some space" in sentence


def test_numbers_stay_numbers():
    from scanstrain.cli import NumberOrWord

    convert = NumberOrWord().convert
    assert convert("0.6", None, None) == 0.6
    assert math.isnan(convert("nan", None, None))
    assert convert("auto", None, None) == "auto"
