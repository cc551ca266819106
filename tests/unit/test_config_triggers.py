# SPDX-License-Identifier: MIT
"""Triggers in a configuration: the user's own limits, and what is refused."""

from __future__ import annotations

from typing import Annotated

import pytest
from pydantic import Strict

from scanstrain.attributes import ATTRIBUTES
from scanstrain.config.base import Options
from scanstrain.config.faults import find_faults
from scanstrain.config.trigger import STORED, TriggerEntry, trigger_faults

GIVEN = {
    "name": "crown movement", "quantity": "disp_n", "zone": "crown", "unit": "mm", "direction": "beyond",
    "levels": {"act": 20, "look again": 8.0},
}  # fmt: skip
CLASSES = {"name": "a", "quantity": "strain_1", "classes": "boscardin_cording_1989"}
QUANTITIES = {attribute.name: attribute.unit for attribute in ATTRIBUTES}


class File(Options):
    trigger: Annotated[tuple[TriggerEntry, ...], Strict(False)] = ()


def texts(*triggers):
    return {fault.key: fault.text for fault in find_faults(File, {"trigger": list(triggers)})}


def without(key, **others):
    return {name: value for name, value in {**GIVEN, **others}.items() if name != key}


def test_limits_come_out_in_stored_units_with_the_least_severe_first():
    assert texts(GIVEN) == {}
    trigger = TriggerEntry.model_validate(GIVEN)
    assert list(trigger.limits().items()) == [("look again", 0.008), ("act", 0.02)]
    assert trigger.side == "beyond"


@pytest.mark.parametrize(
    ("unit", "factor"),
    [("m", 1), ("mm", 1e-3), ("1", 1), ("microstrain", 1e-6), ("rad", 1), ("mrad", 1e-3), ("1/m", 1), ("1/km", 1e-3)],
)
def test_every_unit_has_its_factor(unit, factor):
    trigger = TriggerEntry.model_validate(GIVEN | {"unit": unit, "levels": {"a": 3.0}})
    assert trigger.limits() == {"a": pytest.approx(3.0 * factor)}


def test_published_classes_come_only_when_named():
    trigger = TriggerEntry.model_validate(CLASSES)
    assert list(trigger.limits().values()) == [0.0005, 0.00075, 0.0015, 0.003]
    assert trigger.side == "above"


@pytest.mark.parametrize(
    ("trigger", "key", "says"),
    [
        (without("levels"), "trigger[1]", "either levels or classes; got neither"),
        (GIVEN | {"classes": "boscardin_cording_1989"}, "trigger[1]", "got both"),
        (without("unit"), "trigger[1].unit", "the unit of the limits"),
        (without("direction"), "trigger[1].direction", "the direction of the limits"),
        (without("name"), "trigger[1].name", "got nothing"),
        (without("quantity"), "trigger[1].quantity", "got nothing"),
        (GIVEN | {"unit": "inch"}, "trigger[1].unit", '"microstrain"'),
        (GIVEN | {"direction": "byond"}, "trigger[1].direction", "did you mean beyond?"),
        (GIVEN | {"levels": {}}, "trigger[1].levels", "required"),
        (GIVEN | {"levels": {"act": "20 mm"}}, "trigger[1].levels.act", "a finite number; got '20 mm'"),
        (GIVEN | {"levels": {"act": float("inf")}}, "trigger[1].levels.act", "a finite number"),
        (GIVEN | {"levels": {"act": True}}, "trigger[1].levels.act", "a finite number"),
        (GIVEN | {"levels": {"<b>": 3}}, "trigger[1].levels.<b>", "rename the level"),
        (GIVEN | {"levels": {"a": 3, "b": 3.0}}, "trigger[1].levels.b", "a different limit for each level"),
        (GIVEN | {"levels": {"act": -20}}, "trigger[1].levels.act", "without a sign"),
        (CLASSES | {"unit": "1"}, "trigger[1].unit", "nothing beside classes"),
        (CLASSES | {"classes": "boscardin"}, "trigger[1].classes", "boscardin_cording_1989"),
        (GIVEN | {"level": 3}, "trigger[1].level", "did you mean levels?"),
    ],
)
def test_a_trigger_that_is_none_is_one_fault(trigger, key, says):
    found = texts(trigger)
    assert list(found) == [key]
    assert says in found[key]


def test_every_fault_is_named_at_once():
    found = texts(GIVEN | {"unit": "inch", "levels": {"a": None, "b": "x"}}, without("direction"))
    assert set(found) == {"trigger[1].unit", "trigger[1].levels.a", "trigger[1].levels.b", "trigger[2].direction"}


def faults(*triggers):
    entries = tuple(TriggerEntry.model_validate(trigger) for trigger in triggers)
    return {fault.key: fault.text for fault in trigger_faults(entries, quantities=QUANTITIES, zones=("crown", "wall"))}


@pytest.mark.parametrize(
    ("trigger", "key", "says"),
    [
        (GIVEN | {"quantity": "disp_nn"}, "[1].quantity", "did you mean 'disp_n'"),
        (GIVEN | {"quantity": "price"}, "[1].quantity", "choose one"),
        (GIVEN | {"zone": "crwn"}, "[1].zone", "did you mean 'crown'"),
        (GIVEN | {"unit": "microstrain"}, "[1].unit", "of disp_n, which is in m; got 'microstrain'; give m or mm"),
        (GIVEN | {"quantity": "tilt"}, "[1].unit", "give rad or mrad"),
        (GIVEN | {"quantity": "curv_1"}, "[1].unit", "give 1/m or 1/km"),
        (CLASSES | {"quantity": "disp_n"}, "[1].quantity", "a strain, for classes of strain"),
    ],
)  # fmt: skip
def test_what_the_results_do_not_give_is_refused_by_name(trigger, key, says):
    found = faults(trigger)
    assert list(found) == [key]
    assert says in found[key]


def test_names_must_differ_and_good_triggers_pass():
    assert faults(GIVEN, CLASSES) == {}
    assert list(faults(GIVEN, GIVEN | {"name": "Crown Movement"})) == ["[2].name"]


def test_every_attribute_that_is_a_quantity_has_a_unit_that_a_limit_can_be_given_in():
    assert {attribute.unit for attribute in ATTRIBUTES} <= {stored for stored, _ in STORED.values()}
