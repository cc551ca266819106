# SPDX-License-Identifier: MIT
"""Pairs of targets from a table of comma-separated values."""

from __future__ import annotations

import csv
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.io.files import file_size, refuse

FloatArray = NDArray[np.float64]

COORDINATES = ("ref_x", "ref_y", "ref_z", "cur_x", "cur_y", "cur_z")
DEVIATIONS = ("ref_sd", "cur_sd")
DEFAULT_SD = 0.002
"""Standard deviation of a target coordinate where the table states none [m]: what terrestrial scanners reach for the
centre of a target within some 50 m; a scan's own fit of a target is often better, a total station's network is too."""
LARGEST_SD = 1.0
"""A standard deviation above this is in millimetres [m]."""


@dataclass(frozen=True, slots=True)
class TargetTable:
    """Pairs of targets in file coordinates in metres.

    Parameters
    ----------
    names : tuple of str
    reference, current : ndarray of shape (n, 3)
        [m]
    reference_sd, current_sd : ndarray of shape (n,)
        Standard deviation of a coordinate [m].
    sd_stated : bool
        Whether the table states them all.
    """

    names: tuple[str, ...]
    reference: FloatArray
    current: FloatArray
    reference_sd: FloatArray
    current_sd: FloatArray
    sd_stated: bool


def read_targets(path: Path) -> TargetTable:
    """Read pairs of targets.

    The first line names the columns: name, ref_x, ref_y, ref_z, cur_x, cur_y, cur_z, and, where they are known,
    ref_sd and cur_sd, in any order. Commas separate them, or semicolons; the decimal sign is a dot. Everything is in
    metres. An empty standard deviation is `DEFAULT_SD`. Lines that begin with # are comments.

    Parameters
    ----------
    path : Path

    Returns
    -------
    TargetTable

    Raises
    ------
    InputFileError
        Columns that are missing or unknown, a line that cannot be read, a name twice.
    """
    file_size(path)
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except (OSError, UnicodeDecodeError) as error:
        raise refuse(path, "a table of targets as UTF-8 text", "a file that is not text", "save it as CSV") from error
    kept = [(n, line) for n, line in enumerate(lines, 1) if line.strip() and not line.lstrip().startswith("#")]
    if not kept:
        raise refuse(path, "a heading and a line a target", "no line", "save the table again")
    mark = ";" if ";" in kept[0][1] else ","
    heading = _heading(path, _cells(kept[0][1], mark))
    names: dict[str, int] = {}
    rows = []
    for number, line in kept[1:]:
        name, values = _row(path, number, heading, _cells(line, mark))
        if name in names:
            got = f"{name!r} in lines {names[name]} and {number}"
            raise refuse(path, "every target once", got, "remove one of them")
        names[name] = number
        rows.append(values)
    table = np.array(rows, np.float64).reshape(-1, len(COORDINATES) + len(DEVIATIONS))
    stated = ~np.isnan(table[:, 6:])
    sd = np.where(stated, table[:, 6:], DEFAULT_SD)
    return TargetTable(tuple(names), table[:, :3], table[:, 3:6], sd[:, 0], sd[:, 1], bool(stated.all()))


def _cells(line: str, mark: str) -> list[str]:
    return [cell.strip() for cell in next(csv.reader([line], delimiter=mark, skipinitialspace=True))]


def _heading(path: Path, cells: list[str]) -> list[str]:
    found = [cell.lower() for cell in cells]
    missing = [name for name in ("name", *COORDINATES) if name not in found]
    if missing:
        required = f"a first line that names the columns name, {', '.join(COORDINATES)}"
        raise refuse(path, required, f"no column {', '.join(missing)}", "write that line, coordinates in metres")
    unknown = [name for name in found if name not in ("name", *COORDINATES, *DEVIATIONS)]
    if unknown or len(set(found)) < len(found):
        got = f"the column {unknown[0]!r}" if unknown else "a column twice"
        known = f"no other columns than name, {', '.join((*COORDINATES, *DEVIATIONS))}"
        raise refuse(path, known, got, "remove or rename it")
    return found


def _row(path: Path, number: int, heading: list[str], cells: list[str]) -> tuple[str, list[float]]:
    where = f"line {number}"
    if len(cells) != len(heading):
        got = f"{len(cells)} in {where}"
        raise refuse(path, f"{len(heading)} values a line, with decimal dots", got, "mend that line")
    row = dict(zip(heading, cells, strict=True))
    name = row["name"]
    if not name:
        raise refuse(path, "a name for every target", f"none in {where}", "name it")
    values = []
    for column in COORDINATES:
        if not row[column]:
            epoch = "reference" if column.startswith("ref") else "current"
            got = f"no {column} of {name!r} in {where}"
            raise refuse(path, f"every target with {epoch} coordinates", got, "remove or complete it")
        values.append(_number(path, where, column, row[column]))
    for column in DEVIATIONS:
        text = row.get(column, "")
        sd = _number(path, where, column, text) if text else np.nan
        if sd <= 0 or sd > LARGEST_SD:
            required = f"{column} in metres, above 0 and below {LARGEST_SD:g}"
            raise refuse(path, required, f"{text} in {where}", "give for example 0.002")
        values.append(sd)
    return name, values


def _number(path: Path, where: str, column: str, text: str) -> float:
    if "," in text:
        got = f"{text!r} as {column} in {where}"
        raise refuse(path, "a dot as decimal sign", got, "export the table with decimal dots")
    try:
        value = float(text)
    except ValueError:
        value = np.nan
    if not np.isfinite(value):
        raise refuse(path, "numbers", f"{text[:40]!r} as {column} in {where}", "mend it")
    return value
