# SPDX-License-Identifier: MIT
"""The model of a zone: a named part of the object."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated

from pydantic import Field, Strict, model_validator

from scanstrain.config.base import Finite, Limits, Options, Point
from scanstrain.config.faults import Fault, contradiction, refuse
from scanstrain.zones import Zone

NAME = r"^\w[\w .-]*$"
Corner = Annotated[tuple[Finite, Finite], Strict(False)]
Polygon = Annotated[tuple[Corner, ...], Strict(False), Field(min_length=3)]
Box = Annotated[tuple[Point, Point], Strict(False)]
Code = Annotated[int, Field(strict=True, ge=0, le=255)]


class ZoneEntry(Options):
    """A named part of the object; a point belongs to it if it meets every condition that is given."""

    name: str = Field(
        pattern=NAME, max_length=60, description="Name of the zone: letters, digits, space, dot, hyphen, underscore."
    )
    box: Box | None = Field(
        default=None,
        examples=[[[0.0, 0.0, 0.0], [4.0, 1.0, 2.5]]],
        description="Two corners [[x, y, z], [x, y, z]] in file coordinates [m], lowest first. No default.",
    )
    polygon: Polygon | None = Field(
        default=None,
        examples=[[[0.0, 0.0], [4.0, 0.0], [4.0, 1.0]]],
        description="Corners [x, y] in plan, file coordinates [m], at least three. No default.",
    )
    surface_polygon: Polygon | None = Field(
        default=None,
        examples=[[[2.0, -1.0], [4.0, -1.0], [4.0, 1.0]]],
        description="Corners [along, across] on the surface laid flat [m]: chainage and arc length from the crown in a"
        " tunnel, distance and height on a wall. No default.",
    )
    height: Limits | None = Field(
        default=None, examples=[[0.0, 2.5]], description="Lowest and highest z in file coordinates [m]. No default."
    )
    chainage: Limits | None = Field(
        default=None, examples=[[0.0, 12.0]], description="From and to along the tunnel axis [m]. No default."
    )
    clock: Annotated[tuple[Finite, Finite], Strict(False)] | None = Field(
        default=None,
        examples=[[10.0, 2.0]],
        description="From and to on a clock face with 12 at the crown, as seen along the axis [hours]. No default.",
    )
    classes: Annotated[tuple[Code, ...], Strict(False), Field(min_length=1)] | None = Field(
        default=None, examples=[[2, 6]], description="LAS classification codes. No default."
    )

    @model_validator(mode="after")
    def _bounded(self) -> ZoneEntry:
        given = self.model_dump(exclude={"name"}, exclude_none=True)
        if not given:
            refuse("at least one condition", "a name alone", "give box, polygon, height, chainage, clock or classes")
        for key in ("height", "chainage"):
            limits = getattr(self, key)
            if limits is not None and not limits[0] < limits[1]:
                refuse("the lower limit first", f"{list(limits)}", "exchange them", key=(key,))
        if self.clock is not None and not (
            all(0 <= hour <= 12 for hour in self.clock) and self.clock[0] != self.clock[1]
        ):
            refuse(
                "two different hours from 0 to 12", f"{list(self.clock)}", "give for example [10, 2]", key=("clock",)
            )
        if self.box is not None and not all(low < high for low, high in zip(*self.box, strict=True)):
            refuse("the corner with the lowest x, y and z first", f"{[list(c) for c in self.box]}", "exchange them",
                   key=("box",))  # fmt: skip
        return self

    def zone(self) -> Zone:
        """Return the zone itself."""
        return Zone(**self.model_dump())


def repeated_names(zones: tuple[ZoneEntry, ...]) -> Iterator[Fault]:
    """Find zones that share a name."""
    seen: set[str] = set()
    for position, zone in enumerate(zones):
        if zone.name.casefold() in seen:
            yield contradiction(
                "a different name for each zone", repr(zone.name), "rename one of them", key=(position, "name")
            )
        seen.add(zone.name.casefold())
