# SPDX-License-Identifier: MIT
"""The model of a joint: a line across which the surface is not continuous."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from itertools import pairwise
from typing import Annotated

from pydantic import Field, Strict, field_validator

from scanstrain.config.base import Options, Point
from scanstrain.config.faults import Fault, contradiction, refuse
from scanstrain.config.zone import NAME

JOINT_WIDTH = 0.02
"""Default strip that belongs to neither side [m]: broken edges and a line picked to about a centimetre."""

Line = Annotated[tuple[Point, ...], Strict(False), Field(min_length=2)]
Width = Annotated[float, Field(strict=True, ge=0, allow_inf_nan=False)]


class JointEntry(Options):
    """A joint or crack: gauges do not reach across it, and what it did is given along it."""

    name: str = Field(
        pattern=NAME, max_length=60, description="Name of the joint: letters, digits, space, dot, hyphen, underscore."
    )
    line: Line = Field(
        examples=[[[2.0, 0.0, 0.0], [2.0, 0.0, 2.5]]],
        description="Corners [[x, y, z], ...] of the line on the surface in file coordinates [m], at least two. No"
        " default.",
    )
    width: Width = Field(
        default=JOINT_WIDTH,
        description="Strip along the line [m] that belongs to neither side: the gap, its broken edges and the error of"
        " the line.",
    )

    @field_validator("line")
    @classmethod
    def _long(cls, line: tuple[Point, ...]) -> tuple[Point, ...]:
        for position, (corner, following) in enumerate(pairwise(line)):
            if corner == following:
                refuse("a line that goes on at every corner", f"{list(corner)} twice", "leave one of them out",
                       key=(position + 1,))  # fmt: skip
        return line

    def local_line(self, origin: Sequence[float]) -> list[list[float]]:
        """Corners of the line relative to the origin of an epoch [m]."""
        return [[float(c - o) for c, o in zip(corner, origin, strict=True)] for corner in self.line]


def repeated_joints(joints: tuple[JointEntry, ...]) -> Iterator[Fault]:
    """Find joints that share a name."""
    seen: set[str] = set()
    for position, joint in enumerate(joints):
        if joint.name.casefold() in seen:
            yield contradiction(
                "a different name for each joint", repr(joint.name), "rename one of them", key=(position, "name")
            )
        seen.add(joint.name.casefold())
