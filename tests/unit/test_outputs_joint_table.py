# SPDX-License-Identifier: MIT
"""joints.csv: names, units, places in file coordinates, blanks for what is not known."""

import csv
from types import SimpleNamespace

import numpy as np

from scanstrain.neighbourhood.joint_jumps import Side, jumps_between
from scanstrain.neighbourhood.result import Status
from scanstrain.outputs.joint_table import COLUMNS, joint_rows, write_joint_table
from scanstrain.outputs.options import OutputOptions

ORIGIN = np.array([1000.0, 2000.0, 50.0])


def with_joints(*joints):
    """As much of a result as the table needs."""
    return SimpleNamespace(joints=joints, reference=SimpleNamespace(origin=ORIGIN))


def a_joint():
    """Two places; only the first has opening and slip."""
    values = np.zeros((2, 12))
    values[:, 0], values[:, 2] = 1e-3, 2e-3
    seen = np.ones((2, 12), bool)
    seen[1, :2] = False
    fine, points = np.full(2, Status.FINE, np.uint8), np.array([500, 400])
    right, left = (
        Side(v, np.broadcast_to(np.eye(12) * 1e-8, (2, 12, 12)), seen, fine, points) for v in (values, 0 * values)
    )
    frame = np.broadcast_to(np.eye(3), (2, 3, 3))
    return jumps_between("ring 7", np.array([0.2, 0.6]), np.array([[1.0, 2, 3], [1, 2, 4]]), frame, right, left)


def test_table_of_joints(tmp_path):
    path = write_joint_table(with_joints(a_joint()), tmp_path, OutputOptions())
    with path.open(encoding="utf-8", newline="") as stream:
        names, units, *rows = csv.reader(stream)
    assert names == list(COLUMNS)
    assert dict(zip(names, units, strict=True))["hinge"] == "rad"
    first, second, whole = (dict(zip(names, row, strict=True)) for row in rows)
    assert [float(first[c]) for c in "xyz"] == [1001.0, 2002.0, 53.0]
    assert float(first["opening"]) == 1e-3
    assert float(first["opening_sd"]) == float(f"{np.sqrt(2) * 1e-4:.10g}")
    assert (first["reason"], first["points_right"]) == ("", "500")
    assert (second["opening"], second["opening_sd"]) == ("", "")
    assert "opening and slip" in second["reason"]
    assert (whole["joint"], whole["place"], whole["x"], whole["reason"]) == ("ring 7", "whole", "", "")
    assert float(whole["step"]) == 2e-3
    assert float(whole["significance"]) < 1e-6


def test_rows_say_the_same_as_the_result():
    joint = a_joint()
    rows = joint_rows([joint, joint], ORIGIN)
    assert [row["place"] for row in rows] == [1, 2, "whole"] * 2
    np.testing.assert_array_equal([row["step"] for row in rows[:2]], joint.values[:, 2])
    assert rows[0]["significance"] == joint.significance[0]


def test_no_joints_no_table(tmp_path):
    assert write_joint_table(with_joints(), tmp_path, OutputOptions()) is None
    assert list(tmp_path.iterdir()) == []
