# SPDX-License-Identifier: MIT
"""One colour scale for all comparisons of a batch, on real LAZ files, read back with another reader."""

import runpy
from dataclasses import replace
from pathlib import Path

import laspy
import numpy as np
import pytest
from plyfile import PlyData

from scanstrain.io import read_scan
from scanstrain.outputs import write_result
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.shared_limits import harmonise

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))


@pytest.fixture
def batch(tmp_path):
    """Two comparisons of one reference: the second one moved three times as far, so that its own limits are wider."""
    made = MADE["make_result"](current=tmp_path / "wall_1.laz")
    header = laspy.LasHeader(point_format=6, version="1.4")
    header.scales, header.offsets = [0.0001] * 3, made.reference.origin
    las = laspy.LasData(header)
    las.xyz = made.reference.points + made.reference.origin
    las.write(tmp_path / "wall_0.laz")
    reference = read_scan(tmp_path / "wall_0.laz", origin=MADE["ORIGIN"])
    folders = []
    for number, factor in enumerate((1.0, 3.0)):
        points = {**made.points, "disp_n": (made.points["disp_n"] * factor).astype(np.float32)}
        folders.append(tmp_path / f"a_to_{number}")
        write_result(replace(made, reference=reference, points=points), folders[-1], report=False)
    return folders


def colours_of(folder):
    las = laspy.read(folder / "strain_disp_n.laz")
    return np.asarray(las["disp_n"]), np.column_stack([las.red, las.green, las.blue])


def wanted(values, end):
    """Row of the published table by hand."""
    from cmcrameri import cm

    return np.round(255 * cm.vik(np.clip((values + end) / (2 * end), 0, 1))[:, :3])


def test_the_same_value_has_the_same_colour_on_every_date(batch):
    before = {path: path.read_bytes() for path in batch[1].iterdir()}
    repainted = harmonise(batch, OutputOptions())
    # 6.2 mm and 18.6 mm: together 99 % lie below 18.6 mm, rounded up 20 mm, which the second has by itself
    assert repainted == [batch[0] / "strain_disp_n.laz"]
    for folder in batch:
        values, rgb = colours_of(folder)
        seen = np.isfinite(values)
        assert np.abs(rgb[seen] / 257 - wanted(values[seen].astype(float), 0.02)).max() <= 6
        ply = PlyData.read(folder / "strain_disp_n.ply")
        np.testing.assert_array_equal(ply["vertex"]["red"], rgb[:, 0] // 257)
        assert any("from -20 to 20 mm" in line for line in ply.comments)
        assert not list(folder.glob("*.partial"))
    changed = {path.name for path, content in before.items() if path.read_bytes() != content}
    # the key of the other one says from now on whose limits it shows, and the manifest goes with it
    assert changed == {"strain_disp_n.png", "manifest.json"}


def test_what_the_files_hold_besides_colours_stays(batch):
    before = laspy.read(batch[0] / "strain_disp_n.laz")
    harmonise(batch, OutputOptions())
    after = laspy.read(batch[0] / "strain_disp_n.laz")
    assert (after.X == before.X).all()
    for name in before.point_format.extra_dimension_names:
        np.testing.assert_array_equal(np.asarray(after[name]), np.asarray(before[name]))


@pytest.mark.parametrize(
    "options",
    [OutputOptions(colour_limits=5e-3), OutputOptions(colour_by="status"), OutputOptions(colour_by="tilt")],
    ids=["limits are given", "a code", "no cloud of that attribute"],
)
def test_nothing_is_touched_where_there_is_nothing_to_share(batch, options):
    before = {path: path.read_bytes() for folder in batch for path in folder.iterdir()}
    assert harmonise(batch, options) == []
    assert {path: path.read_bytes() for folder in batch for path in folder.iterdir()} == before


def test_one_comparison_keeps_its_own_limits(batch, tmp_path):
    (tmp_path / "damaged").mkdir()
    (tmp_path / "damaged" / "strain_disp_n.laz").write_bytes(b"LASF")
    assert harmonise([batch[0], tmp_path / "failed", tmp_path / "damaged"], OutputOptions()) == []


def test_an_outlying_scan_of_many_points_does_not_rule_the_others(batch, monkeypatch):
    monkeypatch.setattr("scanstrain.outputs.shared_limits.MOST_LOOKED_AT", 50)
    harmonise(batch, OutputOptions())
    values, rgb = colours_of(batch[0])
    seen = np.isfinite(values)
    assert np.abs(rgb[seen] / 257 - wanted(values[seen].astype(float), 0.02)).max() <= 6
