# SPDX-License-Identifier: MIT
"""The stages inside somebody else's pipeline: found by entry point, chained over plain arrays, silent, picklable."""

from __future__ import annotations

import json
import multiprocessing
import pickle
import subprocess
import sys
from concurrent.futures import ProcessPoolExecutor
from importlib.metadata import entry_points

import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.errors import OptionError, ScanstrainError
from scanstrain.plugin import annotate
from scanstrain.synthetic import Dome, RandomField, Scene, Still, Wall, sample_epoch

ORIGIN = np.array([482310.0, 5391270.0, 86.0])
STAGES = ("registration", "neighbourhood", "strain")
OPTIONS = {"gauge_length": 0.4, "gauge_spacing": 0.1}
BULGE = 0.006
NAMES = {a.name for a in ATTRIBUTES}

STRANGER = """
import io, json, sys
from contextlib import redirect_stderr, redirect_stdout
from importlib.metadata import entry_points
import numpy as np

stored = np.load(sys.argv[1])
data = {epoch: {name: stored[f"{epoch}_{name}"] for name in ("x", "y", "z", "intensity")}
        for epoch in ("reference", "current")}
stages = {point.name: point.load() for point in entry_points(group=sys.argv[2])}
said = io.StringIO()
with redirect_stdout(said), redirect_stderr(said):
    data = stages["registration"](data)
    data = stages["neighbourhood"](data, **json.loads(sys.argv[3]))
    data = stages["strain"](data, structure="wall")
np.savez(sys.argv[4], **data["points"])
print(json.dumps({
    "stages": sorted(stages),
    "keys": sorted(data),
    "said": said.getvalue(),
    "plain": all(type(v) is np.ndarray for v in data["points"].values()),
}))
"""


def skin(wall, rms, seed):
    return RandomField((wall.length, wall.height), rms=rms, correlation_length=0.06, seed=seed)


def epoch_arrays(deformed):
    """Four walls around a yard, one of which bulges a little. Survey coordinates."""
    walls = (
        (Wall(2.0, 2.0), Dome(BULGE, (1.0, 1.0), 0.8)),
        (Wall(1.5, 2.0, corner=(0.0, -1.5, 0.0), bearing=np.pi / 2), Still()),
        (Wall(1.5, 2.0, corner=(2.0, 0.0, 0.0), bearing=-np.pi / 2), Still()),
        (Wall(2.0, 2.0, corner=(2.0, -1.5, 0.0), bearing=np.pi), Still()),
    )
    points, intensity = [], []
    for number, (wall, motion) in enumerate(walls):
        scene = Scene(wall, motion, relief=skin(wall, 0.002, number), texture=skin(wall, 0.2, 10 + number))
        epoch = sample_epoch(scene, deformed=deformed, spacing=0.02, noise=3e-4, seed=2 * number + deformed)
        points.append(epoch.points)
        intensity.append(epoch.intensity)
    x, y, z = (np.concatenate(points) + ORIGIN).T
    return {"x": x, "y": y, "z": z, "intensity": np.concatenate(intensity).astype(np.uint16)}


@pytest.fixture(scope="module")
def arrays():
    return epoch_arrays(False), epoch_arrays(True)


@pytest.fixture(scope="module")
def annotated(arrays):
    return annotate(*arrays, structure="wall", **OPTIONS)


def at_the_bulge(reference):
    local = np.stack([reference[c] for c in "xyz"], axis=1) - ORIGIN
    return (np.abs(local[:, 1]) < 0.02) & (np.hypot(local[:, 0] - 1.0, local[:, 2] - 1.0) < 0.05)


def assert_equal(one, other):
    assert set(one) == set(other) == NAMES
    for name in one:
        np.testing.assert_array_equal(one[name], other[name], err_msg=name)


def test_the_three_stages_are_published():
    assert {point.name for point in entry_points(group="scanstrain.stages")} == set(STAGES)


