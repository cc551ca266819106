# SPDX-License-Identifier: MIT
"""A comparison in tiles gives what the one in one piece gives: to the border, across a joint, with parts missing."""

import tempfile

import laspy
import numpy as np
import pytest

import scanstrain
from scanstrain.config import config_from_options
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError
from scanstrain.pipeline import compare_files
from scanstrain.synthetic import Dome, RandomField, Scene, Wall, sample_epoch

LENGTH, HEIGHT, SPACING = 3.2, 0.9, 0.011
ORIGIN = np.array([3000.0, 500.0, 20.0])
GAUGE = 0.16
OPTIONS = {
    "gauge_length": GAUGE, "gauge_spacing": 0.08, "structure": "wall", "assume_same_crs": True, "stable": "all",
    "required_strain_sd": 0.02, "free_side": (3001.5, 490.0, 20.5),
}  # fmt: skip
EQUAL = 1e-6
"""Largest difference of a strain."""


def write_scan(path, epoch):
    header = laspy.LasHeader(version="1.4", point_format=6)
    header.scales, header.offsets = np.full(3, 1e-4), ORIGIN
    las = laspy.LasData(header)
    las.xyz = epoch.points + ORIGIN
    las.intensity = np.round(epoch.intensity).astype(np.uint16)
    las.write(path)


@pytest.fixture(scope="module")
def scans(tmp_path_factory):
    """A textured wall that bulges; the current epoch does not show its last tenth."""
    folder = tmp_path_factory.mktemp("scans")
    wall = Wall(LENGTH, HEIGHT)
    extent = (LENGTH, HEIGHT)
    scene = Scene(
        wall, Dome(0.004, (1.4, 0.4), 0.6), relief=RandomField(extent, rms=5e-4, correlation_length=0.05, seed=1),
        texture=RandomField(extent, rms=0.2, correlation_length=0.05, seed=2),
    )  # fmt: skip
    for name, deformed in (("a", False), ("b", True)):
        epoch = sample_epoch(scene, deformed=deformed, spacing=SPACING, intensity_noise=20.0, seed=3 + deformed)
        keep = np.ones(len(epoch), bool) if name == "a" else epoch.points[:, 0] < 0.9 * LENGTH
        order = np.random.default_rng(7).permutation(np.flatnonzero(keep))
        write_scan(folder / f"{name}.laz", Epoch(
            points=epoch.points[order], origin=np.zeros(3), intensity=epoch.intensity[order]))  # fmt: skip
    return folder / "a.laz", folder / "b.laz"


def test_tiles_give_what_one_piece_gives(scans, monkeypatch, tmp_path):
    line = [[x, ORIGIN[1], ORIGIN[2] + 0.45] for x in (ORIGIN[0] + 0.3, ORIGIN[0] + 2.6)]
    joint = [{"name": "bed joint", "line": line}]
    config = config_from_options({k: v for k, v in OPTIONS.items() if k != "assume_same_crs"})
    joined = type(config).model_validate({**config.model_dump(), "joint": joint})
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    results = []
    for tiles in (False, True):
        options = joined.neighbourhood.model_copy(update={"tiles": tiles, "tile_points": 10_000})
        own = joined.model_copy(update={"neighbourhood": options})
        results.append(compare_files(*scans, own, assume_same_crs=True))
    one, tiled = results
    np.testing.assert_array_equal(tiled.field.position, one.field.position)
    np.testing.assert_array_equal(tiled.field.status, one.field.status)
    np.testing.assert_array_equal(tiled.field.observable, one.field.observable)
    assert len(np.unique(one.field.status)) > 1
    for name in ("displacement", "gradient"):
        np.testing.assert_allclose(getattr(tiled.field, name), getattr(one.field, name), atol=EQUAL, rtol=0)
    assert np.isfinite(one.field.gradient[:, 0, 0]).mean() > 0.5
    for name, values in one.points.items():
        there = np.asarray(tiled.points[name])
        assert there.dtype == values.dtype
        # Standard errors and p-values follow the values; curvatures are larger than strains by 1 / length.
        np.testing.assert_allclose(there, values, atol=EQUAL / GAUGE, rtol=1e-3, err_msg=name)
    np.testing.assert_allclose(tiled.joints[0].values, one.joints[0].values, atol=EQUAL)
    assert tiled.warnings == one.warnings

    # Points keep their order, in the file as well, and nothing stays behind.
    clouds = [scanstrain.write_result(result, tmp_path / str(k))[0] for k, result in enumerate(results)]
    first, second = (laspy.read(cloud) for cloud in clouds)
    np.testing.assert_array_equal(first.xyz, second.xyz)
    np.testing.assert_allclose(second["disp_n"], first["disp_n"], atol=EQUAL)
    assert list(tmp_path.glob("scanstrain-tiles-*"))
    tiled.close()
    assert not list(tmp_path.glob("scanstrain-tiles-*"))


def test_a_run_that_fails_leaves_no_stores(scans, monkeypatch, tmp_path):
    def fail(*_):
        assert list(tmp_path.glob("scanstrain-tiles-*/*.store"))
        raise RuntimeError("power")

    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    monkeypatch.setattr("scanstrain.neighbourhood.affine.fit_piece", fail)
    with pytest.raises(RuntimeError, match="power"):
        scanstrain.compare(*scans, tiles=True, tile_points=10_000, **OPTIONS)
    assert not list(tmp_path.iterdir())


def test_other_formats_are_refused_in_a_sentence(scans, tmp_path):
    (tmp_path / "a.ply").write_bytes(b"ply\n")
    with pytest.raises(OptionError, match=r"tiles: required LAS or LAZ files; got a\.ply"):
        scanstrain.compare(tmp_path / "a.ply", scans[1], tiles=True)
