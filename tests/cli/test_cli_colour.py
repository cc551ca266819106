# SPDX-License-Identifier: MIT
"""`scanstrain colour` on real clouds, and what it and a batch file say to colours that cannot be."""

import runpy
from dataclasses import replace
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.io import read_scan
from scanstrain.outputs import write_result

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A result of 300 points, and beside it the scan that it came from."""
    place = tmp_path_factory.mktemp("colour")
    made = MADE["make_result"](current=place / "wall_1.laz")
    header = laspy.LasHeader(point_format=6, version="1.4")
    header.scales, header.offsets = [0.0001] * 3, made.reference.origin
    las = laspy.LasData(header)
    las.xyz = made.reference.points + made.reference.origin
    las.write(place / "wall_0.laz")
    reference = read_scan(place / "wall_0.laz", origin=MADE["ORIGIN"])
    write_result(replace(made, reference=reference), place / "out", report=False)
    return place


def test_clouds_and_key_are_written_in_the_colours_that_were_asked_for(call, folder, tmp_path):
    said = call("colour", folder / "out" / "strain.laz", "--by", "tilt", "--limits", "0", "0.002", "--map", "batlow",
                "--out", tmp_path / "maps")  # fmt: skip
    assert said.code == 0, said.err
    assert [Path(line).name for line in said.out.splitlines()] == [
        f"strain_tilt.{kind}" for kind in ("laz", "ply", "png")
    ]
    from cmcrameri import cm

    las = laspy.read(tmp_path / "maps" / "strain_tilt.laz")
    tilt = np.asarray(las["tilt"], float)
    seen = np.isfinite(tilt)
    rgb = np.column_stack([las.red, las.green, las.blue])[seen] / 257
    assert np.abs(rgb - np.round(255 * cm.batlow(tilt[seen] / 0.002)[:, :3])).max() <= 6


@pytest.mark.parametrize(
    ("cloud", "options", "said"),
    [
        ("out/strain.laz", ("--by", "tillt"), "did you mean 'tilt'"),
        ("out/strain.laz", ("--by", "tilt", "--map", "batlov"), "did you mean 'batlow'"),
        ("out/strain.laz", ("--by", "tilt", "--map", "vik"), "colour map of tilt"),
        ("out/strain.laz", ("--by", "tilt", "--limits", "0.002", "0"), "the lower one first"),
        ("out/strain.laz", ("--by", "disp_n", "--limits", "0", "0.002"), "symmetric about zero"),
        ("out/strain.laz", ("--by", "status", "--limits", "0", "1"), "because it is a code"),
        ("wall_0.laz", ("--by", "tilt"), "required a cloud with results; got none in it; give a strain.laz"),
        ("out/strain_disp_n.laz", ("--by", "tilt"), "colour strain.laz in the same folder"),
        ("old/strain.laz", ("--by", "tilt"), "compare again if it was made by another version"),
    ],
)
def test_what_cannot_be_is_said_in_one_sentence(call, folder, tmp_path, cloud, options, said):
    old = folder / "old"
    if not old.exists():  # as a version would have left it that knew one attribute only
        old.mkdir()
        (old / "strain.laz").write_bytes((folder / "out" / "strain_disp_n.laz").read_bytes())
    answer = call("colour", folder / cloud, *options, "--out", tmp_path / "maps")
    assert answer.code in (1, 2)
    (line,) = answer.errors
    assert said in line
    assert "Traceback" not in answer.err
    assert not (tmp_path / "maps").exists()


@pytest.mark.parametrize(
    ("lines", "key", "said"),
    [
        ('colour_by = "tillt"', "output.colour_by", "did you mean"),
        ('colour_map = "rome"', "output.colour_map", "did you mean"),
        ('colour_by = "status"\ncolour_map = "vik"', "output.colour_map", "code"),
        ("colour_limits = [0.01, -0.01]", "output.colour_limits", "lower one first"),
        ("colour_limits = [0.0, 0.01]", "output.colour_limits", "symmetric"),
    ],
)
def test_a_batch_file_is_told_the_same(call, tmp_path, lines, key, said):
    for name in "ab":
        (tmp_path / f"{name}.laz").touch()
    epochs = "".join(f'[[epoch]]\nlabel = "{name}"\nfile = "{name}.laz"\n' for name in "ab")
    (tmp_path / "job.toml").write_text(f'{epochs}[output]\nfolder = "out"\n{lines}\n', encoding="utf-8")
    answer = call("run", "job.toml")
    assert answer.code == 2
    assert key in answer.err
    assert said in answer.err
    assert not (tmp_path / "out").exists()
