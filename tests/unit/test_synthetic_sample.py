# SPDX-License-Identifier: MIT
"""The demonstration scans: the committed files, their headers, and that they are written again byte for byte."""

import datetime as dt
from pathlib import Path

import laspy
import numpy as np
import pytest

from scanstrain.errors import OptionError, OutputError
from scanstrain.synthetic import NAMES, first_epoch, sample_truth, truth, truth_at, undeformed, write_sample
from scanstrain.synthetic.statement import surface_grid

COMMITTED = Path(__file__).parents[2] / "sample_clouds"


def test_the_committed_files_are_written_again_byte_for_byte(tmp_path):
    written = write_sample(tmp_path / "new" / "folder")
    assert [path.name for path in written] == [*(f"{name}.laz" for name in NAMES), "TRUTH.md"]
    assert sorted(p.name for p in written[0].parent.iterdir()) == sorted(p.name for p in written)
    for path in written:
        assert path.read_bytes() == (COMMITTED / path.name).read_bytes(), path.name
    assert sum(path.stat().st_size for path in written) < 12e6


@pytest.mark.parametrize("name", NAMES)
def test_headers_say_what_the_files_are(name):
    raw = (COMMITTED / f"{name}.laz").read_bytes()
    # ASPRS LAS 1.4 R15: global encoding at byte 6 (bit 0 GPS seconds, bit 4 WKT), version at 24, format at 104
    assert raw[6] | raw[7] << 8 == 0b10001
    assert tuple(raw[24:26]) == (1, 4)
    assert raw[104] & 0x3F == 6
    with laspy.open(COMMITTED / f"{name}.laz") as reader:
        header, points = reader.header, reader.read()
    assert header.scales.tolist() == [1e-4] * 3
    assert header.offsets.tolist() == [482310.0, 5391270.0, 86.0]
    assert header.creation_date == dt.date.fromisoformat(name[-10:])
    assert header.parse_crs().axis_info[0].unit_name == "metre"
    assert not header.parse_crs().is_geographic
    assert set(np.unique(points.point_source_id)) == {1, 2}
    assert set(np.unique(points.classification)) == {1, 2, 6}
    second = dt.timedelta(seconds=float(points.gps_time.min()) + 1e9 - 18)
    assert (dt.datetime(1980, 1, 6) + second).date() == header.creation_date


@pytest.mark.parametrize("name", [name for name in NAMES if sample_truth(name).name != first_epoch(name).name])
def test_most_of_each_object_is_stable_and_the_motion_is_worth_seeing(name):
    sample = sample_truth(name)
    exact = truth_at(sample.scene, surface_grid(sample, 0.05))
    moved = np.linalg.norm(exact["displacement"], axis=1)
    assert (moved == 0).mean() > 0.55 - 0.005
    assert 0.002 < np.abs(exact["disp_n"]).max() < 0.02
    assert exact["strain_1"].max() > 5e-4
    angle = np.degrees(np.arccos((np.trace(sample.pose[:3, :3]) - 1) / 2))
    assert 0.01 < angle < 0.05


@pytest.mark.parametrize("name", ["adit_2031-09-12", "wall_2031-09-13"])
def test_file_points_carry_the_stated_motion_and_registration(name):
    """Undo the stated registration, then the stated motion: what is left is relief and noise."""
    sample = sample_truth(name)
    xyz = laspy.read(COMMITTED / f"{name}.laz").xyz
    T = sample.file_matrix()
    local = xyz @ T[:3, :3].T + T[:3, 3] - np.asarray(sample.scene.origin)
    exact = truth(sample.scene, local)
    on = exact["on_structure"]
    assert on.mean() > 0.5
    _, height = sample.scene.surface.project(local[on])
    relief = sample.scene.relief(exact["material"][on])
    moving = np.abs(exact["disp_n"][on]) > 0.002
    left = height - exact["disp_n"][on] - relief
    # 0.5 to 0.8 mm of range noise seen along the normal; mixed echoes are few. With the motion left in: several mm.
    assert 1.4826 * np.median(np.abs(left[moving])) == pytest.approx(5e-4, rel=0.1)
    assert abs(np.median(left[moving])) < 5e-5
    assert np.median(np.abs((height - relief)[moving])) > 2e-3


@pytest.fixture(scope="module")
def first_wall_scan():
    return first_epoch("wall_2031-09-13").scan()


def test_the_noise_free_places_answer_for_the_projection_error(first_wall_scan):
    current, scan = sample_truth("wall_2031-09-13"), first_wall_scan
    on = scan.target == -1
    projected = truth(current.scene, scan.epoch.points[on])
    exact = truth_at(current.scene, scan.material[on])
    assert np.abs(projected["displacement"] - exact["displacement"]).max() < 3e-5
    assert np.sqrt(((projected["disp_n"] - exact["disp_n"]) ** 2).mean()) < 2e-6


def test_fixtures_do_not_move(first_wall_scan):
    current, scan = sample_truth("wall_2031-09-13"), first_wall_scan
    floor = scan.target >= 0
    exact = truth(current.scene, scan.epoch.points[floor])
    assert exact["on_structure"].mean() < 0.03
    assert not exact["disp_n"][~exact["on_structure"]].any()


def test_undeformed_is_the_same_scan_without_motion():
    sample = undeformed(sample_truth("wall_2031-09-13"))
    assert not np.any(truth_at(sample.scene, surface_grid(sample, 0.2))["displacement"])
    np.testing.assert_array_equal(sample.pose, sample_truth("wall_2031-09-13").pose)


def test_faults_are_explained(tmp_path):
    with pytest.raises(OptionError, match="did you mean 'wall_2031-03-05'"):
        sample_truth("wall_2031-03-06x")
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="writable folder"):
        write_sample(tmp_path / "file")