def test_a_stranger_finds_the_stages_and_chains_them(arrays, annotated, tmp_path):
    assert "scanstrain" not in STRANGER
    stored = {
        f"{epoch}_{k}": v for epoch, a in zip(("reference", "current"), arrays, strict=True) for k, v in a.items()
    }
    np.savez(tmp_path / "scans.npz", **stored)
    call = [sys.executable, "-c", STRANGER, "scans.npz", "scanstrain.stages", json.dumps(OPTIONS), "points.npz"]
    done = subprocess.run(call, cwd=tmp_path, capture_output=True, text=True, timeout=300, check=False)
    assert done.returncode == 0, done.stderr
    report = json.loads(done.stdout)
    assert report["stages"] == sorted(STAGES)
    assert {"reference", "current", "registration", "field", "gauges", "points"} <= set(report["keys"])
    assert report["said"] == ""
    assert report["plain"]
    assert_equal(dict(np.load(tmp_path / "points.npz")), annotated)


def test_annotate_gives_every_attribute_at_every_point(arrays, annotated):
    assert list(annotated) == [a.name for a in ATTRIBUTES]
    for a in ATTRIBUTES:
        assert annotated[a.name].shape == arrays[0]["x"].shape, a.name
        assert annotated[a.name].dtype == a.numpy_dtype, a.name


def test_annotate_finds_the_bulge_and_leaves_the_rest_still(arrays, annotated):
    top = at_the_bulge(arrays[0])
    assert np.nanmedian(annotated["disp_n"][top]) == pytest.approx(BULGE, rel=0.1)
    assert annotated["discovery"][top].all()
    rest = np.abs(arrays[0]["y"] - ORIGIN[1]) > 0.5
    assert np.nanmedian(np.abs(annotated["disp_n"][rest])) < 1e-4


def test_structured_arrays_and_plain_mappings_give_the_same(arrays, annotated):
    def structured(a):
        out = np.empty(len(a["x"]), dtype=[(name, values.dtype) for name, values in a.items()])
        for name, values in a.items():
            out[name] = values
        return out

    assert_equal(annotate(*map(structured, arrays), structure="wall", **OPTIONS), annotated)


def test_annotate_touches_nothing_and_says_nothing(arrays, capfd):
    before = [{name: values.copy() for name, values in a.items()} for a in arrays]
    for a in arrays:
        for values in a.values():
            values.flags.writeable = False
    try:
        annotate(*arrays, **OPTIONS)
    finally:
        for a in arrays:
            for values in a.values():
                values.flags.writeable = True
    assert capfd.readouterr() == ("", "")
    for old, new in zip(before, arrays, strict=True):
        for name in old:
            np.testing.assert_array_equal(old[name], new[name])


def test_annotate_works_in_worker_processes(arrays, annotated):
    spawn = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(1, mp_context=spawn) as pool:
        assert_equal(pool.submit(annotate, *arrays, structure="wall", **OPTIONS).result(timeout=300), annotated)


def test_what_the_stages_add_can_be_pickled(arrays):
    stages = {point.name: point.load() for point in entry_points(group="scanstrain.stages")}
    data = {"reference": arrays[0], "current": arrays[1]}
    for name in STAGES:
        given = dict(data)
        data = stages[name](data, **(OPTIONS if name == "neighbourhood" else {}))
        assert set(given) < set(data), name
        data = pickle.loads(pickle.dumps(data))
    assert set(data["points"]) == NAMES == set(data["gauges"])


@pytest.mark.parametrize(
    ("call", "said"),
    [
        (lambda a, b: annotate({"x": a["x"], "y": a["y"]}, b), "no z"),
        (lambda a, b: annotate(a, b, gauge_lenght=0.5), "did you mean gauge_length"),
        (lambda a, b: annotate(a, b, gauge_length=-1.0), "gauge_length"),
        (lambda a, b: stage("strain")({"reference": a, "current": b}), "neighbourhood stage first"),
        (lambda a, b: stage("registration")({"reference": a}), "'current'"),
    ],
)
def test_wrong_calls_are_refused_in_one_sentence(arrays, call, said):
    with pytest.raises(OptionError) as refused:
        call(*arrays)
    assert said in str(refused.value)


def test_unusable_arrays_are_refused(arrays):
    reference, current = arrays
    few = {name: values[:50] for name, values in current.items()}
    bad = {**current, "z": np.where(np.arange(len(current["z"])) == 7, np.nan, current["z"])}
    for wrong, said in ((few, "at least 100 points"), (bad, "NaN")):
        with pytest.raises(ScanstrainError, match=said):
            annotate(reference, wrong, **OPTIONS)


def stage(name):
    return next(point.load() for point in entry_points(group="scanstrain.stages") if point.name == name)
