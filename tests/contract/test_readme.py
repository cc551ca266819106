# SPDX-License-Identifier: MIT
"""README.md says what is true: its tables are those of the code, its commands exist, its Python runs."""

import json
import os
import re
import shlex
import subprocess
from pathlib import Path

import click
import numpy as np
import pytest

from scanstrain import terminal
from scanstrain.attributes import ATTRIBUTES
from scanstrain.cli import cli
from scanstrain.config import BatchConfig
from scanstrain.neighbourhood.result import STATUS_WORDS
from scanstrain.outputs import OUTPUTS
from scanstrain.outputs.folder import FIXED_NAMES
from scanstrain.outputs.words import OBSERVED_WORDS

ROOT = Path(__file__).parents[2]
README = (ROOT / "README.md").read_text(encoding="utf-8")
ALLOWED = {"README.md", "DEVELOPERS.md", "pyproject.toml", "scanstrain", "tests", "sample_clouds", "configs"}
MADE_BY_USE = {"results", "build", "dist"}
SHARED_OPTIONS = {"--json", "--quiet", "--verbose", "--help"}


def table(marker):
    """Rows of the table under a marker, its head left out."""
    lines = README.split(f"<!-- {marker} -->\n")[1].split("\n\n")[0].splitlines()
    return [[cell.strip() for cell in line.strip("| ").split(" | ")] for line in lines[2:]]


def command(marker):
    """Return the one line of the shell block under a marker."""
    lines = README.split(f"<!-- {marker} -->\n```sh\n")[1].split("\n```")[0].splitlines()
    assert len(lines) == 1
    return lines[0]


def commands(group=cli, path=("scanstrain",)):
    """Yield (words, command) of every command that does something."""
    for name, each in group.commands.items():
        if isinstance(each, click.Group):
            yield from commands(each, (*path, name))
        else:
            yield (*path, name), each


def section(words):
    """Text under the heading of a command."""
    found = re.search(rf"^### `{' '.join(words)}\b[^\n]*\n(.*?)(?=^##)", README, re.MULTILINE | re.DOTALL)
    assert found, f"no heading for {' '.join(words)}"
    return found[1]


def test_it_opens_with_one_paragraph_and_two_commands():
    title, paragraph, heading = README.split("\n\n")[:3]
    assert title == "# scanstrain"
    assert not paragraph.startswith(("#", "-", "|", "`"))
    assert heading == "## Two commands"
    assert (
        README.index("<!-- run -->") < README.index("<!-- test -->") < README.index("\n## ", README.index(heading) + 3)
    )


def test_the_attribute_table_is_the_one_that_is_written():
    assert [row[:3] for row in table("attributes")] == [[f"`{a.name}`", a.unit, a.dtype] for a in ATTRIBUTES]


def test_status_codes_and_observed_bits_are_those_of_the_program():
    assert table("status") == [[str(int(code)), word] for code, word in STATUS_WORDS.items()]
    bits = [[str(bit), str(1 << bit), word] for bit, word in enumerate(OBSERVED_WORDS)]
    assert table("observed") == bits


def test_every_file_of_a_result_is_named():
    rows = [row.split("`")[1] for row in README.split("\n") if row.startswith("| `")]
    assert {"strain_<attribute>.laz", "strain_<attribute>.ply", "strain_<attribute>.png"} <= set(rows)
    # strain.las belongs to folders of other versions, which are tidied all the same
    assert FIXED_NAMES - {"strain.las"} <= set(rows)
    assert len(OUTPUTS) == 13


@pytest.mark.parametrize(("words", "found"), [pytest.param(*each, id=" ".join(each[0])) for each in commands()])
def test_every_command_stands_there_with_its_options(words, found):
    options = {option for each in found.params if isinstance(each, click.Option) for option in each.opts}
    named = set(re.findall(r"^\| `(--[\w-]+)` \|", section(words), re.MULTILINE))
    assert named == {option for option in options if option.startswith("--")} - SHARED_OPTIONS


