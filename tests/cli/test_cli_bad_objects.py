# SPDX-License-Identifier: MIT
"""Objects that are not what the options say, through the program: one clear sentence each, and the batch goes on."""

from __future__ import annotations

import json
import runpy
from pathlib import Path

import pytest

from scanstrain.synthetic import Dome, Lining, Ovalisation, Scene, Sum, Wall, sample_epoch

FILES = runpy.run_path(str(Path(__file__).parents[1] / "scenes" / "scene_files.py"))
ORIGIN = (100.0, 200.0, 50.0)
RADIUS = 1.2


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """Two small scans each of a lining and of a wall, in one folder."""
    place = tmp_path_factory.mktemp("objects")
    scenes = {
        "lining": Scene(Lining(RADIUS, 1.5), Ovalisation(2e-3), origin=ORIGIN),
        "wall": Scene(Wall(2.0, 1.5), Sum((Dome(2e-3, (1.0, 0.75), 0.6),)), origin=ORIGIN),
    }
    for name, scene in scenes.items():
        for number in (0, 1):
            epoch = sample_epoch(
                scene, deformed=bool(number), spacing=0.03, noise=5e-4, intensity_noise=20.0, seed=5 + number
            )
            FILES["write_scan"](place / f"{name}_{number}.laz", epoch)
    return place


def pair(folder, name):
    return folder / f"{name}_0.laz", folder / f"{name}_1.laz"


def batch(folder, tmp_path, extra, *, names=("wall", "lining"), dates=(None,) * 4):
    """A batch file that compares each object with itself at another date."""
    lines = [extra, "[output]", f'folder = "{tmp_path / "results"}"', "report = false"]
    whens = iter(dates)
    for name in names:
        for number in (0, 1):
            lines += ["[[epoch]]", f'label = "{name}{number}"', f'file = "{folder / f"{name}_{number}.laz"}"']
            when = next(whens)
            lines += [f"date = {when}"] if when else []
    for name in names:
        lines += ["[[comparison]]", f'reference = "{name}0"', f'current = "{name}1"']
    path = tmp_path / "batch.toml"
    path.write_text("\n".join(lines), encoding="utf-8")
    return path


def one_error(said, code, *words):
    assert said.code == code
    assert len(said.errors) == 1, said.err
    for word in words:
        assert word in said.errors[0], said.errors[0]
    assert "Traceback" not in said.err


def test_a_plane_as_a_tunnel_fails_in_one_sentence_and_the_tunnel_beside_it_is_compared(call, folder, tmp_path):
    path = batch(folder, tmp_path, '[strain]\nstructure = "tunnel"\n[neighbourhood]\ngauge_length = 0.5')
    said = call("run", path, "--json")
    assert said.code == 3
    done = {each["name"]: each for each in json.loads(said.out)["comparisons"]}
    assert done["wall0_to_wall1"]["error"].count("required") == 1
    assert "tunnel" in done["wall0_to_wall1"]["error"]
    assert done["lining0_to_lining1"]["error"] is None
    assert (tmp_path / "results" / "lining0_to_lining1" / "strain.laz").is_file()
    assert not (tmp_path / "results" / "wall0_to_wall1").exists()


def test_an_axis_that_leaves_the_cloud(call, folder, tmp_path):
    x, y, z = ORIGIN
    path = batch(
        folder, tmp_path,
        f'[strain]\nstructure = "tunnel"\n[tunnel]\naxis = [[{x}, {y + 20}, {z}], [{x + 1.5}, {y + 20}, {z}]]',
        names=("lining",),
    )  # fmt: skip
    said = call("run", path)
    assert said.code == 3
    assert "axis" in said.err + said.out
    assert "Traceback" not in said.err


def test_a_thickness_of_zero_is_a_wrong_call(call, folder, tmp_path):
    said = call(
        "compare", *pair(folder, "lining"), "--structure", "tunnel", "--thickness", "0", "--out", tmp_path / "o"
    )
    one_error(said, 2, "thickness", "0")


def test_a_thickness_beyond_the_radius(call, folder, tmp_path):
    said = call(
        "compare", *pair(folder, "lining"), "--structure", "tunnel", "--thickness", "25", "--out", tmp_path / "o"
    )
    one_error(said, 2, "thickness", "radius of the tunnel, 1.20 m", "25 m")
    assert not (tmp_path / "o").exists()


@pytest.mark.parametrize(
    "zone",
    [
        "box = [[900.0, 900.0, 0.0], [901.0, 901.0, 1.0]]",
        "classes = [17]",
    ],
)
def test_a_zone_without_points(call, folder, tmp_path, zone):
    extra = f'[registration]\nstable_zones = ["far away"]\n[[zone]]\nname = "far away"\n{zone}'
    said = call("run", batch(folder, tmp_path, extra, names=("wall",)))
    assert said.code == 3
    assert "zone 'far away'" in said.err + said.out
    assert "Traceback" not in said.err


@pytest.mark.parametrize(
    ("trigger", "words"),
    [
        ('quantity = "strane_1"\nunit = "microstrain"', ("trigger", "did you mean 'strain_1'")),
        ('quantity = "disp_n"\nunit = "mrad"', ("trigger", "unit", "'mrad'")),
        ('quantity = "bend_1"\nunit = "microstrain"', ("trigger", "thickness")),
    ],
    ids=["unknown quantity", "wrong unit", "bending without a thickness"],
)
def test_triggers_that_no_run_can_judge(call, folder, tmp_path, trigger, words):
    extra = f'[[trigger]]\nname = "look"\n{trigger}\ndirection = "above"\nlevels = {{look = 1.0}}'
    one_error(call("run", batch(folder, tmp_path, extra, names=("wall",))), 2, *words)


def test_epochs_out_of_date_order(call, folder, tmp_path):
    path = batch(folder, tmp_path, "", names=("wall",), dates=("2031-05-01", "2031-04-01"))
    one_error(call("run", path), 2, "date", "2031-04-01 after 2031-05-01")


def test_a_wall_that_is_none_has_strains_but_no_lean_of_its_own(call, folder, tmp_path):
    """A lining taken for a wall: the surface is compared all the same, and a warning says what there is not."""
    path = batch(
        folder, tmp_path, '[strain]\nstructure = "wall"\n[neighbourhood]\ngauge_length = 0.5', names=("lining",)
    )
    said = call("run", path, "--json")
    assert said.code == 0, said.err
    summary = json.loads((tmp_path / "results" / "lining0_to_lining1" / "summary.json").read_text(encoding="utf-8"))
    assert summary["wall"] is None
    assert sum("No lean, profile or bulge of the wall" in each for each in summary["warnings"]) == 1
    assert summary["results"]["disp_n"]["share_observable"] > 0.5
