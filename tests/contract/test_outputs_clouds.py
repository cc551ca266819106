# SPDX-License-Identifier: MIT
"""Result clouds on real LAS files, read back with an independent reader."""

import hashlib
import json
import runpy
from dataclasses import replace
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.attributes import ATTRIBUTES
from scanstrain.io import read_scan
from scanstrain.outputs import recolour, write_result

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))
WITHHELD = 5


@pytest.fixture
def scan(tmp_path):
    """Write the 300 points of the made result; one of them is flagged and dropped at reading."""
    made = MADE["make_result"]().reference
    header = laspy.LasHeader(point_format=6, version="1.4")
    header.scales, header.offsets = [0.0001] * 3, made.origin
    las = laspy.LasData(header)
    las.xyz = made.points + made.origin
    las.intensity = np.arange(300)
    las.withheld = np.arange(300) == WITHHELD
    las.write(tmp_path / "wall_0.laz")
    return tmp_path / "wall_0.laz"


@pytest.fixture
def result(scan):
    made = MADE["make_result"](current=scan.with_name("wall_1.laz"))
    reference = read_scan(scan, origin=MADE["ORIGIN"])
    points = {name: np.delete(column, WITHHELD) for name, column in made.points.items()}
    registration = replace(made.registration, stable=np.delete(made.registration.stable, WITHHELD))
    return replace(made, reference=reference, points=points, registration=registration)


def read(path):
    las = laspy.read(path)
    return las, np.column_stack([las.red, las.green, las.blue]) if "red" in las.point_format.dimension_names else None


def test_strain_cloud_holds_every_attribute_of_every_point(scan, result, tmp_path):
    before = hashlib.sha256(scan.read_bytes()).hexdigest()
    write_result(result, tmp_path / "out")
    las, _ = read(tmp_path / "out" / "strain.laz")
    assert list(las.point_format.extra_dimension_names) == [a.name for a in ATTRIBUTES]
    assert (las.intensity == np.arange(300)).all()
    kept = np.delete(np.arange(300), WITHHELD)
    for attribute in ATTRIBUTES:
        np.testing.assert_array_equal(np.asarray(las[attribute.name])[kept], result.points[attribute.name])
    assert np.isnan(las["disp_n"][WITHHELD])
    assert las["status"][WITHHELD] == 6
    assert hashlib.sha256(scan.read_bytes()).hexdigest() == before
    summary = json.loads((tmp_path / "out" / "summary.json").read_text(encoding="utf-8"))
    assert summary["inputs"]["reference"]["sha256"] == before
    assert (summary["inputs"]["reference"]["points"], summary["inputs"]["reference"]["dropped_points"]) == (300, 1)


def test_coloured_cloud_shows_dropped_points_as_not_observable(result, tmp_path):
    write_result(result, tmp_path / "out", no_data=-9999.0)
    las, rgb = read(tmp_path / "out" / "strain_disp_n.laz")
    assert list(las.point_format.extra_dimension_names) == ["disp_n", "disp_n_sd", "discovery", "observed", "status"]
    empty = np.asarray(las["disp_n"]) == -9999.0
    assert empty[WITHHELD]
    assert 1 < empty.sum() < 50
    assert ((rgb == 88 * 257).all(axis=1) == empty).all()


def test_recolour_changes_nothing_but_the_colours(result, tmp_path):
    write_result(result, tmp_path / "out", no_data=-9999.0)
    cloud, _, key = recolour(tmp_path / "out" / "strain.laz", "tilt", only_significant=True, out=tmp_path / "maps")
    assert (cloud.name, key.name) == ("strain_tilt.laz", "strain_tilt.png")
    (before, _), (after, rgb) = read(tmp_path / "out" / "strain.laz"), read(cloud)
    assert (after.X == before.X).all()
    for attribute in ATTRIBUTES:
        np.testing.assert_array_equal(np.asarray(after[attribute.name]), np.asarray(before[attribute.name]))
    quiet = (np.asarray(after["discovery"]) == 0) & (np.asarray(after["tilt"]) != -9999.0)
    assert (rgb[quiet] == 172 * 257).all()
    assert (rgb[np.asarray(after["tilt"]) == -9999.0] == 88 * 257).all()
    assert len(np.unique(rgb[~quiet], axis=0)) > 2


def test_both_ways_to_a_coloured_cloud_give_the_same_colours(result, tmp_path):
    write_result(result, tmp_path / "out", colour_by="strain_1")
    cloud, ply, key = recolour(tmp_path / "out" / "strain.laz", "strain_1", out=tmp_path / "maps")
    assert (read(cloud)[1] == read(tmp_path / "out" / "strain_strain_1.laz")[1]).all()
    assert key.read_bytes() == (tmp_path / "out" / "strain_strain_1.png").read_bytes()
    assert ply.read_bytes() == (tmp_path / "out" / "strain_strain_1.ply").read_bytes()


def wanted_colours(values, end):
    """Colours of a signed attribute from the published table, by hand: (n, 3), 0 to 255."""
    from cmcrameri import cm

    rgb = np.round(255 * cm.vik(np.clip((values + end) / (2 * end), 0, 1))[:, :3])
    rgb[np.isnan(values)] = 88
    return rgb


def test_colours_of_both_clouds_read_back_in_other_readers(result, tmp_path):
    """LAZ through laspy in 16 bits; PLY through plyfile and open3d in 8 bits."""
    import open3d
    from plyfile import PlyData

    write_result(result, tmp_path / "out", colour_limits=5e-3)
    disp = np.asarray(result.points["disp_n"], float)
    wanted = wanted_colours(disp, 5e-3)
    _, rgb = read(tmp_path / "out" / "strain_disp_n.laz")
    # one step of the table either way: the table has 256 rows, and values on a border may fall to either side
    assert rgb.dtype == np.uint16
    assert (rgb > 255).any()
    assert np.abs(np.delete(rgb, WITHHELD, axis=0) / 257 - wanted).max() <= 6
    vertex = PlyData.read(tmp_path / "out" / "strain_disp_n.ply")["vertex"]
    seen = np.column_stack([vertex[band] for band in ("red", "green", "blue")])
    assert seen.dtype == np.uint8
    np.testing.assert_array_equal(seen, np.delete(rgb, WITHHELD, axis=0) // 257)
    np.testing.assert_array_equal(vertex["disp_n"], result.points["disp_n"])
    np.testing.assert_array_equal(vertex["status"], result.points["status"])
    cloud = open3d.io.read_point_cloud(str(tmp_path / "out" / "strain_disp_n.ply"))
    np.testing.assert_array_equal(np.round(255 * np.asarray(cloud.colors)), seen)
    # survey coordinates to a tenth of a millimetre, as in the scan
    places = result.reference.points + result.reference.origin
    np.testing.assert_allclose(np.asarray(cloud.points), places, rtol=0, atol=1e-8)


def test_ply_is_left_out_on_request_and_takes_the_no_data_number(result, tmp_path):
    from plyfile import PlyData

    write_result(result, tmp_path / "out", ply=False, report=False)
    assert not list((tmp_path / "out").glob("*.ply"))
    write_result(result, tmp_path / "out", no_data=-9999.0, report=False)
    ply = PlyData.read(tmp_path / "out" / "strain_disp_n.ply")
    empty = np.isnan(result.points["disp_n"])
    assert ((ply["vertex"]["disp_n"] == -9999.0) == empty).all()
    assert any("microstrain" not in each and "disp_n from" in each for each in ply.comments)
