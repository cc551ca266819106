# SPDX-License-Identifier: MIT
"""Writes commented batch files from the models, so that a starter file cannot fall behind the options."""

from __future__ import annotations

import datetime as dt
import json
import os
import re
import textwrap
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from pydantic import BaseModel
from pydantic.fields import FieldInfo

from scanstrain.config.batch_file import BatchConfig
from scanstrain.config.faults import required
from scanstrain.config.joint import JointEntry
from scanstrain.config.place import PlaceEntry
from scanstrain.config.trigger import TriggerEntry
from scanstrain.config.zone import ZoneEntry
from scanstrain.errors import OptionError, OutputError, explain

PLACEHOLDERS = ("first_scan.laz", "second_scan.laz")
"""Files that a starter names when it is given none; a check lets them pass with a word."""

LISTS = ("epoch", "comparison", "place", "zone", "joint", "trigger")
"""Tables that may stand several times."""

WIDTH = 100
"""Longest comment line [characters]."""

_HEADING = (
    "Batch file for `scanstrain run`. A line that begins with #, and would otherwise set a key, shows the "
    "default: remove the # to change it. Lengths in metres, angles in radians, strains as plain numbers "
    "(1e-6 is one microstrain)."
)


@dataclass(frozen=True, slots=True)
class StarterEpoch:
    """One `[[epoch]]` of a starter file."""

    label: str
    file: str
    date: dt.date | None = None


def starter_text(
    epochs: Sequence[StarterEpoch] = (),
    *,
    heading: str = _HEADING,
    folder: str = "results",
    chosen: Mapping[str, Any] | None = None,
) -> str:
    """Return a complete batch file: every option, what it means, its limits and its default.

    Parameters
    ----------
    epochs : sequence of StarterEpoch
        The scans; two placeholders where there are none.
    heading : str
        First paragraph.
    folder : str
        Folder for the results.
    chosen : mapping of str to value
        Options to set, by bare name; all others are shown with their default behind a `#`.
    """
    values = {"comparisons": "first", "folder": folder, **(chosen or {})}
    epochs = epochs or [StarterEpoch("first", PLACEHOLDERS[0]), StarterEpoch("second", PLACEHOLDERS[1])]
    tables = {name: field for name, field in BatchConfig.model_fields.items() if name not in LISTS}
    lines = [*_comment(heading), ""]
    for name, field in tables.items():
        if _table(field) is None:
            lines += [*_option(BatchConfig, name, values), ""]
    lines += _epochs(epochs)
    for name, field in tables.items():
        if (model := _table(field)) is not None:
            lines += ["", *_comment(str(field.description)), f"[{name}]"]
            for option in model.model_fields:
                lines += [*_option(model, option, values), ""]
            lines.pop()
    examples: tuple[tuple[str, type[BaseModel], str], ...] = (
        ("place", PlaceEntry, "chainage_*"),
        ("zone", ZoneEntry, "abutment"),
        ("joint", JointEntry, "ring 3"),
    )
    for table, model, name in examples:
        lines += ["", *_list_entry(table, model, name)]
    lines += ["", *_list_entry("trigger", TriggerEntry, "movement")]
    return "\n".join(lines) + "\n"


def write_starter(path: Path, scans: Sequence[Path] = ()) -> Path:
    """Write a batch file for some scans, named from where it lies; one that is there already is not replaced.

    Raises
    ------
    OptionError
        The file is there, is no TOML file by its name, or there is one scan only.
    OutputError
        The file cannot be written.
    """
    if path.suffix.lower() != ".toml":
        raise OptionError(
            explain(str(path), "a name that ends in .toml", f"{path.name!r}", "name the batch file first, then scans")
        )
    if len(scans) == 1:
        raise OptionError(explain(str(path), "two scans or more, or none", "one scan", "name the scans of all epochs"))
    epochs = [StarterEpoch(_label(scan), _seen_from(path.absolute().parent, scan)) for scan in scans]
    try:
        with path.open("x", encoding="utf-8", newline="\n") as stream:
            stream.write(starter_text(epochs))
    except FileExistsError:
        raise OptionError(
            explain(str(path), "a new file", "one that is there already", "choose another name")
        ) from None
    except OSError as error:
        got = (error.strerror or str(error)).lower()
        raise OutputError(explain(str(path), "a place that can be written to", got, "choose another one")) from None
    return path


def _label(scan: Path) -> str:
    """Make a label from a file name: what labels cannot hold becomes an underscore."""
    return re.sub(r"^[^\w]+|[^\w.-]", "_", scan.stem)


def _seen_from(folder: Path, scan: Path) -> str:
    return Path(os.path.relpath(scan.absolute(), folder)).as_posix()


def _table(field: FieldInfo) -> type[BaseModel] | None:
    model = field.annotation
    return model if isinstance(model, type) and issubclass(model, BaseModel) else None


def _comment(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, initial_indent="# ", subsequent_indent="# ")


def _option(model: type[BaseModel], name: str, values: Mapping[str, Any]) -> list[str]:
    field = model.model_fields[name]
    said = f"{field.description} Value: {required(model, name)}."
    if name in values:
        return [*_comment(said), f"{name} = {json.dumps(values[name])}"]
    shown = field.examples[0] if field.examples else field.default
    return [*_comment(said), f"#{name} = {json.dumps(shown)}"]


def _epochs(epochs: Sequence[StarterEpoch]) -> list[str]:
    lines = _comment(f"{BatchConfig.model_fields['epoch'].description} Relative paths start at this file.")
    for epoch in epochs:
        lines += ["[[epoch]]", f"label = {json.dumps(epoch.label)}", f"file = {json.dumps(epoch.file)}"]
        lines += [f"date = {epoch.date.isoformat()}" if epoch.date else "#date = 2031-03-04", ""]
    lines += _comment("Chosen pairs, in place of `comparisons` above:")
    lines += ["#[[comparison]]", f'#reference = "{epochs[0].label}"', f'#current = "{epochs[1].label}"']
    return lines


def _list_entry(table: str, model: type[BaseModel], example: str) -> list[str]:
    """One table of a list, all of it behind a `#`: nothing of the kind is there until somebody writes it."""
    lines = _comment(str(BatchConfig.model_fields[table].description))
    lines += [f"#[[{table}]]", f'#name = "{example}"']
    for name, field in model.model_fields.items():
        if field.examples:
            lines += [*_comment(str(field.description)), f"#{name} = {json.dumps(field.examples[0])}"]
    return lines
