# SPDX-License-Identifier: MIT
"""The demonstration scans as LAZ files, with the text that states their truth. Same bytes at every call."""

from __future__ import annotations

import os
from datetime import UTC, date, datetime
from pathlib import Path

import numpy as np

from scanstrain.errors import OutputError, explain
from scanstrain.synthetic.demo import NAMES, sample_truth
from scanstrain.synthetic.scanner import Scan
from scanstrain.synthetic.statement import truth_statement

SCALE = 1e-4
"""Coordinate step [m]: its rounding, 0.03 mm, stays far below the noise of 0.5 mm."""

WKT = (
    'LOCAL_CS["Works grid (invented)",LOCAL_DATUM["Works datum (invented)",32767],'
    'UNIT["metre",1],AXIS["Easting",EAST],AXIS["Northing",NORTH],AXIS["Height",UP]]'
)
"""A site grid in metres, as the OGC text of 2001 that LAS 1.4 asks for."""

GPS_EPOCH = datetime(1980, 1, 6, tzinfo=UTC)
LEAP_SECONDS = 18
GPS_OFFSET = 1_000_000_000


def write_sample(folder: str | os.PathLike[str]) -> list[Path]:
    """Write the five demonstration scans and `TRUTH.md`.

    Parameters
    ----------
    folder : path
        Made if it does not exist. Files of the same names are replaced.

    Returns
    -------
    list of Path
        What was written.

    Raises
    ------
    OutputError
        The folder cannot be written to.
    """
    place = Path(folder)
    written = []
    try:
        place.mkdir(parents=True, exist_ok=True)
        for name in NAMES:
            written.append(place / f"{name}.laz")
            _replace(written[-1], _laz_bytes(name, sample_truth(name).scan()))
        written.append(place / "TRUTH.md")
        _replace(written[-1], truth_statement().encode("utf-8"))
    except OSError as error:
        remedy = "choose a folder that can be written to"
        raise OutputError(explain(str(place), "a writable folder with 12 MB free", str(error), remedy)) from error
    return written


def _replace(path: Path, content: bytes) -> None:
    """Write beside the place and rename, so that no half file is ever seen."""
    part = path.with_name(path.name + ".part")
    try:
        part.write_bytes(content)
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)


def _laz_bytes(name: str, scan: Scan) -> bytes:
    import io

    import laspy
    from laspy.vlrs.known import WktCoordinateSystemVlr

    day = date.fromisoformat(name[-10:])
    header = laspy.LasHeader(version="1.4", point_format=6)
    header.scales, header.offsets = np.full(3, SCALE), scan.epoch.origin
    header.creation_date = day
    header.system_identifier = "SIMULATED SCANNER"
    header.generating_software = "scanstrain sample"
    header.global_encoding.wkt = True
    header.global_encoding.gps_time_type = laspy.header.GpsTimeType.STANDARD
    header.vlrs.append(WktCoordinateSystemVlr(WKT))
    las = laspy.LasData(header)
    n, epoch = len(scan.epoch), scan.epoch
    las.points = laspy.ScaleAwarePointRecord.zeros(n, header=header)
    # Integers straight from local coordinates: no detour over large survey values that could round differently.
    las.X, las.Y, las.Z = np.round(epoch.points / SCALE).astype(np.int32).T
    las.intensity = np.asarray(epoch.intensity).astype(np.uint16)
    las.return_number = las.number_of_returns = np.ones(n, dtype=np.uint8)
    las.classification = epoch.classification
    las.point_source_id = epoch.setup
    las.gps_time = _start_second(day) + scan.time
    stream = io.BytesIO()
    las.write(stream, do_compress=True, laz_backend=laspy.LazBackend.Lazrs)
    return stream.getvalue()


def _start_second(day: date) -> float:
    """Adjusted standard GPS time of eight o'clock UTC on that day [s]."""
    start = datetime(day.year, day.month, day.day, 8, tzinfo=UTC)
    return (start - GPS_EPOCH).total_seconds() + LEAP_SECONDS - GPS_OFFSET
