# SPDX-License-Identifier: MIT
"""What the result of each stage depends on, as one hash: inputs, options, the stages before it, the program."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping
from typing import Any

from scanstrain.config import CompareConfig
from scanstrain.program import DRAWING, identity

FORMAT = 1
"""Of the files and of what the stages hand on; a higher number makes every kept stage void."""

Options = dict[str, Any]


def _registration(config: CompareConfig) -> Options:
    """Datum, and the object as a whole, whose chainage and faces zones may refer to."""
    named = {*config.registration.stable_zones, *config.registration.excluded_zones}
    options = config.registration.model_dump(mode="json")
    options.pop("start_file")  # its content counts, and stands among the inputs
    return {
        "registration": options,
        "colour": config.neighbourhood.use_colour and config.neighbourhood.use_intensity,
        "zones": [zone.model_dump(mode="json") for zone in config.zone if zone.name in named],
        "structure": config.strain.structure,
        "free_side": config.strain.free_side,
        "axis": config.tunnel.axis,
        "plane": config.wall.plane,
    }


def _field(config: CompareConfig) -> Options:
    """Gauges and joints."""
    return {
        "neighbourhood": config.neighbourhood.model_dump(mode="json"),
        "joints": [joint.model_dump(mode="json") for joint in config.joint],
    }


def _strain(config: CompareConfig) -> Options:
    """Strain, zones, sections and faces. Triggers, budget and colours only concern what is written."""
    return {
        "strain": config.strain.model_dump(mode="json"),
        "zones": [zone.model_dump(mode="json") for zone in config.zone],
        "tunnel": config.tunnel.model_dump(mode="json"),
        "wall": config.wall.model_dump(mode="json"),
    }


STAGES: dict[str, Callable[[CompareConfig], Options]] = {
    "registration": _registration,
    "field": _field,
    "strain": _strain,
}
"""The stages in their order, each with the options that it reads; it also depends on all stages before it."""


def stage_keys(config: CompareConfig, inputs: Mapping[str, str]) -> dict[str, str]:
    """Return the key of every stage.

    Parameters
    ----------
    config : CompareConfig
    inputs : mapping of str to str
        SHA-256 of every file that is read, by its part in the comparison, and the names that sentences use.

    Returns
    -------
    dict of str to str
        Hexadecimal digits.
    """
    program = {name: version for name, version in identity().items() if name not in DRAWING}
    before = _hash({"format": FORMAT, "program": program, "inputs": dict(inputs)})
    keys = {}
    for name, options in STAGES.items():
        before = keys[name] = _hash({"before": before, "stage": name, "options": options(config)})
    return keys


def _hash(content: Mapping[str, Any]) -> str:
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()
