# SPDX-License-Identifier: MIT
"""Batch files: every fault at once, on its line, with a way out."""

import datetime as dt

import pytest

from scanstrain.config import load_config
from scanstrain.config.toml_faults import line_numbers, line_of
from scanstrain.errors import OptionError

GOOD = """\
[output]
folder = "results"

[[epoch]]
label = "a"
file = "a.laz"
date = 2031-03-04

[[epoch]]
label = "b"
file = "b.laz"
date = 2031-06-10

[[epoch]]
label = "c"
file = "c.laz"
"""


@pytest.fixture
def load(tmp_path):
    def loaded(text, *, encoding="utf-8"):
        path = tmp_path / "batch.toml"
        path.write_bytes(text.encode(encoding))
        return load_config(path)

    return loaded


@pytest.fixture
def said(load, tmp_path):
    """Lines of the message about a faulty text, the path of the file cut off."""

    def lines(text):
        with pytest.raises(OptionError) as caught:
            load(text)
        assert caught.value.exit_code == 2
        return [line.replace(f"{tmp_path}/", "") for line in str(caught.value).splitlines()]

    return lines


def names(config):
    return [(reference.label, current.label) for reference, current in config.pairs()]


def test_paths_start_at_the_file(load, tmp_path):
    config = load(GOOD.replace('"c.laz"', '"/scans/c.laz"'))
    assert config.epoch[0].file == tmp_path / "a.laz"
    assert str(config.epoch[2].file) == "/scans/c.laz"
    assert config.output.folder == tmp_path / "results"
    assert config.epoch[0].date == dt.date(2031, 3, 4)
    assert config.epoch[2].date is None


@pytest.mark.parametrize(
    ("how", "pairs"),
    [
        ("", [("a", "b"), ("a", "c")]),
        ('comparisons = "first"\n', [("a", "b"), ("a", "c")]),
        ('comparisons = "previous"\n', [("a", "b"), ("b", "c")]),
    ],
)
def test_which_pairs_are_compared(load, how, pairs):
    assert names(load(how + GOOD)) == pairs


def test_chosen_pairs_keep_their_order(load):
    pairs = '[[comparison]]\nreference = "b"\ncurrent = "c"\n[[comparison]]\nreference = "a"\ncurrent = "c"\n'
    assert names(load(GOOD + pairs)) == [("b", "c"), ("a", "c")]


def test_options_for_one_comparison_leave_the_folder_out(load):
    config = load(GOOD + '[strain]\nstructure = "tunnel"\n')
    single = config.compare_config()
    assert single.strain.structure == "tunnel"
    assert "folder" not in single.model_dump()["output"]


def test_every_fault_is_reported_at_once_on_its_line(said):
    text = """\
comparisons = "frist"
[output]
folder = 3
colour_by = "dispn"
[[epoch]]
label = "a b"
file = "a.laz"
[[epoch]]
label = "b"
file = "a.laz"
dat = 2031-01-01
[[comparison]]
reference = "b"
current = "z"
[neighbourhood]
gauge_length = 0.1
gauge_spacing = 0.2
gage_length = 1
[strain]
seed = 4
"""
    lines = said(text)
    assert lines[0] == "batch.toml has 10 faults:"
    starts = [line.split(": ", 2)[:2] for line in lines[1:]]
    assert starts == [
        ["batch.toml:1", "comparisons"],
        ["batch.toml:3", "output.folder"],
        ["batch.toml:4", "output.colour_by"],
        ["batch.toml:6", "epoch[1].label"],
        ["batch.toml:10", "epoch[2].file"],
        ["batch.toml:11", "epoch[2].dat"],
        ["batch.toml:14", "comparison[1].current"],
        ["batch.toml:17", "neighbourhood.gauge_spacing"],
        ["batch.toml:18", "neighbourhood.gage_length"],
        ["batch.toml:20", "strain.seed"],
    ]
    assert "(did you mean first?)" in lines[1]
    assert "did you mean 'disp_n'" in lines[3]
    assert "(did you mean date?)" in lines[6]
    assert "(did you mean gauge_length?)" in lines[9]
    assert "it belongs in [registration]" in lines[10]


def test_a_single_fault_is_a_single_line(said):
    assert said(GOOD + "[strain]\nthickness = -0.3\n") == [
        "batch.toml:18: strain.thickness: required a number above 0 [m]; got -0.3; correct it or leave it out."
    ]


