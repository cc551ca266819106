# SPDX-License-Identifier: MIT
"""What a result folder holds, file by file, and that programs can read it."""

import csv
import json
import runpy
from pathlib import Path

import numpy as np
import pytest

import scanstrain.io
from scanstrain.attributes import ATTRIBUTES
from scanstrain.outputs import OUTPUTS, write_result

MADE = runpy.run_path(str(Path(__file__).parents[1] / "outputs_result.py"))
SUMMARY_KEYS = {
    "registration": {
        "matrix", "rotation_vector", "translation", "pivot", "covariance", "rms", "stable_fraction",
        "weak_directions", "converged", "scale_ppm",
    },
    "rigid_motion": set(),
    "gauges": {"count", "by_status", "gauge_length", "gauge_spacing"},
    "results": {a.name for a in ATTRIBUTES},
    "strain_measure": {"used", "why"},
    "inputs": {"reference", "current"},
    "software": {"scanstrain", "python", "numpy", "scipy", "numba", "laspy", "open3d"},
    "config": {"gauge_length"},
    "timing": {"stages", "points_per_second", "peak_memory"},
}  # fmt: skip


def refuse(literal):
    raise ValueError(f"{literal} is no JSON")


def strict(path):
    return json.loads(path.read_text(encoding="utf-8"), parse_constant=refuse)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(scanstrain.io, "write_result_cloud", MADE["fake_write"], raising=False)
        target = tmp_path_factory.mktemp("out") / "epoch_0_to_epoch_1"
        written = write_result(MADE["make_result"](), target)
    assert all(path.parent == target for path in written)
    return target


def test_folder_holds_the_published_files_and_nothing_else(folder):
    assert sorted(path.name for path in folder.iterdir()) == [
        "gauges.csv", "manifest.json", "registered.json", "report.html",
        "strain.laz", "strain_disp_n.laz", "strain_disp_n.ply", "strain_disp_n.png", "summary.json",
    ]  # fmt: skip
    assert len(OUTPUTS) == 13
    assert not list(folder.parent.glob(".*"))


def test_summary_is_strict_json_with_the_published_keys(folder):
    summary = strict(folder / "summary.json")
    for key, inner in SUMMARY_KEYS.items():
        assert inner <= set(summary[key]), key
    assert all(isinstance(sentence, str) for key in ("warnings", "cautions") for sentence in summary[key])
    numbers = {
        "minimum",
        "p05",
        "median",
        "p95",
        "maximum",
        "detection_limit",
        "share_observable",
        "share_discovered",
    }
    codes = {"discovery", "observed", "status", "stable"}
    assert all(numbers <= set(entry) for name, entry in summary["results"].items() if name not in codes)
    for epoch in summary["inputs"].values():
        assert {"file", "sha256", "points", "crs", "date"} <= set(epoch)


def test_registered_matrix_maps_current_to_reference_in_file_coordinates(folder):
    registered = strict(folder / "registered.json")
    matrix = np.array(registered["matrix"])
    # by hand: local (1, 0, 0) turns to (0, 1, 0) and shifts by (1, 2, 3)
    current = MADE["ORIGIN"] + [1.0, 0.0, 0.0]
    assert matrix @ [*current, 1.0] == pytest.approx([*(MADE["ORIGIN"] + [1.0, 3.0, 3.0]), 1.0], abs=1e-8)
    assert "CURRENT" in registered["reads"]
    assert registered["unit"] == "metre"
    assert np.array(registered["covariance"], dtype=float).shape == (6, 6)
    assert registered["covariance"][5][5] is None


def test_translation_belongs_to_the_pivot(folder):
    from scipy.spatial.transform import Rotation

    registered = strict(folder / "registered.json")
    pivot, shift = np.array(registered["pivot"]), np.array(registered["translation"])
    R = Rotation.from_rotvec(registered["rotation_vector"]).as_matrix()
    current = MADE["ORIGIN"] + [0.3, -2.0, 5.0]
    by_matrix = (np.array(registered["matrix"]) @ [*current, 1.0])[:3]
    assert R @ (current - pivot) + pivot + shift == pytest.approx(by_matrix, abs=1e-6)


def test_gauge_table_reads_back_with_names_units_and_empty_fields(folder):
    with (folder / "gauges.csv").open(encoding="utf-8", newline="") as stream:
        names, units, *rows = list(csv.reader(stream))
    assert len({len(names), len(units), *map(len, rows)}) == 1
    assert len(names) == len(set(names))
    assert len(rows) == 12
    assert [name for name in names if name in {a.name for a in ATTRIBUTES}] == [a.name for a in ATTRIBUTES]
    table = {name: [row[k] for row in rows] for k, name in enumerate(names)}
    unit = dict(zip(names, units, strict=True))
    assert (unit["x"], unit["disp_n"], unit["tilt"], unit["curv_1"]) == ("m", "m", "rad", "1/m")
    assert (unit["limit_disp_n"], unit["limit_strain"], unit["limit_curvature"]) == ("m", "1", "1/m")
    assert table["x"][0] == "482310.2500"
    assert table["y"][0] == "5391270.0000"
    assert [float(v) for v in table["disp_n"][:11]] == pytest.approx(MADE["DISP_N"][:11], abs=1e-10)
    assert table["disp_n"][11] == ""
    assert table["strain_1"][6:] == [""] * 6
    assert table["u_x"][11] == ""
    assert table["status_word"][0] == "fine"
    assert "edge" in table["status_word"][11]
    assert {value.lower() for row in rows for value in row}.isdisjoint({"nan", "inf", "none"})


def test_gauge_table_is_a_frame_of_numbers_for_numpy(folder):
    numbers = np.genfromtxt(folder / "gauges.csv", delimiter=",", skip_header=2, usecols=range(1, 12), encoding="utf-8")
    assert numbers.shape == (12, 11)
    assert np.isfinite(numbers[:11]).all()
