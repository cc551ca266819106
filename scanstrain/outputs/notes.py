# SPDX-License-Identifier: MIT
"""What a coloured cloud and its key say besides the colours: gauge length, limits, epochs, significance."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.outputs.words import STANDARD_ERROR, limit_key
from scanstrain.result import Result

_COMPANIONS = ("discovery", "observed", "status")
"""Written beside the coloured attribute, so that a picked point explains itself."""


@dataclass(frozen=True, slots=True)
class KeyNotes:
    """What a key says besides its colours; what is not known is left out of the picture.

    Parameters
    ----------
    gauge_length : float, optional
        Patch diameter [m].
    detection_limit : float, optional
        Median over the gauges, 95 %, in stored units.
    epochs : str
        Which epochs were compared.
    """

    gauge_length: float | None = None
    detection_limit: float | None = None
    epochs: str = ""

    @classmethod
    def of(cls, result: Result, name: str) -> KeyNotes:
        """Collect the notes for one attribute of a result."""
        limits = result.strain.detection_limit
        key = limit_key(name, limits)
        finite = limits[key][np.isfinite(limits[key])] if key else np.empty(0)
        return cls(
            gauge_length=result.strain.gauge_length,
            detection_limit=float(np.median(finite)) if len(finite) else None,
            epochs=f"{result.reference.label} → {result.current.label}",
        )


def notes_beside(cloud: Path, name: str) -> KeyNotes:
    """Collect the notes from the `summary.json` beside a cloud, as far as there is one."""
    try:
        summary = json.loads(cloud.with_name("summary.json").read_text(encoding="utf-8"))
        inputs = summary["inputs"]
        return KeyNotes(
            gauge_length=summary["gauges"]["gauge_length"],
            detection_limit=summary["results"][name]["detection_limit"],
            epochs=f"{inputs['reference']['label']} → {inputs['current']['label']}",
        )
    except (OSError, ValueError, KeyError, TypeError):
        return KeyNotes()


def beside(name: str, values: Mapping[str, NDArray[np.generic]]) -> dict[str, NDArray[np.generic]]:
    """Pick what a coloured cloud holds: the attribute itself, its standard error and the codes."""
    wanted = {name, STANDARD_ERROR.get(name), *_COMPANIONS}
    return {each: row for each, row in values.items() if each in wanted}


def significant_or_all(values: Mapping[str, NDArray[np.generic]], wanted: bool) -> NDArray[np.bool_] | None:
    """Tell where a change survives false-discovery control, or give None if nobody asked."""
    if not wanted:
        return None
    if "discovery" not in values:
        raise OptionError(
            explain("only_significant", "the attribute discovery in the cloud", "a cloud without it",
                    "colour strain.laz, or leave the option out")
        )  # fmt: skip
    return np.asarray(np.asarray(values["discovery"]) == 1)
