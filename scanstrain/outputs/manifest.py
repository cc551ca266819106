# SPDX-License-Identifier: MIT
"""manifest.json: what a result was made from and with, and every file of it with its hash.

A second run of the same thing compares it with what it would do, and with the files that are there.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from enum import Enum
from pathlib import Path
from typing import Any

from scanstrain.errors import InputFileError, explain
from scanstrain.io.atomic import replacing
from scanstrain.io.files import sha256
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.strict import plain, write_json
from scanstrain.program import identity
from scanstrain.result import Result

NAME = "manifest.json"
FORMAT = 1


class Standing(Enum):
    """How an existing result stands to what is asked for."""

    NONE = "nothing is there"
    UP_TO_DATE = "up to date"
    OTHER = "made from other scans or with other options"
    OLDER = "made by another version"
    INCOMPLETE = "not as it was written"


def write_manifest(result: Result, folder: Path, options: OutputOptions) -> Path:
    """Write `manifest.json`; it comes last, because it names all other files.

    Raises
    ------
    InputFileError
        A scan is no longer the one that was asked for.
    """
    epochs = {"reference": result.reference, "current": result.current}
    for name, epoch in epochs.items():
        if options.request is not None:
            _check_input(Path(epoch.provenance.path), options.request["inputs"][name])
    return write_json(
        {
            "format": FORMAT,
            "request": options.request,
            "inputs": {name: {"file": epoch.provenance.path, "sha256": epoch.provenance.sha256}
                       for name, epoch in epochs.items()},
            "options": result.config.model_dump(mode="json"),
            "software": identity(),
            "outputs": _facts(folder),
        },
        folder / NAME,
    )  # fmt: skip


def renew_manifest(folder: Path, *, painted: tuple[float, float] | None = None) -> None:
    """Bring the hashes in `manifest.json` up to files that were made anew from the same result, such as colours.

    A folder without a manifest that can be read is left alone: the next run makes its result anew. `painted` are the
    ends of a colour scale that the coloured cloud now has from outside.

    Raises
    ------
    OutputError
        The folder cannot be written to.
    """
    known = _read(folder)
    if known is None:
        return
    known["outputs"] = {name: facts for name, facts in _facts(folder).items() if name in known["outputs"]}
    if painted is not None:
        known["painted"] = list(painted)
    with replacing(folder / NAME) as beside:
        write_json(known, beside)


def painted_limits(folder: Path) -> tuple[float, float] | None:
    """Ends of the colour scale that the coloured cloud of a folder has from outside; None where it has its own."""
    known = _read(folder)
    if known is None or not isinstance(known.get("painted"), list):
        return None
    low, high = known["painted"]
    return float(low), float(high)


def _read(folder: Path) -> dict[str, Any] | None:
    """Read the manifest of a folder; None where there is none that can be read."""
    try:
        known = json.loads((folder / NAME).read_text(encoding="utf-8"))
    except (OSError, ValueError):
        return None
    return known if isinstance(known, dict) and isinstance(known.get("outputs"), dict) else None


def _facts(folder: Path) -> dict[str, dict[str, Any]]:
    files = [path for path in sorted(folder.iterdir()) if path.is_file() and path.name != NAME]
    return {path.name: {"bytes": path.stat().st_size, "sha256": sha256(path)} for path in files}


def standing(folder: Path, request: Mapping[str, Any]) -> tuple[Standing, str]:
    """Say whether a folder holds the finished result of a request already.

    Parameters
    ----------
    folder : Path
    request : mapping
        What would be computed, as it was given to `write_result`; plain JSON.

    Returns
    -------
    standing : Standing
    detail : str
        What is missing or changed, or which version it was; empty where there is nothing to say.
    """
    path = folder / NAME
    if not path.exists():
        there = (folder / "summary.json").exists()
        return (Standing.OLDER, "a version that wrote no manifest") if there else (Standing.NONE, "")
    try:
        known = json.loads(path.read_text(encoding="utf-8"))
        software, outputs = dict(known["software"]), dict(known["outputs"])
        if known["format"] != FORMAT or software != identity():
            return Standing.OLDER, f"version {software['scanstrain']}" + _sameness(software)
        if known["request"] != plain(request):
            return Standing.OTHER, ""
        for name, facts in outputs.items():
            if (why := _unlike(folder / Path(name).name, facts)) is not None:
                return Standing.INCOMPLETE, f"{name} {why}"
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return Standing.INCOMPLETE, f"{NAME} cannot be read"
    return Standing.UP_TO_DATE, ""


def _check_input(path: Path, wanted: str) -> None:
    """Refuse a result into which a scan went that was changed after it was hashed."""
    if sha256(path) != wanted:
        got = "one that was changed meanwhile"
        raise InputFileError(explain(str(path), "a scan that stays as it is to the end", got, "run it again"))


def _sameness(software: Mapping[str, str]) -> str:
    """Name the libraries where the version of the program itself is the same."""
    mine = identity()
    if software["scanstrain"] != mine["scanstrain"]:
        return ""
    other = [name for name in mine if software.get(name) != mine[name] and name != "source"]
    return f" with other {', '.join(other)}" if other else " with other modules"


def _unlike(path: Path, facts: Mapping[str, Any]) -> str | None:
    """Say how a file differs from what was written; None where it does not."""
    if not path.is_file():
        return "is missing"
    if path.stat().st_size != facts["bytes"] or sha256(path) != facts["sha256"]:
        return "was changed"
    return None
