# SPDX-License-Identifier: MIT
"""Whether two epochs are in one coordinate system and one unit."""

from __future__ import annotations

from typing import TYPE_CHECKING

from scanstrain.epoch import Epoch
from scanstrain.errors import InputFileError, explain

if TYPE_CHECKING:
    from pyproj import CRS


def check_same_frame(reference: Epoch, current: Epoch, *, assume_same_crs: bool = False) -> tuple[str, ...]:
    """Refuse a pair in different coordinate systems or units; say what could not be compared.

    Parameters
    ----------
    reference, current : Epoch
        As read by `read_scan`.
    assume_same_crs : bool
        The stated coordinate systems differ only by their label. Units are compared all the same.

    Returns
    -------
    tuple of str
        Notices, for example that one file states no coordinate system.

    Raises
    ------
    InputFileError
        Different units, or different coordinate systems.
    """
    a, b = reference.provenance, current.provenance
    where = f"{reference.label} and {current.label}"
    if a.unit_factors != b.unit_factors:
        got = f"{a.unit} {_factors(a.unit_factors)} in {a.path} and {b.unit} {_factors(b.unit_factors)} in {b.path}"
        raise InputFileError(
            explain(where, "scans in one unit", got, "export both scans in one unit and state it in both files")
        )
    if a.crs is None and b.crs is None:
        return ()
    if a.crs is None or b.crs is None:
        silent = a.path if a.crs is None else b.path
        return (f"{silent} states no coordinate system that can be compared: it is taken to be that of the other scan",)
    return _compare(where, a.crs, b.crs, assume_same_crs=assume_same_crs)


def _factors(factors: tuple[float, float, float]) -> str:
    return f"({factors[0]:.10g} m, upwards {factors[2]:.10g} m)"


def _compare(where: str, a: str, b: str, *, assume_same_crs: bool) -> tuple[str, ...]:
    from pyproj import CRS
    from pyproj.exceptions import CRSError

    if a == b:
        return ()
    try:
        first, second = CRS.from_user_input(a), CRS.from_user_input(b)
    except CRSError:
        return (f"{where}: a coordinate system cannot be understood and was not compared",)
    level, upright = _parts(first), _parts(second)
    if _same(level[0], upright[0]):
        if level[1] is None and upright[1] is None:
            return ()
        if level[1] is None or upright[1] is None:
            return (f"{where}: only one of the scans states a height system",)
        if _same(level[1], upright[1]):
            return ()
    if assume_same_crs:
        return (f"{where}: stated coordinate systems differ ({first.name}; {second.name}) and were taken as the same",)
    raise InputFileError(
        explain(
            where, "one coordinate system", f"{first.name} and {second.name}",
            "export both scans in one system, or set assume_same_crs if only a label is wrong",
        )
    )  # fmt: skip


def _parts(crs: CRS) -> tuple[CRS, CRS | None]:
    """Split a compound system into its horizontal and its vertical part."""
    if crs.is_compound and len(crs.sub_crs_list) == 2:
        return crs.sub_crs_list[0], crs.sub_crs_list[1]
    return crs, None


def _same(a: CRS, b: CRS) -> bool:
    """Compare by definition, and where that fails by EPSG code: two writers rarely spell one system alike."""
    if a.equals(b, ignore_axis_order=True):
        return True
    code = a.to_epsg()
    return code is not None and code == b.to_epsg()
