# SPDX-License-Identifier: MIT
"""What is wrong with a set of options, every fault at once, each as one sentence about one key."""

from __future__ import annotations

import copy
import difflib
import json
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, NoReturn, get_args

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails, PydanticCustomError

Location = tuple[str | int, ...]
RAW = "contradiction"
"""Type of the errors whose text our own validators have put together already."""


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that is wrong: the key by its path in the file, and the sentence about it."""

    location: Location
    text: str

    @property
    def key(self) -> str:
        """The path as it is written in TOML, list entries counted from 1."""
        return dotted(self.location)


def dotted(location: Location) -> str:
    """Write a path of keys and list positions in one word.

    >>> dotted(("epoch", 0, "file"))
    'epoch[1].file'
    """
    word = ""
    for part in location:
        word += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if word else part
    return word


def refuse(required: str, got: str, remedy: str, *, key: Location = ()) -> NoReturn:
    """Refuse a value from inside a validator; `key` is a path inside that value."""
    raise _refusal([contradiction(required, got, remedy, key=key)])


def contradiction(required: str, got: str, remedy: str, *, key: Location = ()) -> Fault:
    """Put a fault together from its three parts."""
    return Fault(key, f"required {required}; got {got}; {remedy}")


def refuse_all(faults: list[Fault]) -> None:
    """Refuse a value from inside a validator if there are any `faults`; their paths start at that value."""
    if faults:
        raise _refusal(faults)


def _refusal(faults: list[Fault]) -> PydanticCustomError:
    text = "; ".join(fault.text for fault in faults)
    return PydanticCustomError(RAW, "{text}", {"text": text, "faults": faults})


def find_faults(model: type[BaseModel], data: Mapping[str, Any]) -> list[Fault]:
    """Check `data` against `model` and return everything that is wrong, in the order in which it was found.

    Contradictions between options only show once each of them is valid by itself. So what is wrong is taken out and
    the rest checked again, until nothing new turns up.
    """
    found: dict[Location, Fault] = {}
    rest = copy.deepcopy(dict(data))
    while fresh := [fault for fault in _faults(model, rest) if not _known(fault.location, found)]:
        for fault in fresh:
            found.setdefault(fault.location, fault)
            _take_out(model, rest, fault.location)
    return list(found.values())


def _known(location: Location, found: Mapping[Location, Fault]) -> bool:
    """Whether a place was found faulty already, or holds what was: taking that out may leave too little."""
    return any(other == location or _inside(other, location) for other in found)


def _faults(model: type[BaseModel], data: Mapping[str, Any]) -> list[Fault]:
    try:
        model.model_validate(data)
    except ValidationError as error:
        faults = [fault for detail in error.errors(include_url=False) for fault in _translated(model, data, detail)]
        # A list with a faulty entry is also called too short: only the entry is to blame.
        return [fault for fault in faults if not any(_inside(other.location, fault.location) for other in faults)]
    return []


def _inside(location: Location, outer: Location) -> bool:
    return len(location) > len(outer) and location[: len(outer)] == outer


def _take_out(model: type[BaseModel], data: dict[str, Any], location: Location) -> None:
    """Remove a faulty value; put a stand-in where a value must be, so that the keys beside it can be checked."""
    if not isinstance(location[-1], str):
        return
    owner, _ = _owner(model, location)
    field = owner.model_fields.get(location[-1])
    table = _at(data, location[:-1])
    if isinstance(table, dict):
        table.pop(location[-1], None)
        if field is not None and field.is_required() and _inner(field.annotation) is None:
            place = "-".join(str(part + 1) for part in location if isinstance(part, int))
            table[location[-1]] = f"unusable-{location[-1]}-{place}"


def _translated(model: type[BaseModel], data: Mapping[str, Any], detail: ErrorDetails) -> list[Fault]:
    owner, location = _owner(model, detail["loc"])
    if detail["type"] == RAW:
        return [Fault((*location, *fault.location), fault.text) for fault in detail["ctx"]["faults"]]
    name = str(location[-1])
    if detail["type"] == "extra_forbidden":
        return [Fault(location, _unknown(model, owner, name))]
    field, wanted = owner.model_fields[name], required(owner, name)
    if detail["type"] == "missing" and location == detail["loc"]:
        return [Fault(location, f"required {wanted}; got nothing; add it")]
    value = _at(data, location)
    remedy = "correct it" if field.is_required() else "correct it or leave it out"
    if isinstance(field.default, str | int | float):
        remedy = f"leave it out for the default, {_value(field.default)}"
    near = difflib.get_close_matches(str(value), re.findall(r'"([^"]+)"', wanted), n=1)
    guess = f" (did you mean {near[0]}?)" if near else ""
    return [Fault(location, f"required {wanted}; got {_value(value)}; {remedy}{guess}")]


def _value(value: Any) -> str:
    """Show a value as TOML writes it."""
    if isinstance(value, Mapping):
        return "a table"
    if isinstance(value, list | tuple) and any(isinstance(item, Mapping) for item in value):
        return f"{len(value)} of them"
    try:
        return json.dumps(value, ensure_ascii=False)
    except TypeError:
        return str(value)


def _unknown(model: type[BaseModel], owner: type[BaseModel], name: str) -> str:
    near = difflib.get_close_matches(name, list(owner.model_fields), n=1)
    homes = [table for table, inner in _tables(model).items() if name in inner.model_fields and inner is not owner]
    if homes and not (near and near[0] == name):
        return f"unknown key here (it belongs in [{homes[0]}])"
    return "unknown key " + (f"(did you mean {near[0]}?)" if near else f"(known: {', '.join(owner.model_fields)})")


def _tables(model: type[BaseModel]) -> dict[str, type[BaseModel]]:
    pairs = ((name, _inner(field.annotation)) for name, field in model.model_fields.items())
    return {name: inner for name, inner in pairs if inner is not None}


def _inner(annotation: Any) -> type[BaseModel] | None:
    """Return the model that a field holds, itself or as the items of a tuple."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    return next((inner for item in get_args(annotation) if (inner := _inner(item)) is not None), None)


