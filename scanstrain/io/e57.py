# SPDX-License-Identifier: MIT
"""E57 scans (.e57) through pye57, which the extra `e57` installs: every set-up in its pose, numbered from 1."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import MissingDependencyError, explain
from scanstrain.io.build import RawScan, build_epoch
from scanstrain.io.crs import FileFrame, frame_from_wkt
from scanstrain.io.files import refuse
from scanstrain.io.formats import FORMATS, Format

SIGNATURE = b"ASTM-E57"
NO_STATEMENT = "states no coordinate system (E57 is always in metres)"
COLOURS = ("colorRed", "colorGreen", "colorBlue")


def read_e57(path: Path, *, origin: ArrayLike | None = None, label: str | None = None) -> Epoch:
    """Read all set-ups of an E57 file, each moved by the pose that the file gives it. Coordinates are metres.

    Points that the file marks as invalid are left out by the reader and not counted.

    Raises
    ------
    MissingDependencyError
        pye57 is not installed.
    InputFileError
        Not an E57 file, damaged, or without points.
    """
    try:
        with path.open("rb") as stream:
            start = stream.read(len(SIGNATURE))
    except OSError as error:
        raise refuse(path, "a file that can be read", error.strerror or str(error), "check the permissions") from error
    if start != SIGNATURE:
        raise refuse(path, "an E57 file, which begins with ASTM-E57", repr(start), "check the kind of file")
    scans, text = _read_scans(path)
    if not scans or not any(len(scan["cartesianX"]) for scan in scans):
        raise refuse(path, "points", "none")
    sizes = [len(scan["cartesianX"]) for scan in scans]
    axes = ("cartesianX", "cartesianY", "cartesianZ")
    raw = RawScan(
        path=path,
        coordinates=np.concatenate([np.stack([scan[axis] for axis in axes], axis=1) for scan in scans]),
        frame=frame_from_wkt(path, text) if text.strip() else FileFrame(notices=(NO_STATEMENT,)),
        intensity=_joined(scans, ("intensity",)),
        colour=_joined(scans, COLOURS),
        setup=np.repeat(np.arange(1, len(scans) + 1), sizes).astype(np.uint16),
    )
    return build_epoch(raw, origin=origin, label=label)


def _read_scans(path: Path) -> tuple[list[dict[str, NDArray[Any]]], str]:
    try:
        import pye57
    except ImportError as error:
        remedy = 'pip install "scanstrain[e57]", or export the scan as LAS'
        raise MissingDependencyError(explain(str(path), "the package pye57", "none installed", remedy)) from error
    try:
        with pye57.E57(str(path)) as file:
            scans = [
                file.read_scan(number, intensity=True, colors=True, ignore_missing_fields=True)
                for number in range(file.scan_count)
            ]
            root = file.root
            text = root["coordinateMetadata"].value() if root.isDefined("coordinateMetadata") else ""
    except (pye57.libe57.E57Exception, RuntimeError, ValueError, KeyError, TypeError, AttributeError) as error:
        what = (str(error).strip().splitlines() or [type(error).__name__])[0]
        raise refuse(path, "an undamaged E57 file", what) from error
    return scans, text


def _joined(scans: list[dict[str, NDArray[Any]]], names: tuple[str, ...]) -> NDArray[np.generic] | None:
    """Join fields over the set-ups; a field that one of them lacks is left out, since half a texture misleads."""
    if not all(name in scan for scan in scans for name in names):
        return None
    if len(names) == 1:
        return np.concatenate([scan[names[0]] for scan in scans])
    return np.concatenate([np.stack([scan[name] for name in names], axis=1) for scan in scans])


FORMATS.add("e57", Format((".e57",), read_e57))
