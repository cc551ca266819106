# SPDX-License-Identifier: MIT
"""From a file or from loose options to a checked configuration."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any

from scanstrain.config.batch_file import BatchConfig
from scanstrain.config.faults import Fault, contradiction, find_faults
from scanstrain.config.models import CompareConfig
from scanstrain.config.patterns import Site, find_sites
from scanstrain.config.starter import PLACEHOLDERS
from scanstrain.config.toml_faults import line_numbers, line_of, read_toml
from scanstrain.errors import OptionError, explain


def load_config(path: Path) -> BatchConfig:
    """Read a batch file; its relative paths start at the folder that it lies in.

    Raises
    ------
    OptionError
        With every fault of the file, one a line, as `file:line: key: what is wrong`; a pattern that leads to no
        file, or to several, is one.
    """
    text, data = read_toml(path)
    if faults := find_faults(BatchConfig, data):
        raise OptionError(_at_lines(path, text, faults))
    config = BatchConfig.model_validate(data).placed(path.absolute().parent)
    sites, faults = find_sites(config)
    if faults:
        raise OptionError(_at_lines(path, text, faults))
    return config if config.place else sites[0].batch


def sites_of(config: BatchConfig) -> tuple[Site, ...]:
    """Return the places of a batch with the files that are there; one without a name where it has no places.

    Raises
    ------
    OptionError
        A pattern leads to no file, or to several.
    """
    sites, faults = find_sites(config)
    if faults:
        raise OptionError("\n".join(f"{fault.key}: {fault.text}." for fault in faults))
    return sites


def check_batch(path: Path) -> list[str]:
    """Check a batch file without running it, scans included.

    Returns
    -------
    list of str
        What would be compared, in sentences for a person.

    Raises
    ------
    OptionError
        As `load_config` does it, also for scans that are not there.
    """
    config = load_config(path)
    faults: list[Fault] = []
    lines: list[str] = []
    names = []
    for site in sites_of(config):
        more, remarks = _absent(site, path)
        faults += more
        lines += remarks
        pairs = [f"{reference.label}_to_{current.label}" for reference, current in site.batch.pairs()]
        names += [f"{site.name}/{pair}" if site.name else pair for pair in pairs]
    if faults:
        raise OptionError(_at_lines(path, read_toml(path)[0], faults))
    return [*lines, f"{path}: valid; {len(names)} to compare: {', '.join(names)}."]


def _absent(site: Site, path: Path) -> tuple[list[Fault], list[str]]:
    """Scans of a place that are not there: faults, and remarks on those that a starter file names by default."""
    faults, lines = [], []
    for position, entry in enumerate(site.batch.epoch):
        if entry.file.name in PLACEHOLDERS and not entry.file.exists():
            lines.append(f"epoch {entry.label!r}: put the name of your scan in place of {entry.file.name}.")
        elif not entry.file.is_file():
            got = "a folder" if entry.file.is_dir() else "no such file"
            remedy = f"check the path, which starts at {path.absolute().parent}"
            faults.append(contradiction("a scan file", f"{got}, {entry.file}", remedy, key=("epoch", position, "file")))
    return faults, lines


def _at_lines(path: Path, text: str, faults: list[Fault]) -> str:
    numbers = line_numbers(text)
    lines = [(line_of(numbers, fault.location), fault) for fault in faults]
    ordered = sorted(lines, key=lambda pair: pair[0])
    said = [f"{path}:{number}: {fault.key}: {fault.text}." for number, fault in ordered]
    return said[0] if len(said) == 1 else "\n".join([f"{path} has {len(said)} faults:", *said])


def _same(name: str) -> str:
    return name


def config_from_options(options: Mapping[str, Any], *, spelling: Callable[[str], str] = _same) -> CompareConfig:
    """Make the configuration of one comparison from options by their bare names.

    Parameters
    ----------
    options : mapping of str to value
        Any option of any stage by its name, for example `gauge_length`; the names are unique over the stages.
    spelling : callable
        How the caller spells an option, for messages; the command line writes `--gauge-length`.

    Raises
    ------
    OptionError
        Unknown names, wrong or contradictory values; every fault, one a line.

    Examples
    --------
    >>> config_from_options({"gauge_length": 0.8}).neighbourhood.gauge_length
    0.8
    """
    homes = {name: stage for stage, names in option_names().items() for name in names}
    data: dict[str, dict[str, Any]] = {}
    said = []
    for name, value in options.items():
        if name in homes:
            data.setdefault(homes[name], {})[name] = value
        else:
            near = difflib.get_close_matches(name, list(homes), n=1)
            remedy = (
                f"did you mean {spelling(near[0])}" if near else "the options are " + ", ".join(map(spelling, homes))
            )
            said.append(explain(spelling(name), "the name of an option", "an unknown one", remedy))
    said += [f"{spelling(str(fault.location[1]))}: {fault.text}." for fault in find_faults(CompareConfig, data)]
    if said:
        raise OptionError("\n".join(said))
    return CompareConfig.model_validate(data)


def option_names() -> dict[str, list[str]]:
    """List the names of the options of each stage."""
    stages = CompareConfig().model_dump()
    return {stage: list(options) for stage, options in stages.items()}
