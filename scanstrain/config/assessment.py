# SPDX-License-Identifier: MIT
"""The options of what is made of results: even strain from other causes, series, and what triggers may ask for."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Mapping
from typing import TYPE_CHECKING, Annotated

from pydantic import Field, model_validator

from scanstrain.attributes import BY_NAME, JUDGED, OF_BODIES
from scanstrain.config.base import Finite, Options
from scanstrain.config.faults import Fault, contradiction, refuse
from scanstrain.config.trigger import STORED, TriggerEntry, trigger_faults
from scanstrain.config.zone import ZoneEntry

if TYPE_CHECKING:
    from scanstrain.config.models import CompareConfig

Size = Annotated[float, Field(strict=True, ge=0, allow_inf_nan=False)]
_ONE_FOR_ALL = "No default: temperatures are not in the scans."


class BudgetOptions(Options):
    """What can look like an even strain: stated beside the measured dilation, never taken off."""

    temperature_change: Finite | None = Field(
        default=None,
        examples=[8.0],
        description=f"Temperature of the object at the current epoch less that at the reference [K]. {_ONE_FOR_ALL}",
    )
    temperature_change_sd: Size | None = Field(
        default=None, examples=[2.0], description=f"Its standard error [K]. {_ONE_FOR_ALL}"
    )
    expansion: Finite | None = Field(
        default=None,
        examples=[10e-6],
        description="Coefficient of linear expansion of the object [1/K]. No default: it belongs to the material.",
    )
    expansion_sd: Size | None = Field(
        default=None,
        examples=[1e-6],
        description="Its standard error [1/K]. No default: it belongs to the material.",
    )

    @model_validator(mode="after")
    def _all_or_none(self) -> BudgetOptions:
        given = self.model_dump()
        missing = [name for name, value in given.items() if value is None]
        if missing and len(missing) < len(given):
            got = "only " + ", ".join(name for name in given if name not in missing)
            refuse("all four numbers of the temperature, or none", got, f"add {' and '.join(missing)}")
        return self

    @property
    def temperature(self) -> tuple[float, float, float, float] | None:
        """Change and coefficient, each with its standard error, or None."""
        change, change_sd, expansion, sd = (
            self.temperature_change, self.temperature_change_sd, self.expansion, self.expansion_sd,
        )  # fmt: skip
        if change is None or change_sd is None or expansion is None or sd is None:
            return None
        return change, change_sd, expansion, sd


class SeriesOptions(Options):
    """Three or more dated epochs that are compared with the first one."""

    season: bool = Field(
        default=False,
        description="Fit an annual wave beside the rate. Default false: it takes six dated epochs over a year or more"
        " to tell one from a rate.",
    )
    free_expansion: Finite | None = Field(
        default=None,
        examples=[10e-6],
        description="Coefficient of linear expansion of the object [1/K]: its free expansion is taken off strains and"
        " diameters before a rate is fitted. No default: it belongs to the material, and what is held back does not"
        " expand freely.",
    )
    free_expansion_sd: Size | None = Field(
        default=None, examples=[1e-6], description="Its standard error [1/K]. No default: it belongs to the material."
    )
    temperature_sd: Size | None = Field(
        default=None,
        examples=[1.0],
        description="Standard error of the temperature of each epoch [K]. No default: it belongs to the thermometer.",
    )

    @model_validator(mode="after")
    def _all_or_none(self) -> SeriesOptions:
        names = ("free_expansion", "free_expansion_sd", "temperature_sd")
        missing = [name for name in names if getattr(self, name) is None]
        if missing and len(missing) < len(names):
            got = "only " + ", ".join(name for name in names if name not in missing)
            refuse("all three numbers of the expansion, or none", got, f"add {' and '.join(missing)}")
        return self

    @property
    def thermal(self) -> tuple[float, float, float] | None:
        """Coefficient of expansion, its standard error and that of a temperature, or None."""
        expansion, sd, reading = self.free_expansion, self.free_expansion_sd, self.temperature_sd
        return None if expansion is None or sd is None or reading is None else (expansion, sd, reading)


def judged_quantities(config: CompareConfig) -> dict[str, str]:
    """Return every quantity that a trigger may ask for, with the unit in which it is stored."""
    from scanstrain.structures import section_units

    known = {name: BY_NAME[name].unit for name in JUDGED} | {name: unit for name, (unit, _) in OF_BODIES.items()}
    stored = {unit for unit, _ in STORED.values()}
    columns = section_units(config.tunnel.chords)
    sections = {name: unit for name, (unit, _) in columns.items() if f"{name}_sd" in columns and unit in stored}
    return known | sections


def faults_of_triggers(config: CompareConfig) -> Iterator[Fault]:
    """Find triggers that no run with these options can judge; paths start at the configuration."""
    zones = {zone.name: zone for zone in config.zone}
    quantities = judged_quantities(config)
    for fault in trigger_faults(config.trigger, quantities=quantities, zones=zones):
        yield Fault(("trigger", *fault.location), fault.text)
    for position, trigger in enumerate(config.trigger):
        for fault in _without_a_base(trigger, config, quantities, zones):
            yield Fault(("trigger", position, *fault.location), fault.text)


def of_sections(quantity: str, quantities: Collection[str]) -> bool:
    """Whether a quantity is one of sections."""
    return quantity in quantities and quantity not in JUDGED and quantity not in OF_BODIES


def _without_a_base(
    trigger: TriggerEntry, config: CompareConfig, quantities: Collection[str], zones: Mapping[str, ZoneEntry]
) -> Iterator[Fault]:
    """What a quantity needs besides scans: a thickness, or a tunnel and a stretch of it."""
    name = trigger.quantity
    if name.startswith("bend_") and config.strain.thickness is None:
        yield contradiction(f"strain.thickness, for {name}", "none", "give it in metres", key=("quantity",))
    if not of_sections(name, quantities):
        return
    if config.strain.structure != "tunnel":
        got = f'structure = "{config.strain.structure}"'
        required = f'structure = "tunnel", for {name}, which sections have'
        yield contradiction(required, got, "set strain.structure or choose another quantity", key=("quantity",))
    zone = zones.get(trigger.zone or "")
    if zone is not None and set(zone.model_dump(exclude_none=True)) != {"name", "chainage"}:
        required = f"a [[zone]] of a chainage alone, for {name}, which a whole section has"
        got = f"{zone.name!r}, which is bounded otherwise"
        yield contradiction(required, got, "give it a chainage only, or leave the zone out", key=("zone",))
