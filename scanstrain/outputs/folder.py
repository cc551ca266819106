# SPDX-License-Identifier: MIT
"""Result folders that appear whole or not at all.

A new folder is filled beside its place and renamed. In an existing one, files are filled in a hidden sub-folder and
exchanged at the end, so that it may be a mount point, or somebody's working directory, or hold other files as well.
"""

from __future__ import annotations

import errno
import os
import re
import shutil
import uuid
from collections.abc import Callable, Iterable, Iterator
from contextlib import contextmanager
from pathlib import Path

from scanstrain.attributes import BY_NAME
from scanstrain.errors import OutputError, ScanstrainError, explain

TABLES = ("gauges.csv", "sections.csv", "wall.csv", "bulges.csv", "joints.csv")
PARTIAL = ".partial"
"""Ends the name of a folder that is being filled."""
PAGES = ("summary.json", "registered.json", "report.html", "manifest.json")
FIXED_NAMES = frozenset({"strain.laz", "strain.las", *TABLES, *PAGES})


def is_ours(name: str) -> bool:
    """Tell whether a file name is one that a result folder holds.

    >>> is_ours("strain_tilt.laz"), is_ours("strain_gauge_photo.png")
    (True, False)
    """
    path = Path(name)
    coloured = path.suffix in (".laz", ".las", ".ply", ".png") and path.stem.startswith("strain_")
    return name in FIXED_NAMES or (coloured and path.stem.removeprefix("strain_") in BY_NAME)


def check_folder(folder: str | os.PathLike[str], *, inputs: Iterable[str | os.PathLike[str]] = ()) -> Path:
    """Check, before a long computation and without writing anything, that a result can go into a folder.

    Parameters
    ----------
    folder : path
        Where the result shall go; it need not exist.
    inputs : iterable of path
        Files that must not be overwritten.

    Returns
    -------
    Path
        The folder as an absolute path.

    Raises
    ------
    OutputError
        It is a file or an input, an input lies where an output goes, or it cannot be written to.
    """
    target = Path(folder).expanduser().absolute()
    for source in (Path(each).expanduser().absolute() for each in inputs):
        inside = source.parent.resolve() == target.resolve() and is_ours(source.name)
        if inside or source.resolve() == target.resolve():
            raise OutputError(
                explain(str(folder), "a folder that leaves the inputs alone",
                        f"the input {source.name} in the place of an output", "choose another output folder")
            )  # fmt: skip
    if target.exists() and not target.is_dir():
        raise OutputError(explain(str(folder), "a folder", "a file of that name", "choose another output folder"))
    place = next(each for each in (target, *target.parents) if each.exists())
    if not place.is_dir() or not os.access(place, os.W_OK | os.X_OK):
        got = "no permission to write there" if place.is_dir() else f"{place} is a file"
        raise OutputError(explain(str(folder), "a place that can be written to", got, "choose another output folder"))
    return target


@contextmanager
def finished_only(folder: Path, *, retire: Callable[[str], bool] | None = None) -> Iterator[Path]:
    """Give a working folder whose files move into `folder` together, and only if the block ends without an error.

    Parameters
    ----------
    folder : Path
        Final place, new or existing.
    retire : callable, optional
        Says by name which files of an existing folder go away with the exchange; files of the same name always do.

    Raises
    ------
    OutputError
        In place of any `OSError`: disk full, no permission, and so on. The working folder is gone then, and what
        stood in `folder` before stands there still.
    """
    token = uuid.uuid4().hex[:8]
    exists = folder.exists()
    work = folder / f".{token}{PARTIAL}" if exists else folder.with_name(f".{folder.name}.{token}{PARTIAL}")
    try:
        work.mkdir(parents=True)
        yield work
        if exists:
            _exchange(work, folder, retire)
        else:
            work.rename(folder)
    except ScanstrainError:
        raise
    except OSError as error:
        raise OutputError(_because(folder, error)) from error
    finally:
        shutil.rmtree(work, ignore_errors=True)


def _exchange(work: Path, folder: Path, retire: Callable[[str], bool] | None) -> None:
    """Move the finished files in and the old ones out; on any failure put everything back."""
    finished = [path for path in work.iterdir() if path.is_file()]
    names = {path.name for path in finished}
    before = work / "before"
    before.mkdir()
    placed: list[Path] = []
    try:
        for path in [path for path in folder.iterdir() if path.is_file()]:
            if path.name in names or (retire is not None and retire(path.name)):
                path.rename(before / path.name)
        for path in finished:
            placed.append(path.rename(folder / path.name))
    except BaseException:
        for path in placed:
            path.unlink(missing_ok=True)
        for path in before.iterdir():
            path.rename(folder / path.name)
        raise


def recover(folder: Path) -> None:
    """Undo what a run that was killed left of its work on a folder; call it only while no other run is at work there.

    Half-written files go. Where the exchange of an old result for a new one was cut short, the old one comes back.
    """
    folder = folder.absolute()
    # Other comparisons may be at work in the same parent, under names that begin alike: x_to_y and x_to_y.2.
    mine = re.compile(rf"\.{re.escape(folder.name)}\.[0-9a-z_]{{8}}{re.escape(PARTIAL)}")
    beside = [path for path in folder.parent.glob(f".*{PARTIAL}") if mine.fullmatch(path.name)]
    for work in [*beside, *folder.glob(f".*{PARTIAL}")]:
        for path in [*work.glob("before/*")]:
            path.replace(folder / path.name)
        shutil.rmtree(work, ignore_errors=True)


def _because(folder: Path, error: OSError) -> str:
    remedies = {
        errno.ENOSPC: "free some space or choose another disk",
        errno.EDQUOT: "free some space or choose another disk",
        errno.EROFS: "choose a folder on a disk that can be written to",
        errno.EACCES: "choose a folder that you may write to",
    }
    remedy = remedies.get(error.errno or 0, "check the disk and choose another output folder if need be")
    return explain(str(folder), "room and permission to write the result", error.strerror or str(error), remedy)