def _owner(model: type[BaseModel], location: Location) -> tuple[type[BaseModel], Location]:
    """Return the model that holds the last named key, and the path without what the checker adds behind it."""
    path: Location = ()
    for position, part in enumerate(location):
        path = (*path, part)
        if isinstance(part, int):
            continue
        inner = _inner(model.model_fields[part].annotation) if part in model.model_fields else None
        rest = location[position + 1 :]
        if inner is None or not any(isinstance(item, str) for item in rest):
            return model, path + (rest if inner is not None else ())
        model = inner
    return model, path


def _at(data: Any, location: Location) -> Any:
    for part in location:
        data = data[part]
    return data


def required(model: type[BaseModel], name: str) -> str:
    """Say in words what an option may be, from its schema and the unit in its description."""
    schema = model.model_json_schema()["properties"][name]
    unit = re.search(r" \[(m|rad)\]", schema.get("description", ""))
    words = _words(schema)
    return words.replace(" or ", f"{unit[0]} or ", 1) if unit and " or " in words else words + (unit[0] if unit else "")


def _words(schema: Mapping[str, Any]) -> str:
    if "anyOf" in schema:
        return " or ".join(_words(part) for part in schema["anyOf"] if part.get("type") != "null")
    if "const" in schema:
        return json.dumps(schema["const"])
    if "enum" in schema:
        return "one of " + ", ".join(json.dumps(word) for word in schema["enum"])
    kind, form = schema.get("type"), schema.get("format")
    if kind in ("number", "integer"):
        return _number(schema)
    if kind == "array":
        return _list(schema)
    if form == "date":
        return "a date without quotes, such as 2031-03-04"
    if kind == "boolean":
        return "true or false"
    if "pattern" in schema:
        return "letters, digits, dots, hyphens and underscores, in quotes"
    if kind == "string":
        return "a path in quotes" if form == "path" else "text in quotes"
    return "a table"


def _list(schema: Mapping[str, Any]) -> str:
    fixed = schema.get("prefixItems")
    inner = (fixed or [schema.get("items", {})])[0]
    kinds = {
        "number": "numbers",
        "integer": "whole numbers",
        "string": "names in quotes",
        "array": "corners in brackets",
    }
    least = f"at least {schema['minItems']} " if "minItems" in schema and not fixed else ""
    if inner.get("type") in kinds:
        return f"a list of {len(fixed) if fixed else least}{' ' if fixed else ''}{kinds[inner['type']]}"
    return f"{least}tables, each under its own [[...]] line"


def _number(schema: Mapping[str, Any]) -> str:
    word = "a whole number" if schema["type"] == "integer" else "a number"
    signs = {"exclusiveMinimum": "above", "minimum": "from", "exclusiveMaximum": "below", "maximum": "up to"}
    return " ".join([word, *(f"{sign} {schema[key]}" for key, sign in signs.items() if key in schema)])