def test_every_command_line_that_is_shown_can_be_called():
    known = dict(commands())
    for block in re.findall(r"```sh\n(.*?)```", README, re.DOTALL):
        for line in re.findall(r"(?:^|/)(scanstrain .*)$", block, re.MULTILINE):
            words = shlex.split(line)
            path = next(tuple(words[:n]) for n in (3, 2) if tuple(words[:n]) in known)
            found = known[path]
            found.make_context(path[-1], words[len(path) :], resilient_parsing=False)


def test_exit_codes_are_those_of_the_program():
    text = README.split("### Exit codes\n")[1].split("\n## ")[0]
    listed = [int(code) for code in re.findall(r"^\| (\d+) \|", text, re.MULTILINE)]
    real = [0, terminal.FAILED, terminal.WRONG_CALL, terminal.PARTLY_FAILED, terminal.INTERRUPTED]
    assert listed == real


def test_the_options_of_the_batch_file_have_the_defaults_that_are_stated():
    real = []
    for stage, field in BatchConfig.model_fields.items():
        for name, option in getattr(field.annotation, "model_fields", {}).items():
            default = "required" if option.is_required() else json.dumps(option.default)
            default = {"null": "none", "required": "required"}.get(default, f"`{default}`")
            real.append([f"`{stage}.{name}`", default])
    assert [row[:2] for row in table("options")] == real


def test_the_batch_file_that_is_shown_is_valid(tmp_path):
    from scanstrain.config import load_config

    text = README.split("```toml\n")[1].split("```")[0]
    path = tmp_path / "job.toml"
    path.write_text(text, encoding="utf-8")
    assert [(a.label, b.label) for a, b in load_config(path).pairs()] == [("march", "september")]


def test_the_python_that_is_shown_runs(tmp_path, monkeypatch):
    """All blocks in one program; the scans that it reads are those that it makes, written as LAS files."""
    import laspy

    blocks = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    assert len(blocks) == 4
    in_memory, by_stage, files, one_by_one = blocks[2], blocks[3], blocks[0], blocks[1]
    names = {}
    exec(in_memory, names)
    assert np.nanmax(names["points"]["disp_n"]) == pytest.approx(0.0045, abs=0.0003)
    assert np.isnan(names["points"]["strain_u"]).all()
    exec(by_stage, names)
    assert set(names["data"]) == {"reference", "current", "registration", "field", "gauges", "points"}
    monkeypatch.chdir(tmp_path)
    for epoch in ("march", "september"):
        las = laspy.LasData(laspy.LasHeader(point_format=6, version="1.4"))
        las.header.scales = [1e-4] * 3
        las.x, las.y, las.z = (names[epoch][axis] for axis in "xyz")
        las.write(f"{epoch}.laz")
    exec(files, names)
    exec(one_by_one, names)
    assert {"strain.laz", "strain_tilt.laz", "strain_tilt.png"} <= {path.name for path in Path("result").iterdir()}
    assert np.isnan(names["strain"].values["strain_u"]).all()


def test_what_the_continuous_integration_runs_is_the_test_command():
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8")
    assert f"\n{command('test')} || exit\n" in script
    assert os.access(ROOT / ".ci" / "run", os.X_OK)
    assert subprocess.run(["bash", "-n", str(ROOT / ".ci" / "run")], check=False).returncode == 0


def test_the_first_command_runs_a_batch_file_that_is_there():
    last = shlex.split(command("run").split("&&")[-1])
    assert last[-2] == "run"
    assert (ROOT / last[-1]).is_file()


def test_every_link_leads_somewhere():
    for name in ("README.md", "DEVELOPERS.md"):
        text = re.sub(r"```.*?```|`[^`\n]*`", "", (ROOT / name).read_text(encoding="utf-8"), flags=re.DOTALL)
        for target in re.findall(r"\]\(([^)#]+)\)", text):
            assert (ROOT / target).exists(), f"{name}: {target}"


def test_nothing_else_stands_at_the_top():
    found = {path.name for path in ROOT.iterdir() if not path.name.startswith(".")}
    assert found - MADE_BY_USE == ALLOWED


def test_the_layout_for_developers_names_every_module():
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8").split("<!-- layout -->")[1].split("```")[1]
    named = re.findall(r"^ +([\w/]+\.py) +\S", text, re.MULTILINE)
    package = ROOT / "scanstrain"
    assert sorted(named) == sorted(path.relative_to(package).as_posix() for path in package.rglob("*.py"))
