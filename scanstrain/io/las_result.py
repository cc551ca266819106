# SPDX-License-Identifier: MIT
"""Result clouds: the reference with results as extra bytes, written and read back."""

from __future__ import annotations

import datetime as dt
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import BY_NAME
from scanstrain.epoch import Epoch
from scanstrain.errors import InputFileError, OptionError, OutputError, explain
from scanstrain.io.atomic import replacing
from scanstrain.io.fresh import fresh_source
from scanstrain.io.las import SUFFIXES, read_las
from scanstrain.io.las_chunks import pieces
from scanstrain.io.las_header import LasHeader, read_header
from scanstrain.io.las_layout import RECORD_SIZE
from scanstrain.io.las_plan import Plan, make_plan, source_fields
from scanstrain.io.las_verify import verify
from scanstrain.io.las_write import Pieces, Tally, write_points
from scanstrain.io.stored import StoredValues, check_values
from scanstrain.registry import unknown_name

PACKETS_GARBLED = (9, 10)
"""Point formats whose waveform packets lazrs 0.8.2 packs or unpacks wrongly (found by writing random packets and
reading them back): files of these formats are written uncompressed, and compressed ones cannot be carried over."""


def write_result_cloud(
    source: str | Path,
    target: str | Path,
    values: Mapping[str, NDArray[Any]],
    *,
    colour: NDArray[np.uint16] | None = None,
    no_data: float | None = None,
    created: dt.date | None = None,
) -> Path:
    """Write the reference scan with results as extra bytes, beside its place, read back, then renamed.

    Every field, VLR, EVLR and foreign extra byte of the reference is kept, coordinates as the same raw integers.
    The point format is raised only where colour needs it. Results of an earlier run in the reference are replaced.
    With no values nothing but the colour changes. A scan that is no LAS or LAZ file becomes LAS 1.4 with a scale
    of 0.1 mm.

    Parameters
    ----------
    source : path
        The reference scan; only read.
    target : path
        Ends in .las or .laz. Point formats 9 and 10 are always written as .las, see `PACKETS_GARBLED`.
    values : mapping of str to ndarray of shape (n,)
        Attributes of `scanstrain.attributes`, one row per point of the file (see `expand_to_file`), NaN for no-data.
    colour : ndarray of shape (n, 3), uint16, optional
        Red, green, blue, 0 to 65535.
    no_data : float, optional
        A finite value to store in place of NaN.
    created : date, optional
        Creation date in the header, today (UTC) by default. Give one for files that are the same byte for byte.

    Returns
    -------
    Path
        The file that was written.

    Raises
    ------
    InputFileError
        The reference cannot be read.
    OptionError
        Values, colour or `target` cannot serve.
    OutputError
        The file could not be written, or did not read back as written. Nothing is left behind.
    """
    source, target = Path(source), Path(target)
    _check_target(source, target)
    header, records, values, colour = _open_source(source, values, colour)
    stored = check_values(values, colour, count=header.count, no_data=no_data, source=source)
    plan = make_plan(header, stored.descriptors(), colour=colour is not None)
    if plan.point_format in PACKETS_GARBLED:
        target = target.with_suffix(".las")
    day = created or dt.datetime.now(dt.UTC).date()
    with replacing(target) as temporary:
        compress = target.suffix.lower() == ".laz"
        tally = _write(temporary, target, plan, records, stored, compress=compress, created=day)
        verify(temporary, target, plan, stored, tally)
    return target


def _check_target(source: Path, target: Path) -> None:
    name = target.name.lower()
    if target.suffix.lower() not in SUFFIXES or name.endswith(".copc.laz"):
        # a plain writer makes an ordinary LAZ under a COPC name, which COPC readers then refuse
        raise OptionError(explain(str(target), "a name in .las or .laz, not .copc.laz", name, "rename the output"))
    if target.exists() and source.exists() and target.samefile(source):
        raise OptionError(explain(str(target), "an output beside the input", "the input itself", "rename the output"))


def _open_source(
    source: Path, values: Mapping[str, NDArray[Any]], colour: NDArray[np.uint16] | None
) -> tuple[LasHeader, Pieces, Mapping[str, NDArray[Any]], NDArray[np.uint16] | None]:
    if source.suffix.lower() not in SUFFIXES:
        return fresh_source(source, values, colour)
    header = read_header(source)
    if header.compressed and header.point_format in PACKETS_GARBLED:
        raise InputFileError(
            explain(
                str(source), "waveform packets that can be carried over",
                f"compressed point format {header.point_format}", "convert the reference to uncompressed .las",
            )
        )  # fmt: skip
    return header, pieces(header), values, colour


def _write(
    temporary: Path,
    target: Path,
    plan: Plan,
    records: Pieces,
    stored: StoredValues,
    *,
    compress: bool,
    created: dt.date,
) -> Tally:
    import lazrs

    try:
        return write_points(temporary, plan, records, stored, compress=compress, created=created)
    except lazrs.LazrsError as error:
        raise OutputError(
            explain(str(target), "points that can be compressed", str(error), "write uncompressed .las")
        ) from error


def read_result_cloud(
    path: str | Path, *, attributes: Sequence[str] | None = None
) -> tuple[Epoch, dict[str, NDArray[Any]]]:
    """Read a cloud that `write_result_cloud` made.

    Parameters
    ----------
    path : path
        A .las or .laz file with results.
    attributes : sequence of str, optional
        Names to read; by default every result in the file.

    Returns
    -------
    epoch : Epoch
    results : dict of str to ndarray of shape (len(epoch),)
        Stored types, NaN for no-data.

    Raises
    ------
    OptionError
        A name that no attribute has.
    InputFileError
        The file cannot be read, or holds no results, or not the ones asked for.
    """
    path = Path(path)
    for name in attributes or ():
        if name not in BY_NAME:
            raise OptionError(unknown_name("attribute", name, list(BY_NAME)))
    epoch = read_las(path)
    header = epoch.provenance.header
    fields = {f.name: f for f in source_fields(header) if f.name in BY_NAME and f.dtype is not None}
    if not fields:
        raise InputFileError(explain(str(path), "a cloud with results", "none in it", "give a strain.laz"))
    missing = [name for name in attributes or () if name not in fields]
    if missing:
        raise InputFileError(
            explain(str(path), f"the attribute {missing[0]}", ", ".join(fields), "choose one of these")
        )
    names = list(fields) if attributes is None else list(attributes)
    base = RECORD_SIZE[header.point_format]
    dtype = np.dtype(
        {
            "names": names,
            "formats": [fields[name].dtype for name in names],
            "offsets": [base + fields[name].at for name in names],
            "itemsize": header.record_length,
        }
    )
    results = {name: np.empty(header.count, fields[name].dtype) for name in names}
    for start, records in pieces(header):
        for name in names:
            results[name][start : start + len(records)] = records.view(dtype)[name]
    kept = epoch.provenance.kept
    return epoch, {
        name: _without_no_data(values if kept is None else values[kept], fields[name].no_data)
        for name, values in results.items()
    }


def _without_no_data(values: NDArray[Any], no_data: float | int | None) -> NDArray[Any]:
    if values.dtype.kind == "f" and no_data is not None:
        values[values == no_data] = np.nan
    return values
