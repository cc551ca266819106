# SPDX-License-Identifier: MIT
"""Joints in a configuration: what they may be, and what is refused."""

import pytest
from pydantic import Field

from scanstrain.config.base import Options
from scanstrain.config.faults import find_faults
from scanstrain.config.joint import JOINT_WIDTH, JointEntry, repeated_joints

LINE = [[100.0, 200.0, 1.0], [100.0, 200.0, 3.0]]


class Joints(Options):
    """A configuration of joints only."""

    joint: list[JointEntry] = Field(default=[])


def test_a_line_in_file_coordinates_becomes_local():
    joint = JointEntry.model_validate({"name": "ring 7", "line": LINE})
    assert joint.local_line((90.0, 200.0, 0.5)) == [[10.0, 0.0, 0.5], [10.0, 0.0, 2.5]]
    assert joint.width == JOINT_WIDTH


@pytest.mark.parametrize(
    ("joint", "key", "says"),
    [
        ({"name": "a"}, "joint[1].line", "required"),
        ({"name": "a", "line": LINE[:1]}, "joint[1].line", "at least 2"),
        ({"name": "a", "line": [[0, 0], [1, 1]]}, "joint[1].line", "corners"),
        ({"name": "a", "line": [*LINE, LINE[1]]}, "joint[1].line[3]", "leave one of them out"),
        ({"name": "a", "line": LINE, "width": -0.1}, "joint[1].width", "0"),
        ({"name": "<a>", "line": LINE}, "joint[1].name", "letters"),
        ({"name": "a", "line": LINE, "colour": 3}, "joint[1].colour", "unknown key"),
    ],
)
def test_a_joint_that_is_none_is_one_fault(joint, key, says):
    faults = {fault.key: fault.text for fault in find_faults(Joints, {"joint": [joint]})}
    assert [name for name in faults if name.startswith(key)]
    assert says in " ".join(faults.values())


def test_names_must_differ():
    joints = tuple(JointEntry.model_validate({"name": name, "line": LINE}) for name in ("a", "b", "A"))
    (fault,) = repeated_joints(joints)
    assert fault.location == (2, "name")
    assert "a different name" in fault.text
