# SPDX-License-Identifier: MIT
"""The option models: what they accept, what they refuse, and that each option explains itself."""

import json
import math
import re

import pytest
from pydantic import BaseModel, ValidationError

from scanstrain.config import (
    BatchConfig,
    CompareConfig,
    ComparisonEntry,
    EpochEntry,
    NeighbourhoodOptions,
    OutputOptions,
    RegistrationOptions,
    StrainOptions,
    config_from_options,
    option_names,
)
from scanstrain.config.assessment import BudgetOptions, SeriesOptions
from scanstrain.config.batch_file import BatchOutputOptions
from scanstrain.config.faults import find_faults
from scanstrain.errors import OptionError

STAGES = (RegistrationOptions, NeighbourhoodOptions, StrainOptions, BudgetOptions, OutputOptions, SeriesOptions)
MODELS = (*STAGES, CompareConfig, BatchConfig, BatchOutputOptions, EpochEntry, ComparisonEntry)


def texts(model, data):
    return {fault.key: fault.text for fault in find_faults(model, data)}


@pytest.mark.parametrize("model", MODELS, ids=lambda model: model.__name__)
def test_models_are_frozen_and_refuse_unknown_keys(model):
    assert model.model_config["frozen"]
    assert model.model_config["extra"] == "forbid"
    assert model.model_config["strict"]


@pytest.mark.parametrize("model", STAGES, ids=lambda model: model.__name__)
def test_every_option_of_a_stage_gives_its_unit_and_the_reason_for_its_default(model):
    for name, field in model.model_fields.items():
        schema = model.model_json_schema()["properties"][name]
        assert re.search(r"Default .+|No default.*:", field.description), name
        parts = [part for part in schema.get("anyOf", [schema]) if part.get("items") != {"type": "string"}]
        kinds = {part.get("type") for part in parts}
        if kinds & {"number", "integer", "array"}:
            assert re.search(r"\[(m|1|K|1/K|m, rad, 1 or 1/m|x, y, z\] .*\[m)\]", field.description), name


@pytest.mark.parametrize("model", MODELS, ids=lambda model: model.__name__)
def test_every_key_has_a_description(model):
    assert all(field.description for field in model.model_fields.values())


def test_the_defaults_are_those_that_are_described():
    config = CompareConfig()
    assert config.registration.capture_range == 0.3
    assert config.registration.seed == 0
    assert config.neighbourhood.min_points == 30
    assert config.strain.false_discovery_rate == 0.05
    assert config.strain.confidence == 0.95
    assert config.output.colour_by == "disp_n"
    for model in STAGES:
        for name, field in model.model_fields.items():
            described = re.search(r"Default ([\w.]+)", field.description)
            if described:
                assert json.dumps(field.default).strip('"') == described[1].rstrip("."), name


def test_an_option_cannot_be_changed_afterwards():
    with pytest.raises(ValidationError):
        CompareConfig().strain.thickness = 0.3


@pytest.mark.parametrize("value", [0, -1, math.nan, math.inf, "0.6", True, None, [0.6], "Auto"])
def test_a_gauge_length_is_a_positive_finite_number_or_auto(value):
    found = texts(CompareConfig, {"neighbourhood": {"gauge_length": value}})
    assert list(found) == ["neighbourhood.gauge_length"]
    assert 'required a number above 0 [m] or "auto"; got ' in found["neighbourhood.gauge_length"]


@pytest.mark.parametrize("value", [0.6, 1, "auto"])
def test_a_gauge_length_that_serves(value):
    assert NeighbourhoodOptions(gauge_length=value).gauge_length == value


@pytest.mark.parametrize(
    ("stage", "key", "value"),
    [
        ("registration", "start", "guess"),
        ("registration", "seed", -1),
        ("registration", "seed", 1.5),
        ("registration", "max_iterations", 0),
        ("registration", "stable", True),
        ("neighbourhood", "min_points", 3),
        ("neighbourhood", "use_intensity", 1),
        ("strain", "measure", "engineering"),
        ("strain", "structure", "bridge"),
        ("strain", "thickness", 0),
        ("strain", "free_side", [1.0, 2.0]),
        ("strain", "free_side", [1.0, 2.0, math.nan]),
        ("strain", "false_discovery_rate", 0),
        ("strain", "false_discovery_rate", 0.9),
        ("output", "colour_by", "disp"),
        ("output", "colour_limits", [0.01, -0.01]),
        ("output", "colour_limits", [-0.01, 0.02]),
        ("output", "colour_limits", [1.0]),
        ("output", "no_data", 0.0),
        ("output", "no_data", -9999.1),
        ("output", "no_data", 1e300),
        ("output", "no_data", "none"),
        ("output", "only_significant", "no"),
    ],
)
def test_wrong_values_give_one_fault_at_their_key(stage, key, value):
    assert list(texts(CompareConfig, {stage: {key: value}})) == [f"{stage}.{key}"]