@pytest.mark.parametrize(
    ("change", "line", "key", "word"),
    [
        (('label = "b"', 'label = "A"'), 10, "epoch[2].label", "'A' beside 'a'"),
        (('"b.laz"', '"a.laz"'), 11, "epoch[2].file", "again, which is epoch 'a'"),
        (("2031-06-10", "2031-01-10"), 12, "epoch[2].date", "2031-03-04"),
        (("2031-06-10", '"2031-06-10"'), 12, "epoch[2].date", "without quotes"),
        (("2031-06-10", "2031-06-10T08:00:00"), 12, "epoch[2].date", "without quotes"),
        (('label = "b"', 'label = "../b"'), 10, "epoch[2].label", "letters, digits"),
        (('folder = "results"', ""), 1, "output.folder", "got nothing"),
        (("[output]", "[outputs]"), 1, "outputs", "did you mean output?"),
    ],
)
def test_contradictory_epochs(said, change, line, key, word):
    lines = said(GOOD.replace(*change))
    found = [each for each in lines if each.startswith(f"batch.toml:{line}: {key}: ")]
    assert len(found) == 1
    assert word in found[0]


@pytest.mark.parametrize(
    ("pair", "key", "word"),
    [
        (("a", "a"), "current", "against itself"),
        (("b", "a"), "reference", "earlier epoch"),
        (("a", "bb"), "current", "did you mean 'b'"),
        (("nobody", "b"), "reference", "the labels are a, b, c"),
    ],
)
def test_impossible_pairs(said, pair, key, word):
    lines = said(GOOD + '[[comparison]]\nreference = "{}"\ncurrent = "{}"\n'.format(*pair))
    assert len(lines) == 1
    assert f"comparison[1].{key}: " in lines[0]
    assert word in lines[0]


def test_a_repeated_pair_and_two_ways_to_choose(said):
    pair = '[[comparison]]\nreference = "a"\ncurrent = "b"\n'
    assert "comparison[2].current: required each comparison once" in said(GOOD + 2 * pair)[0]
    assert (
        "required either comparisons or [[comparison]] tables; got both"
        in said('comparisons = "first"\n' + GOOD + pair)[0]
    )


def test_one_epoch_is_too_few(said):
    lines = said(GOOD.split("[[epoch]]")[0] + '[[epoch]]\nlabel = "a"\nfile = "a.laz"\n')
    assert lines == [
        "batch.toml:4: epoch: required at least 2 tables, each under its own [[...]] line; got 1 of them; correct it."
    ]


@pytest.mark.parametrize(
    ("line", "word"),
    [
        (r'folder = "C:\Users\results"', "single quotes"),
        ("gauge = .5", "digit before the decimal point"),
        ("gauge = 1,5", "not a comma"),
        ("gauge = 1.", "digit after the decimal point"),
        ("flag = True", "small letters"),
        ("structure = wall", "quotes"),
        ("structure: wall", "equals sign"),
        ("a = 1\na = 2", "twice"),
        ("[x]\n[x]", "twice"),
    ],
)
def test_slips_of_syntax_get_a_line_and_a_hint(said, line, word):
    lines = said(f"# a remark\n{line}\n")
    assert len(lines) == 1
    assert lines[0].startswith(f"batch.toml:{2 + line.count(chr(10))}: ")
    assert word in lines[0]


def test_a_text_that_ends_too_early_is_blamed_on_its_last_line(said):
    assert said("a = [1,\n")[0].startswith("batch.toml:1: ")


def test_a_byte_order_mark_does_no_harm(load):
    assert len(load(GOOD, encoding="utf-8-sig").epoch) == 3


def test_what_is_no_text_is_refused(load):
    with pytest.raises(OptionError, match="required text in UTF-8"):
        load(GOOD + "# Ä", encoding="utf-16")


def test_a_missing_file_and_a_folder_are_refused(tmp_path):
    with pytest.raises(OptionError, match="no such file"):
        load_config(tmp_path / "none.toml")
    with pytest.raises(OptionError, match="is a directory"):
        load_config(tmp_path)


def test_lines_of_keys_in_all_their_forms():
    text = '''\
title = """
[not.a.table]
x = 1
"""
registration.seed = 3 # dotted
"quoted" = 1
[a.b]
x = { y = 1 }
[[c]]
d = 1
[[c]]
d = 2
'''
    numbers = line_numbers(text)
    assert line_of(numbers, ("registration", "seed")) == 5
    assert line_of(numbers, ("quoted",)) == 6
    assert line_of(numbers, ("a", "b", "x", "y")) == 8
    assert line_of(numbers, ("c", 1, "d")) == 12
    assert line_of(numbers, ("c", 1, "missing")) == 11
    assert line_of(numbers, ("nowhere",)) == 1
    assert ("x",) not in numbers
