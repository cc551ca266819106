# SPDX-License-Identifier: MIT
"""From places and patterns to the files that are there: one batch a place, every pattern one file in it."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path

from scanstrain.config.batch_file import LABEL, BatchConfig, EpochEntry
from scanstrain.config.faults import Fault, contradiction
from scanstrain.config.place import PLACE, WILD

SHOWN = 3
"""Files that a message names."""


@dataclass(frozen=True, slots=True)
class Site:
    """One place of a batch file.

    Parameters
    ----------
    name : str
        Of the place; empty where the file has no places.
    batch : BatchConfig
        With the files of this place and its own output folder.
    """

    name: str
    batch: BatchConfig


def find_sites(config: BatchConfig) -> tuple[tuple[Site, ...], list[Fault]]:
    """Look for the files of every place.

    Parameters
    ----------
    config : BatchConfig
        With absolute paths.

    Returns
    -------
    sites : tuple of Site
        In the order of their names, numbers by their value. An epoch without a file at a place keeps its pattern
        for a path, so that its comparisons fail by themselves and say so.
    faults : list of Fault
        Patterns that match nothing anywhere, or several files at one place.
    """
    if not config.place:
        if not any(_is_wild(entry.file.as_posix()) for entry in config.epoch):
            return (Site("", config),), []
        epochs, faults = _resolved(config, "")
        return (Site("", config.model_copy(update={"epoch": epochs})),), faults
    names, faults = _names(config)
    sites = []
    for name in names:
        epochs, more = _resolved(config, name)
        faults += more
        sites.append(Site(name, _placed(config, name, epochs)))
    return tuple(sites), faults


def _placed(config: BatchConfig, place: str, epochs: tuple[EpochEntry, ...]) -> BatchConfig:
    """Return the batch of one place."""
    output = config.output.model_copy(update={"folder": config.output.folder / place})
    registration = config.registration
    if registration.start_file is not None:
        start_file = Path(str(registration.start_file).replace(PLACE, place))
        registration = registration.model_copy(update={"start_file": start_file})
    changes = {"epoch": epochs, "output": output, "registration": registration, "place": ()}
    return config.model_copy(update=changes)


def _names(config: BatchConfig) -> tuple[list[str], list[Fault]]:
    """Names of all places that any epoch shows, and the places and epochs that show nothing."""
    faults, names = [], set()
    seen: dict[int, set[str]] = {position: set() for position in range(len(config.epoch))}
    for place, entry in enumerate(config.place):
        here: set[str] = set()
        for position, epoch in enumerate(config.epoch):
            found = {name for name, _ in _matches(epoch.file, entry.name)}
            seen[position] |= found
            here |= found
        if not here:
            remedy = "check the name and the paths, which start at this file"
            faults.append(contradiction("a place with scans", f"no file for {entry.name!r} at any epoch", remedy,
                                        key=("place", place, "name")))  # fmt: skip
        names |= here
    for position, found in seen.items():
        if not found:
            got = f"no file for {config.epoch[position].file} at any place"
            faults.append(contradiction("a pattern that files match", got, "check the path", key=_key(position)))
    for name in sorted(names):
        if not re.fullmatch(LABEL[1:-1], name):
            got = f"a place {name!r}"
            faults.append(contradiction("names of letters, digits, dots, hyphens and underscores", got,
                                        "rename the folder or file", key=("place",)))  # fmt: skip
    return sorted(names, key=_natural), faults


def _resolved(config: BatchConfig, place: str) -> tuple[tuple[EpochEntry, ...], list[Fault]]:
    """Return the epochs with the files of a place."""
    epochs, faults = [], []
    owner: dict[Path, str] = {}
    where = f" at {place}" if place else ""
    for position, entry in enumerate(config.epoch):
        file = Path(str(entry.file).replace(PLACE, place))
        files = [file] if file.exists() or not _is_wild(file.as_posix()) else [f for _, f in _matches(file, place)]
        if len(files) > 1:
            got = f"{len(files)} files{where}: {_listed(each.name for each in files)}"
            remedy = "make the pattern narrower"
            faults.append(contradiction("one file for each epoch", got, remedy, key=_key(position)))
        elif not files and not place:
            got = f"no file for {file}"
            faults.append(contradiction("a pattern that a file matches", got, "check the path", key=_key(position)))
        elif files and files[0] in owner:
            got = f"{files[0].name}{where} again, which is epoch {owner[files[0]]!r}"
            remedy = "make the pattern narrower"
            faults.append(contradiction("a different file for each epoch", got, remedy, key=_key(position)))
        chosen = files[0] if files else file
        owner.setdefault(chosen, entry.label)
        epochs.append(entry.model_copy(update={"file": chosen}))
    return tuple(epochs), faults


def _matches(file: Path, name: str) -> Iterator[tuple[str, Path]]:
    """Yield (place, path) of every file that a pattern finds for places of a name, which may be a pattern too."""
    text = file.as_posix()
    first, *others = text.split(PLACE)
    shape = _expression(first) + "".join(
        (f"(?P<place>{_expression(name)})" if number == 0 else "(?P=place)") + _expression(part)
        for number, part in enumerate(others)
    )
    root = Path(file.anchor)
    pattern = text.replace(PLACE, name).removeprefix(root.as_posix()).replace("[", "[[]")
    for path in sorted(root.glob(pattern)):
        found = re.fullmatch(shape, path.as_posix())
        # What begins with a dot is hidden, and often half-written.
        if found and path.is_file() and not path.name.startswith("."):
            yield found.groupdict().get("place", name), path


def _expression(pattern: str) -> str:
    wild = {"*": "[^/]*", "?": "[^/]"}
    return "".join(wild.get(letter) or re.escape(letter) for letter in pattern)


def _is_wild(text: str) -> bool:
    return bool(WILD & set(text))


def _natural(name: str) -> list[tuple[int, int | str]]:
    """Sort chainage_20 before chainage_100."""
    return [(0, int(part)) if part.isdecimal() else (1, part) for part in re.split(r"(\d+)", name) if part]


def _listed(names: Iterable[str]) -> str:
    every = list(names)
    return ", ".join(every[:SHOWN]) + (f" and {len(every) - SHOWN} more" if len(every) > SHOWN else "")


def _key(position: int) -> tuple[str | int, ...]:
    return ("epoch", position, "file")
