# SPDX-License-Identifier: MIT
"""What the configuration says about the datum reaches the registration, and bodies and set-ups come back."""

import runpy
from pathlib import Path

import numpy as np
import pytest

from scanstrain import compare_epochs
from scanstrain.config import CompareConfig
from scanstrain.datum import datum_options
from scanstrain.epoch import make_epoch
from scanstrain.errors import OptionError
from scanstrain.outputs.summary import summary
from scanstrain.registration import register

SCENES = runpy.run_path(str(Path(__file__).parents[1] / "registration_scenes.py"))
apply, motion, room, wall = (SCENES[name] for name in ("apply", "motion", "room", "wall"))
ORIGIN = np.array([1000.0, 2000.0, 50.0])
T_FILE = motion(20.0, 3.0)


@pytest.fixture(scope="module")
def epochs():
    """A room, and the same seen in another frame: `T_FILE` takes its file coordinates to the reference's."""
    rng = np.random.default_rng(2)
    a, b = room(rng, 30_000, noise=0.001) + ORIGIN, room(rng, 30_000, noise=0.001) + ORIGIN
    return make_epoch(a, origin=ORIGIN), make_epoch(apply(np.linalg.inv(T_FILE), b), origin=ORIGIN)


def found(epochs, **options):
    config = CompareConfig.model_validate({"registration": options})
    return register(*epochs, **datum_options(epochs[0], config))


def off(registration):
    places = ORIGIN + np.array([[-2.0, -1.5, -1.5], [2, 1.5, 1.5], [2, -1.5, 0]])
    seen = apply(np.linalg.inv(T_FILE), places)
    return np.abs(apply(registration.file_matrix(), seen) - places).max()


def test_a_matrix_in_file_coordinates_is_where_the_fit_begins(epochs, tmp_path):
    path = tmp_path / "motion.txt"
    shift = np.eye(4)
    shift[:3, 3] = ORIGIN
    np.savetxt(path, shift @ motion(0.2, 0.02) @ np.linalg.inv(shift) @ T_FILE)
    result = found(epochs, start="file", start_file=path)
    assert result.start == "file"
    assert off(result) < 0.3e-3


def test_targets_are_where_the_fit_begins_and_are_reported(epochs, tmp_path):
    places = ORIGIN + np.array([[-2.0, -1, -1], [2, 1.4, 1], [1.5, -1.2, 0.4], [-1.8, 1.2, 1.3], [0.3, 0.2, -1.4]])
    seen = apply(np.linalg.inv(T_FILE), places)
    seen[3, 2] += 0.05
    rows = [f"T{k},{','.join(map(str, np.r_[p, q]))}" for k, (p, q) in enumerate(zip(places, seen, strict=True))]
    path = tmp_path / "targets.csv"
    path.write_text("name,ref_x,ref_y,ref_z,cur_x,cur_y,cur_z\n" + "\n".join(rows), encoding="utf-8")
    result = found(epochs, start="targets", start_file=path)
    assert result.start == "targets"
    assert off(result) < 0.3e-3
    assert result.targets.blunders == ("T3",)
    assert any("2 mm were assumed" in said for said in result.targets.warnings)


def test_zones_say_what_is_stable_and_what_is_not(epochs):
    box = [(ORIGIN + np.array(corner)).tolist() for corner in ([-2.5, -2, -2], [2.5, 2, 0])]
    zone = {"name": "low", "box": box}
    config = {"zone": [zone], "registration": {"stable_zones": ["low"]}}
    stable = datum_options(epochs[0], CompareConfig.model_validate(config))["stable"]
    np.testing.assert_array_equal(stable, epochs[0].points[:, 2] <= 0)
    config["registration"] = {"excluded_zones": ["low"]}
    options = datum_options(epochs[0], CompareConfig.model_validate(config))
    assert options["stable"] == "auto"
    np.testing.assert_array_equal(options["excluded"], epochs[0].points[:, 2] <= 0)
    empty = {"zone": [{"name": "sky", "height": [900.0, 901.0]}], "registration": {"stable_zones": ["sky"]}}
    with pytest.raises(OptionError, match="zone 'sky'"):
        datum_options(epochs[0], CompareConfig.model_validate(empty))


def test_a_leaning_part_is_a_body_of_its_own_in_the_summary():
    """The right third of a wall leans forward by 3 mrad about its foot, as one piece; the rest stands."""
    rng = np.random.default_rng(4)
    a, b = (wall(rng, 60_000, noise=0.001, relief=0.0) for _ in range(2))
    foot, edge = a[:, 2].min(), a[:, 0].max() / 3
    b[:, 1] += np.where(b[:, 0] > edge, 0.003 * (b[:, 2] - foot), 0.0)
    box = [[edge + 0.15, -1.0, -3.0], [9.0, 1.0, 3.0]]
    config = {
        "neighbourhood": {"gauge_length": 0.25},
        "strain": {"structure": "wall", "free_side": [0.0, 5.0, 0.0]},
        "zone": [{"name": "right", "box": box}, {"name": "left", "box": [[-9.0, -1, -3], [edge - 0.15, 1, 3]]}],
    }
    current = make_epoch(b, origin=np.zeros(3), label="b", setup=(b[:, 0] > 0).astype(np.uint16))
    result = compare_epochs(make_epoch(a, origin=np.zeros(3), label="a"), current, CompareConfig.model_validate(config))
    content = summary(result)
    bodies = content["rigid_motion"]
    assert set(bodies) == {"whole object", "right", "left"}
    right = bodies["right"]
    assert right["verdict"] == "moved as one body"
    assert abs(right["lean"] - 0.003) < 3 * right["lean_sd"] < 0.001
    assert abs(bodies["left"]["lean"]) < 3 * bodies["left"]["lean_sd"]
    assert bodies["whole object"]["verdict"].startswith("deformed")
    assert content["registration"]["stable_ground"]["chosen_by"] == "auto"
    assert content["setups"]["reference"] == []
    assert [(seam["first"], seam["second"]) for seam in content["setups"]["current"]] == [(0, 1)]


def test_a_named_joint_is_measured_and_not_smeared():
    """The right half of a bare wall stands 1 mm forward in the second scan: a step, and no tilt beside it."""
    rng = np.random.default_rng(6)
    a, b = (wall(rng, 60_000, noise=0.001) for _ in range(2))
    b[:, 1] += np.where(b[:, 0] > 0, 0.001, 0.0)
    config = {
        "neighbourhood": {"gauge_length": 0.25},
        "strain": {"structure": "wall", "free_side": [0.0, 5.0, 0.0]},
        "joint": [{"name": "middle", "line": [[0.0, 0.0, -0.6], [0.0, 0.0, 0.6]]}],
    }
    epochs = (make_epoch(points, origin=np.zeros(3), label=name) for points, name in ((a, "a"), (b, "b")))
    content = summary(compare_epochs(*epochs, CompareConfig.model_validate(config)))
    whole = content["joints"][-1]
    assert whole["place"] == "whole"
    assert abs(abs(whole["step"]) - 0.001) < 4 * whole["step_sd"] < 0.0008
    assert whole["opening"] is None
    assert content["results"]["tilt"]["p95"] < 0.004
