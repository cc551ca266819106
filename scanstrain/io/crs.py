# SPDX-License-Identifier: MIT
"""The coordinate system and the unit that a file states: carried and compared, never transformed.

Reprojecting inside a comparison would move points by centimetres (datum grids); only the unit is acted on.
"""

from __future__ import annotations

import struct
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING

from scanstrain.errors import InputFileError, explain
from scanstrain.io.las_header import LasHeader
from scanstrain.io.las_layout import WKT_BIT, has_wide_flags

if TYPE_CHECKING:
    from pyproj import CRS

USER_DEFINED = 32767
MODEL_TYPE, GEOGRAPHIC_CODE, PROJECTED_CODE, LINEAR_UNIT, VERTICAL_UNIT = 1024, 2048, 3072, 3076, 4099
"""GeoTIFF keys (GeoTIFF 1.0, section 6.2)."""

EPSG_UNITS = {9001: (1.0, "metre"), 9002: (0.3048, "foot"), 9003: (1200 / 3937, "US survey foot")}
"""Linear units by EPSG code: metres per unit, and name."""


@dataclass(frozen=True, slots=True)
class FileFrame:
    """What a file says about its coordinates.

    Parameters
    ----------
    wkt : str or None
        The coordinate system, None where the file states none that can be understood.
    unit : str
        Name of the unit of x and y.
    factors : tuple of 3 float
        Metres per file unit, along x, y and z.
    """

    wkt: str | None = None
    unit: str = "metre"
    factors: tuple[float, float, float] = (1.0, 1.0, 1.0)
    notices: tuple[str, ...] = ()


def read_frame(header: LasHeader) -> FileFrame:
    """Read the coordinate system of a LAS file: WKT first where the file says so, else GeoTIFF keys.

    Raises
    ------
    InputFileError
        The coordinates are degrees.
    """
    wkt = [r.payload for r in header.records("LASF_Projection", 2112)]
    keys = [r.payload for r in header.records("LASF_Projection", 34735)]
    prefer_wkt = has_wide_flags(header.point_format) or bool(header.encoding & WKT_BIT)
    if wkt and (prefer_wkt or not keys):
        return frame_from_wkt(header.path, wkt[0].split(b"\0")[0].decode("utf-8", "replace"))
    if keys:
        return _frame_from_geotiff(header.path, _geo_keys(keys[0]))
    return FileFrame(notices=("states no coordinate system: coordinates are taken as metres",))


def frame_from_wkt(path: Path, text: str) -> FileFrame:
    """Read unit and kind from WKT text; text that cannot be parsed counts as no statement.

    Raises
    ------
    InputFileError
        The coordinates are degrees.
    """
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    if not text.strip():
        return FileFrame(notices=("states no coordinate system: coordinates are taken as metres",))
    try:
        crs = CRS.from_wkt(text)
    except CRSError:
        notice = "its coordinate system cannot be understood and is ignored: coordinates are taken as metres"
        return FileFrame(notices=(notice,))
    return _frame_from_crs(path, crs, text)


def _frame_from_crs(path: Path, crs: CRS, text: str) -> FileFrame:
    if crs.is_geographic:
        raise _degrees(path, crs.name)
    axes = [axis for axis in crs.axis_info if axis.unit_conversion_factor > 0]
    level = [axis for axis in axes if axis.direction not in ("up", "down")] or axes
    upright = [axis for axis in axes if axis.direction in ("up", "down")]
    if not level:
        return FileFrame(text, notices=(f"the coordinate system {crs.name} names no unit: taken as metres",))
    flat = float(level[0].unit_conversion_factor)
    steep = float(upright[0].unit_conversion_factor) if upright else flat
    notices = _unit_notices(flat, steep, level[0].unit_name)
    if crs.is_geocentric:
        notices += ("geocentric coordinates: z does not point upwards",)
    return FileFrame(text, level[0].unit_name, (flat, flat, steep), notices)


def _frame_from_geotiff(path: Path, keys: dict[int, int]) -> FileFrame:
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    only_geographic = GEOGRAPHIC_CODE in keys and PROJECTED_CODE not in keys
    if keys.get(MODEL_TYPE, 2 if only_geographic else 1) == 2:
        raise _degrees(path, f"EPSG:{keys.get(GEOGRAPHIC_CODE, 'unknown')}")
    text, name = None, ""
    notices: tuple[str, ...] = ()
    base = FileFrame()
    code = keys.get(PROJECTED_CODE, 0)
    if code not in (0, USER_DEFINED):
        try:
            crs = CRS.from_epsg(code)
            text, name = crs.to_wkt(), crs.name
            base = _frame_from_crs(path, crs, text)
        except CRSError:
            notices = (f"its coordinate system EPSG:{code} is not known and is not compared",)
    else:
        notices = ("its coordinate system is user-defined or missing and is not compared",)
    flat, unit = EPSG_UNITS.get(keys.get(LINEAR_UNIT, 0), (base.factors[0], base.unit))
    steep, _ = EPSG_UNITS.get(keys.get(VERTICAL_UNIT, 0), (flat, unit))
    if name and flat != base.factors[0]:
        notices += (f"its unit key says {unit} where {name} says {base.unit}: the unit key is followed",)
    return FileFrame(text, unit, (flat, flat, steep), notices + _unit_notices(flat, steep, unit))


def _unit_notices(flat: float, steep: float, unit: str) -> tuple[str, ...]:
    if flat == steep == 1.0:
        return ()
    level = f"x and y are in {unit}" + (f" and are scaled by {flat:.10g}" if flat != 1.0 else "")
    upright = f"heights are scaled by {steep:.10g}" if steep != 1.0 else "heights are in metres"
    return (f"{level}, {upright} to metres" if steep != 1.0 else f"{level} to metres, {upright}",)


def _degrees(path: Path, name: str) -> InputFileError:
    return InputFileError(
        explain(
            str(path), "coordinates in metres or feet", f"degrees ({name})",
            "export the scan in a projected or a local site system",
        )
    )  # fmt: skip


def _geo_keys(payload: bytes) -> dict[int, int]:
    """Return the keys whose value stands in the directory itself (GeoTIFF 1.0, section 2.4)."""
    count = min(struct.unpack_from("<H", payload, 6)[0] if len(payload) >= 8 else 0, (len(payload) - 8) // 8)
    entries = (struct.unpack_from("<4H", payload, 8 + 8 * number) for number in range(count))
    return {key: value for key, location, _, value in entries if location == 0}
