# SPDX-License-Identifier: MIT
"""Where kept stages lie: in the folder of the result, or beside its place as long as there is none."""

from __future__ import annotations

import shutil
from pathlib import Path

NAME = ".stages"


def stage_folder(folder: Path) -> Path:
    """Return where the stages of a result folder lie at present; whoever removes the result, removes them too."""
    return folder / NAME if folder.is_dir() else _beside(folder)


def gather(folder: Path) -> None:
    """Bring the stages of a run, stopped or finished, into the folder of the result if there is one by now."""
    beside, inside = _beside(folder), folder / NAME
    if folder.is_dir() and beside.is_dir():
        shutil.rmtree(inside, ignore_errors=True)
        beside.rename(inside)
    for path in stage_folder(folder).glob(".*.part"):  # half-written when a run was killed
        path.unlink(missing_ok=True)


def forget(folder: Path) -> None:
    """Remove all kept stages of a result folder."""
    for place in (folder / NAME, _beside(folder)):
        shutil.rmtree(place, ignore_errors=True)


def _beside(folder: Path) -> Path:
    place = folder.absolute()
    return place.with_name(f".{place.name}{NAME}")
