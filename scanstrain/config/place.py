# SPDX-License-Identifier: MIT
"""The model of a place: one of many objects that were all scanned at the same epochs."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

from pydantic import Field

from scanstrain.config.base import Options
from scanstrain.config.faults import Fault, contradiction

PLACE = "{place}"
"""Stands in the file of an epoch for the name of the place."""

WILD = frozenset("*?")
"""Stand for any text and for any one character, within one folder or file name."""


class PlaceEntry(Options):
    """One place, or all whose names fit a pattern."""

    name: str = Field(
        pattern=r"^[\w*?][\w.*?-]*$",
        description="Name of the place as it stands in the files of the epochs in place of {place}; * stands for any "
        "text and ? for one character, so that one table can describe many places.",
    )


def faults_of_places(places: tuple[PlaceEntry, ...], files: tuple[Path, ...]) -> Iterator[Fault]:
    """Say what is wrong between the places and the files of the epochs, without looking at the disk."""
    names = [entry.name for entry in places]
    for position, name in enumerate(names):
        if name in names[:position]:
            yield contradiction("each place once", f"{name!r} again", "remove it", key=("place", position, "name"))
    for position, file in enumerate(files):
        key = ("epoch", position, "file")
        if places and PLACE not in str(file):
            yield contradiction(f"a file with {PLACE} in its path, since there are places", str(file),
                                f"write for example scans/{PLACE}/first.laz", key=key)  # fmt: skip
        elif not places and PLACE in str(file):
            yield contradiction(f"a [[place]] for {PLACE}", "none", 'add one with name = "*"', key=key)
        if "**" in str(file):
            yield contradiction("* or ? within one name", "**", "name the folders between", key=key)
