# SPDX-License-Identifier: MIT
"""Writing a result and recolouring it, with the cloud format replaced by a stand-in."""

import json
import runpy
from pathlib import Path

import numpy as np
import pytest

import scanstrain.io
from scanstrain.errors import OptionError, OutputError
from scanstrain.outputs import recolour, write_result

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))


@pytest.fixture
def written(monkeypatch):
    """Calls of the cloud writer: (source, target name, values, colour, no_data)."""
    calls = []

    def write(source, target, values, *, colour=None, no_data=None):
        calls.append((source, target.name, dict(values), colour, no_data))
        return MADE["fake_write"](source, target, values, colour=colour, no_data=no_data)

    monkeypatch.setattr(scanstrain.io, "write_result_cloud", write, raising=False)
    monkeypatch.setattr("scanstrain.outputs.report.write.report_page", MADE["fake_page"])
    return calls


def test_strain_cloud_gets_every_attribute_and_the_source(written, tmp_path):
    result = MADE["make_result"]("scans/wall.laz")
    paths = write_result(result, tmp_path / "out", colour_by="tilt", no_data=-9999.0)
    source, name, values, colour, no_data = written[0]
    assert (source, name, colour, no_data) == (Path("scans/wall.laz"), "strain.laz", None, -9999.0)
    assert list(values) == list(result.points)
    assert [path.name for path in paths] == [
        "strain.laz", "strain_tilt.laz", "strain_tilt.ply", "strain_tilt.png", "gauges.csv", "registered.json",
        "summary.json", "report.html", "manifest.json",
    ]  # fmt: skip
    assert json.loads((tmp_path / "out" / "summary.json").read_text())["no_data"]["value"] == -9999.0


def test_coloured_cloud_holds_what_explains_a_picked_point(written, tmp_path):
    result = MADE["make_result"]()
    write_result(result, tmp_path / "out", colour_limits=5e-3)
    _, name, values, colour, _ = written[1]
    assert name == "strain_disp_n.laz"
    assert list(values) == ["disp_n", "disp_n_sd", "discovery", "observed", "status"]
    assert colour.shape == (300, 3)
    disp = result.points["disp_n"]
    # 88 is the grey of "not observable"; +6.2 mm is beyond +5 mm, the dark red end of the table
    assert (colour[np.isnan(disp)] == 88 * 257).all()
    assert len({tuple(rgb) for rgb in colour[disp > 5e-3]}) == 1
    assert (colour[disp > 5e-3][:, 0] > colour[disp > 5e-3][:, 2]).all()


def test_only_significant_greys_what_did_not_change(written, tmp_path):
    result = MADE["make_result"]()
    write_result(result, tmp_path / "out", only_significant=True)
    colour, quiet = written[1][3], (result.points["discovery"] == 0) & np.isfinite(result.points["disp_n"])
    assert (colour[quiet] == 172 * 257).all()
    assert not (colour[result.points["discovery"] == 1] == 172 * 257).all(axis=1).any()


@pytest.mark.parametrize(
    ("options", "said"),
    [({"colour_by": "disp_nn"}, "did you mean 'disp_n'"), ({"colour_limits": (0.0, 1.0)}, "symmetric")],
)
def test_options_that_do_not_fit_fail_before_anything_is_written(written, tmp_path, options, said):
    with pytest.raises(OptionError, match=said):
        write_result(MADE["make_result"](), tmp_path / "out", **options)
    assert written == []
    assert list(tmp_path.iterdir()) == []


def test_failing_writer_leaves_the_earlier_result(written, tmp_path, monkeypatch):
    write_result(MADE["make_result"](), tmp_path / "out")
    before = {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()}

    def full(*args, **options):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(scanstrain.io, "write_result_cloud", full)
    with pytest.raises(OutputError, match="free some space"):
        write_result(MADE["make_result"](), tmp_path / "out")
    assert {path.name: path.read_bytes() for path in (tmp_path / "out").iterdir()} == before


def test_input_inside_the_folder_under_the_name_of_an_output_is_refused(written, tmp_path):
    scan = tmp_path / "strain.laz"
    scan.write_text("scan")
    with pytest.raises(OutputError, match="leaves the inputs alone"):
        write_result(MADE["make_result"](scan), tmp_path)
    assert scan.read_text() == "scan"


@pytest.fixture
def cloud(written, tmp_path, monkeypatch):
    """A result folder whose cloud reads back as its values."""
    result = MADE["make_result"]()
    write_result(result, tmp_path / "out")
    written.clear()
    values = dict(result.points)
    monkeypatch.setattr(scanstrain.io, "read_result_cloud", lambda path: (result.reference, values), raising=False)
    return tmp_path / "out" / "strain.laz", values


def test_recolour_writes_cloud_and_key_beside_the_cloud(cloud, written):
    path, _ = cloud
    paths = recolour(path, "tilt", limits=2e-3)
    assert paths == [path.with_name(f"strain_tilt.{kind}") for kind in ("laz", "ply", "png")]
    assert all(each.is_file() for each in paths)
    source, _, changed, colour, _ = written[0]
    assert source == path
    assert changed == {}
    assert colour.shape == (300, 3)
    assert path.with_name("strain_disp_n.laz").is_file()
    assert not [each for each in path.parent.iterdir() if each.name.endswith(".partial")]


def test_recolour_into_another_folder_takes_the_name_of_the_cloud(cloud, tmp_path):
    path, _ = cloud
    renamed = path.rename(path.with_name("wall.laz"))
    paths = recolour(renamed, "spin", out=tmp_path / "maps")
    assert paths == [tmp_path / "maps" / f"wall_spin.{kind}" for kind in ("laz", "ply", "png")]


def test_recolour_suggests_the_attribute_that_was_meant(cloud):
    path, values = cloud
    with pytest.raises(OptionError, match="did you mean 'tilt'"):
        recolour(path, "tild")
    del values["tilt"]
    # named, but not in this cloud: it was made by another version
    with pytest.raises(OptionError, match=r"strain\.laz: .* the attribute tilt; got .*; compare again"):
        recolour(path, "tilt")
    renamed = path.rename(path.with_name("strain_spin.laz"))
    path.touch()
    with pytest.raises(OptionError, match=r"colour strain\.laz in the same folder"):
        recolour(renamed, "tilt")


def test_recolour_by_significance_needs_the_discoveries(cloud):
    path, values = cloud
    del values["discovery"]
    with pytest.raises(OptionError, match="only_significant"):
        recolour(path, "tilt", only_significant=True)


def test_recolour_never_writes_over_its_input(cloud):
    path, _ = cloud
    same = path.with_name("strain_disp_n.laz")
    before = same.read_bytes()
    with pytest.raises(OutputError, match="the same file"):
        recolour(same, "disp_n")
    assert same.read_bytes() == before