def test_lists_of_numbers_are_read_as_toml_has_them():
    strain = StrainOptions(free_side=[1, 2.5, 3])
    assert strain.free_side == (1.0, 2.5, 3.0)
    assert OutputOptions(colour_limits=[-0.01, 0.01]).colour_limits == (-0.01, 0.01)


@pytest.mark.parametrize(("given", "number"), [("nan", None), (math.nan, None), (-9999.0, -9999.0), (-9999, -9999.0)])
def test_no_data_is_nan_or_a_number_that_no_measurement_reaches(given, number):
    assert OutputOptions(no_data=given).no_data_number == number


@pytest.mark.parametrize(
    ("data", "key", "word"),
    [
        ({"neighbourhood": {"gauge_length": 0.2, "gauge_spacing": 0.5}}, "neighbourhood.gauge_spacing", "0.2"),
        ({"neighbourhood": {"gauge_length": 0.2, "resolution": 0.5}}, "neighbourhood.resolution", "0.2"),
        ({"output": {"colour_by": "bend_1"}}, "output.colour_by", "thickness"),
        ({"output": {"colour_by": "status", "colour_limits": [-1, 1]}}, "output.colour_limits", "code"),
    ],
)
def test_contradictions_are_refused(data, key, word):
    found = texts(CompareConfig, data)
    assert list(found) == [key]
    assert word in found[key]


def test_what_contradicts_nothing_is_accepted():
    data = {
        "neighbourhood": {"gauge_length": 0.5, "gauge_spacing": 0.5},
        "strain": {"thickness": 0.3},
        "output": {"colour_by": "bend_1", "colour_limits": [-1e-3, 1e-3]},
    }
    assert texts(CompareConfig, data) == {}


def test_the_resolved_options_are_strict_json_that_reads_back():
    config = config_from_options({"gauge_length": 0.8, "free_side": [1, 2, 3], "no_data": math.nan})
    text = json.dumps(config.model_dump(mode="json"), allow_nan=False)
    assert CompareConfig.model_validate(json.loads(text)) == config
    assert json.loads(text)["neighbourhood"]["gauge_length"] == 0.8


def test_loose_options_find_their_stage():
    config = config_from_options({"gauge_length": 0.8, "structure": "wall", "seed": 3, "colour_by": "tilt"})
    assert (config.neighbourhood.gauge_length, config.strain.structure) == (0.8, "wall")
    assert (config.registration.seed, config.output.colour_by) == (3, "tilt")


def test_names_of_options_are_unique_over_the_stages():
    names = [name for names in option_names().values() for name in names]
    assert len(names) == len(set(names))


def test_loose_options_report_every_fault_in_the_callers_spelling():
    with pytest.raises(OptionError) as caught:
        config_from_options({"gauge_lenght": 1, "seed": -1, "structure": "wal"}, spelling=lambda name: f"<{name}>")
    lines = str(caught.value).splitlines()
    assert len(lines) == 3
    assert lines[0].startswith("<gauge_lenght>: ")
    assert "did you mean <gauge_length>" in lines[0]
    assert lines[1].startswith("<seed>: required a whole number from 0")
    assert "(did you mean wall?)" in lines[2]


def test_the_schema_names_every_key_and_forbids_others():
    schema = BatchConfig.model_json_schema()
    assert schema["additionalProperties"] is False
    assert set(schema["properties"]) == set(BatchConfig.model_fields)
    options = schema["$defs"]["NeighbourhoodOptions"]
    assert options["additionalProperties"] is False
    assert options["properties"]["min_points"]["minimum"] == 12


def test_models_are_importable_by_name_and_pickle():
    import pickle

    config = config_from_options({"gauge_length": 0.8})
    assert isinstance(config, BaseModel)
    assert pickle.loads(pickle.dumps(config)) == config


def test_a_ladder_rises_above_the_gauge_length():
    found = texts(CompareConfig, {"neighbourhood": {"gauge_length": 0.6, "gauge_ladder": 0.5}})
    assert "above the gauge_length, 0.6 m" in found["neighbourhood.gauge_ladder"]
    assert CompareConfig(neighbourhood={"gauge_length": 0.6, "gauge_ladder": 1.2}).neighbourhood.gauge_ladder == 1.2
    assert CompareConfig().neighbourhood.gauge_ladder is None
