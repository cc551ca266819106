# SPDX-License-Identifier: MIT
"""The model of a trigger: the user's own limits on a quantity of the results. No limit comes with the program."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Collection, Iterator, Mapping
from typing import Any, Literal

from pydantic import Field, field_validator, model_validator

from scanstrain.config.base import Finite, Options
from scanstrain.config.faults import Fault, contradiction, refuse, refuse_all
from scanstrain.config.zone import NAME
from scanstrain.damage import CLASSES
from scanstrain.limits import Direction, by_severity

Unit = Literal["m", "mm", "1", "microstrain", "rad", "mrad", "1/m", "1/km"]

STORED: Mapping[str, tuple[str, float]] = {
    "m": ("m", 1.0),
    "mm": ("m", 1e-3),
    "1": ("1", 1.0),
    "microstrain": ("1", 1e-6),
    "rad": ("rad", 1.0),
    "mrad": ("rad", 1e-3),
    "1/m": ("1/m", 1.0),
    "1/km": ("1/m", 1e-3),
}
"""Unit as given, to the unit that is stored and the factor to it."""


class TriggerEntry(Options):
    """The user's own limits on one quantity, in the whole object or in a zone."""

    name: str = Field(
        pattern=NAME, max_length=60, description="Name of the trigger: letters, digits, space, dot, hyphen, underscore."
    )
    quantity: str = Field(
        examples=["disp_n"],
        description="What is held against the limits: an attribute, or a quantity of sections or of zones.",
    )
    zone: str | None = Field(
        default=None,
        examples=["crown"],
        description="Name of the [[zone]] that it holds for. No default: without one it holds everywhere.",
    )
    unit: Unit | None = Field(
        default=None,
        examples=["mm"],
        description="Unit of the limits. No default: a limit without its unit is no limit.",
    )
    direction: Direction | None = Field(
        default=None,
        examples=["beyond"],
        description="Side that is past a limit: above, below, or beyond for the absolute value. No default: only you"
        " know which side is harmful.",
    )
    levels: dict[str, Finite] | None = Field(
        default=None,
        min_length=1,
        examples=[{}],
        description="Your names of levels, each with its limit in `unit`. No default: limits come from the designer.",
    )
    classes: Literal["boscardin_cording_1989"] | None = Field(
        default=None,
        examples=["boscardin_cording_1989"],
        description="Published classes of tensile strain instead of levels, for masonry buildings above moving ground"
        " only. No default: they hold for no other structure.",
    )

    @field_validator("levels", mode="before")
    @classmethod
    def _named_numbers(cls, value: Any) -> Any:
        if isinstance(value, Mapping):
            refuse_all(list(_faulty_levels(value)))
        return value

    @model_validator(mode="after")
    def _levels_or_classes(self) -> TriggerEntry:
        if (self.levels is None) == (self.classes is None):
            got = "neither" if self.levels is None else "both"
            refuse("either levels or classes", got, "give your own levels, or name published classes")
        refuse_all(list(_faulty_classes(self) if self.levels is None else _faulty_sides(self, self.levels)))
        return self

    @property
    def side(self) -> Direction:
        """The side that is past a limit."""
        return self.direction or "above"

    def limits(self) -> dict[str, float]:
        """Return the limit of each level in the unit in which results are stored, the least severe level first."""
        if self.classes is not None:
            return dict(CLASSES[self.classes])
        factor = STORED[self.unit or "1"][1]
        given = {name: limit * factor for name, limit in (self.levels or {}).items()}
        return by_severity(given, direction=self.side)


def trigger_faults(
    triggers: tuple[TriggerEntry, ...], *, quantities: Mapping[str, str], zones: Collection[str]
) -> Iterator[Fault]:
    """Find triggers that share a name, or that ask for what a run does not give.

    Parameters
    ----------
    triggers : tuple of TriggerEntry
    quantities : mapping of str to str
        Every quantity that can be held against a limit, with the unit in which it is stored.
    zones : collection of str
        Names of the zones.

    Yields
    ------
    Fault
        With its place counted from the list of triggers.
    """
    seen: set[str] = set()
    for position, trigger in enumerate(triggers):
        if trigger.name.casefold() in seen:
            got = repr(trigger.name)
            yield contradiction("a different name for each trigger", got, "rename one of them", key=(position, "name"))
        seen.add(trigger.name.casefold())
        if trigger.zone is not None and trigger.zone not in zones:
            remedy = _near(trigger.zone, zones) or "add a [[zone]] of that name"
            yield contradiction("the name of a [[zone]]", repr(trigger.zone), remedy, key=(position, "zone"))
        if trigger.quantity not in quantities:
            remedy = _near(trigger.quantity, quantities) or "choose one that the results hold"
            got = repr(trigger.quantity)
            yield contradiction("the name of a quantity of the results", got, remedy, key=(position, "quantity"))
            continue
        stored = quantities[trigger.quantity]
        if trigger.unit is not None and STORED[trigger.unit][0] != stored:
            words = [unit for unit, (base, _) in STORED.items() if base == stored]
            required = f"a unit of {trigger.quantity}, which is in {stored}"
            remedy = f"give {' or '.join(words)}" if words else "choose another quantity"
            yield contradiction(required, repr(trigger.unit), remedy, key=(position, "unit"))
        if trigger.classes is not None and stored != "1":
            required = f"a strain, for classes of strain; {trigger.quantity} is in {stored}"
            yield contradiction(required, repr(trigger.quantity), "choose a strain", key=(position, "quantity"))


def _faulty_levels(levels: Mapping[Any, Any]) -> Iterator[Fault]:
    limits: dict[float, str] = {}
    for name, limit in levels.items():
        key = (str(name),)
        if not re.match(NAME, str(name)):
            required = "a name of letters, digits, space, dot, hyphen or underscore"
            yield contradiction(required, repr(name), "rename the level", key=key)
        elif isinstance(limit, bool) or not isinstance(limit, int | float) or not math.isfinite(limit):
            yield contradiction("a limit that is a finite number", repr(limit), "give a number in `unit`", key=key)
        elif limit in limits:
            got = f"{limit:g}, as {limits[limit]!r} has"
            yield contradiction("a different limit for each level", got, "change one of them", key=key)
        else:
            limits[limit] = str(name)


def _faulty_classes(trigger: TriggerEntry) -> Iterator[Fault]:
    for key in ("unit", "direction"):
        given = getattr(trigger, key)
        if given is not None:
            yield contradiction("nothing beside classes, which bring their own", repr(given), "remove it", key=(key,))


def _faulty_sides(trigger: TriggerEntry, levels: Mapping[str, float]) -> Iterator[Fault]:
    for key, remedy in (("unit", 'give for example "mm"'), ("direction", 'give "above", "below" or "beyond"')):
        if getattr(trigger, key) is None:
            yield contradiction(f"the {key} of the limits", "none", remedy, key=(key,))
    for name, limit in levels.items():
        if trigger.direction == "beyond" and limit <= 0:
            required = 'a limit above 0, for direction = "beyond"'
            yield contradiction(required, f"{limit:g}", "give its size without a sign", key=("levels", name))


def _near(name: str, known: Collection[str] | Mapping[str, str]) -> str:
    near = difflib.get_close_matches(name, list(known), n=1)
    return f"did you mean {near[0]!r}" if near else ""
