# SPDX-License-Identifier: MIT
"""Triggers, even strain and series in a configuration: what must be there for them, and what is refused."""

from __future__ import annotations

import datetime as dt

import pytest

from scanstrain.attributes import ATTRIBUTES, BY_NAME, JUDGED
from scanstrain.config import BatchConfig, CompareConfig
from scanstrain.config.assessment import BudgetOptions, judged_quantities
from scanstrain.config.faults import find_faults

ZONES = [{"name": "crown", "clock": [11, 1]}, {"name": "first half", "chainage": [0.0, 6.0]}]
LIMITS = {"direction": "beyond", "levels": {"look again": 4.0}}


def trigger(quantity, unit="mm", **others):
    return {"name": f"my {quantity}", "quantity": quantity, "unit": unit, **LIMITS, **others}


def texts(*triggers, structure="tunnel", **tables):
    data = {"strain": {"structure": structure, **tables}, "zone": ZONES, "trigger": list(triggers)}
    return {fault.key: fault.text for fault in find_faults(CompareConfig, data)}


@pytest.mark.parametrize(
    "each",
    [
        trigger("disp_n", zone="crown"),
        trigger("strain_u", "microstrain"),
        trigger("lean", "mrad", zone="crown"),
        trigger("mean_disp_n"),
        trigger("vertical_diameter_change"),
        trigger("crown_up", zone="first half"),
        trigger("ovality_change", "1"),
    ],
    ids=lambda each: each["quantity"],
)
def test_attributes_bodies_and_sections_have_quantities_for_limits(each):
    assert texts(each) == {}


@pytest.mark.parametrize(
    ("each", "key", "says"),
    [
        (trigger("displ_n"), "quantity", "did you mean 'disp_n'"),
        (trigger("disp_n_sd"), "quantity", "did you mean 'disp_n'"),
        (trigger("chainage"), "quantity", "the name of a quantity of the results"),
        (trigger("disp_n", "mrad"), "unit", "disp_n, which is in m"),
        (trigger("disp_n", zone="crwn"), "zone", "did you mean 'crown'"),
        (trigger("bend_1", "microstrain"), "quantity", "strain.thickness"),
        (trigger("crown_up", zone="crown"), "zone", "a chainage alone"),
    ],
)
def test_what_no_run_can_judge_is_one_fault(each, key, says):
    found = texts(each)
    assert list(found) == [f"trigger[1].{key}"]
    assert says in found[f"trigger[1].{key}"]


def test_sections_take_a_tunnel_and_bending_takes_a_thickness():
    assert 'structure = "tunnel"' in texts(trigger("crown_up"), structure="free")["trigger[1].quantity"]
    assert texts(trigger("bend_1", "microstrain"), thickness=0.3) == {}


def test_two_triggers_of_one_name_are_told_apart():
    assert list(texts(trigger("disp_n"), trigger("disp_n"))) == ["trigger[2].name"]


def test_chords_that_were_asked_for_can_be_judged():
    config = CompareConfig.model_validate({"tunnel": {"chords": [[10, 2]]}})
    more = set(judged_quantities(config)) - set(judged_quantities(CompareConfig()))
    assert {name for name in more if name.endswith("change")} == {"chord_10_2_change"}
    assert all(name.startswith("chord_10_2_") and judged_quantities(config)[name] == "m" for name in more)


def test_only_attributes_with_an_error_are_judged():
    kinds = {BY_NAME[name].kind for name in JUDGED}
    assert kinds == {"signed", "magnitude"}
    left = {a.name for a in ATTRIBUTES if a.kind in ("signed", "magnitude")} - set(JUDGED)
    assert all(name.startswith(("strain_xx", "strain_y", "strain_z", "strain_x", "rot_")) for name in left)


def test_a_temperature_has_four_numbers_or_none():
    given = {"temperature_change": 8.0, "temperature_change_sd": 2.0, "expansion": 1e-5, "expansion_sd": 1e-6}
    assert BudgetOptions.model_validate(given).temperature == (8.0, 2.0, 1e-5, 1e-6)
    assert BudgetOptions().temperature is None
    (fault,) = find_faults(CompareConfig, {"budget": {"temperature_change": 8.0, "expansion": 1e-5}})
    assert "add temperature_change_sd and expansion_sd" in fault.text
    (fault,) = find_faults(CompareConfig, {"budget": given | {"expansion_sd": -1e-6}})
    assert fault.key == "budget.expansion_sd"


def batch(dates, **tables):
    epochs = [{"label": f"e{n}", "file": f"{n}.laz"} | ({"date": day} if day else {}) for n, day in enumerate(dates)]
    return {"output": {"folder": "r"}, "epoch": epochs, **tables}


def quarters(count):
    return [dt.date(2031, 1, 1) + dt.timedelta(days=91 * n) for n in range(count)]


@pytest.mark.parametrize(
    ("dates", "says"),
    [
        (quarters(3), "6 epochs or more"),
        (quarters(2), "three epochs or more"),
        ([*quarters(6), quarters(6)[-1]], "twice"),
        ([None, *quarters(6)], "three epochs or more; got 0"),
    ],
)
def test_a_season_takes_dates_that_show_it(dates, says):
    (fault,) = find_faults(BatchConfig, batch(dates, series={"season": True}))
    assert fault.key == "series.season"
    assert says in fault.text
    assert find_faults(BatchConfig, batch(dates)) == []


def test_a_series_is_made_of_dated_epochs_that_are_compared_with_the_first():
    days = quarters(7)
    days[2] = None
    config = BatchConfig.model_validate(batch(days, series={"season": True}))
    assert [epoch.label for epoch in config.followed()] == ["e0", "e1", "e3", "e4", "e5", "e6"]
    chain = BatchConfig.model_validate(batch(days, comparisons="previous"))
    assert [epoch.label for epoch in chain.followed()] == ["e0", "e1"]


def test_triggers_and_budget_reach_the_single_comparison():
    tables = {"zone": ZONES, "strain": {"structure": "tunnel"}, "trigger": [trigger("disp_n", zone="crown")]}
    tables["budget"] = {"temperature_change": 1.0, "temperature_change_sd": 0.5, "expansion": 1e-5, "expansion_sd": 0.0}
    config = BatchConfig.model_validate(batch(quarters(2), **tables)).compare_config()
    assert [each.limits() for each in config.trigger] == [{"look again": 0.004}]
    assert config.budget.temperature == (1.0, 0.5, 1e-5, 0.0)
