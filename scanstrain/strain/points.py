# SPDX-License-Identifier: MIT
"""Back to points: each takes its values from the surrounding gauges on its own sheet."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.attributes import ATTRIBUTES, BY_NAME
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.result import Status
from scanstrain.strain.result import StrainField

if TYPE_CHECKING:
    from scanstrain.strain.blend import Columns, Sheet

FloatArray = NDArray[np.float64]

KERNEL_SPACINGS = 1.75
"""Radius of the blend in gauge spacings: about ten gauges inside the surface, at least four on a square grid."""

SHEET_SPACINGS, SHEET_LENGTHS = 0.5, 0.1
"""A point may lie off a gauge's tangent plane by the larger of half a spacing and a tenth of a gauge length..."""

SHEET_RADIUS_LENGTHS = 2.0
"""...and, farther from the gauge, by as much as a surface of a radius of two gauge lengths leaves that plane."""

BLOCK = 65536
"""Points a thread takes at a time."""

GROUPS: tuple[tuple[str, ...], ...] = (
    ("strain_1_sd", "strain_2_sd", "dilation"),
    ("disp_n", "disp_n_sd"),
    ("tilt", "tilt_sd"),
    ("curv_1", "curv_2", "curv_sd"),
    ("bend_1", "bend_2"),
    ("disp_x", "disp_y", "disp_z"),
    ("spin", "spin_sd"),
    ("rot_x", "rot_y", "rot_z"),
)
"""Columns that are observable together; the first group goes with the strain tensor."""

TENSOR_NAMES = (
    "strain_xx", "strain_yy", "strain_zz", "strain_xy", "strain_xz", "strain_yz",
    "strain_1", "strain_2", "shear_max", "strain_u", "strain_v", "shear_uv",
)  # fmt: skip

FROM_NEAREST = ("significance", "discovery", "observed", "stable", "gauge_points", "chainage", "clock")
"""Not linear fields: taken from the nearest gauge, so that the p-value and the verdict on it agree."""


def blend_to_points(
    strain: StrainField, points: FloatArray, point_normals: FloatArray | None = None
) -> dict[str, NDArray[np.generic]]:
    """Give every point the values of the surrounding gauges by a local linear blend.

    Weights `(1 - d^2 / h^2)^2` with h = 1.75 spacings; the blend reproduces fields that are linear along the surface
    (moving least squares: Lancaster & Salkauskas 1981), and the normal displacement also where it is bowed. Gauges
    without a value do not contribute; with fewer than four, or outside of them, the nearest gauge serves. A component
    is given only where the nearest gauge has it. The in-plane tensor is turned with the surface on its way, so it
    stays zero along the normal, and principal values, shear and the components along u and v are those of the blended
    tensor. p-value and codes are the nearest gauge's.

    Parameters
    ----------
    strain : StrainField
    points : ndarray of shape (n, 3)
        Local coordinates [m].
    point_normals : ndarray of shape (n, 3), optional
        Unit normals towards the free side. Without them only the distance off the gauge's tangent plane
        tells one sheet from another.

    Returns
    -------
    dict of str to ndarray of shape (n,)
        Every attribute of `ATTRIBUTES`, float32 and the codes in their own types. Farther than half a gauge
        length from every valid gauge of its sheet a point has NaN, and for `status` the reason of the nearest
        gauge within that distance, or `Status.OUTSIDE`.

    Raises
    ------
    OptionError
        If the shapes do not fit.
    """
    points = np.ascontiguousarray(points, dtype=np.float64)
    if points.ndim != 2 or points.shape[1] != 3:
        raise OptionError(explain("points", "shape (n, 3)", f"shape {points.shape}", "stack x, y, z"))
    if point_normals is not None and np.shape(point_normals) != points.shape:
        raise OptionError(
            explain("point_normals", f"shape {points.shape}", f"shape {np.shape(point_normals)}", "give one a point")
        )
    half, kernel = 0.5 * strain.gauge_length, KERNEL_SPACINGS * strain.gauge_spacing
    out = np.full((len(TENSOR_NAMES) + sum(map(len, GROUPS)), len(points)), np.nan, dtype=np.float32)
    nearest = np.full(len(points), -1, dtype=np.int64)
    if len(points) and (strain.status == Status.FINE).any():
        _blend(strain, points, point_normals, kernel, out, nearest)
        lone = np.flatnonzero(nearest < 0)
        if half > kernel and len(lone):
            # beyond the blend there is still the nearest gauge, up to half a gauge length
            some = np.empty((len(out), len(lone)), dtype=np.float32)
            found = np.empty(len(lone), dtype=np.int64)
            normals = None if point_normals is None else np.asarray(point_normals)[lone]
            _blend(strain, points[lone], normals, half, some, found)
            out[:, lone], nearest[lone] = some, found
    return _collect(strain, points, out, nearest)


def _blend(
    strain: StrainField,
    points: FloatArray,
    point_normals: FloatArray | None,
    search: float,
    out: NDArray[np.float32],
    nearest: NDArray[np.int64],
) -> None:
    import numba

    from scanstrain.strain.blend import Reach, blend

    valid = np.flatnonzero(strain.status == Status.FINE)
    order, sheet = _sort_into_cells(strain, valid, search)
    rows = valid[order]
    columns = _columns(strain, rows)
    reach = Reach(
        search=search,
        kernel=KERNEL_SPACINGS * strain.gauge_spacing,
        farthest=0.5 * strain.gauge_length,
        off_plane=max(SHEET_SPACINGS * strain.gauge_spacing, SHEET_LENGTHS * strain.gauge_length),
        off_plane_square=0.5 / (SHEET_RADIUS_LENGTHS * strain.gauge_length),
    )
    aware = point_normals is not None
    normals = np.ascontiguousarray(point_normals, dtype=np.float64) if aware else np.zeros((1, 3))

    def work(start: int) -> None:
        part = slice(start, start + BLOCK)
        around = normals[part] if aware else normals
        blend(points[part], around, aware, sheet, reach, columns, out[:, part], nearest[part])

    # threads of our own over a kernel without the GIL: numba's pool would not survive a later fork
    with ThreadPoolExecutor(numba.get_num_threads()) as pool:
        list(pool.map(work, range(0, len(points), BLOCK)))
    served = nearest >= 0
    nearest[served] = rows[nearest[served]]


def _sort_into_cells(strain: StrainField, valid: NDArray[np.int64], size: float) -> tuple[NDArray[np.int64], Sheet]:
    """Order gauges by the key of their cubic cell, z fastest, so that neighbours in z are one run of keys."""
    from scanstrain.strain.blend import Sheet

    positions = strain.position[valid]
    corner = positions.min(axis=0)
    ijk = np.floor((positions - corner) / size).astype(np.int64)
    dims = ijk.max(axis=0) + 1
    keys = (ijk[:, 0] * dims[1] + ijk[:, 1]) * dims[2] + ijk[:, 2]
    order = np.argsort(keys, kind="stable")
    rows = valid[order]
    sheet = Sheet(
        position=np.ascontiguousarray(positions[order]),
        normal=np.ascontiguousarray(strain.normal[rows]),
        axes=np.ascontiguousarray(strain.axes[rows]),
        keys=keys[order],
        corner=corner,
        dims=dims,
    )
    return order, sheet


def _columns(strain: StrainField, rows: NDArray[np.int64]) -> Columns:
    from scanstrain.strain.blend import Columns

    column = {name: np.asarray(strain.values[name], dtype=np.float64)[rows] for group in GROUPS for name in group}
    tensor = np.stack([np.asarray(strain.values[n], np.float64)[rows] for n in ("strain_u", "strain_v", "shear_uv")], 1)
    bowing = np.zeros((len(strain), 3)) if strain.bowing is None else strain.bowing
    present = [np.isfinite([column[n] for n in group]).all(axis=0) for group in GROUPS]
    return Columns(
        tensor=tensor,
        values=np.stack(list(column.values()), axis=1),
        bowed=list(column).index("disp_n"),
        bowing=np.ascontiguousarray(bowing[rows]),
        bounded=np.array([BY_NAME[name].kind in ("error", "magnitude") for name in column]),
        first=np.cumsum([0, *map(len, GROUPS)]),
        present=np.asarray(sum(has.astype(np.int64) << bit for bit, has in enumerate(present))),
    )


def _collect(
    strain: StrainField, points: FloatArray, out: NDArray[np.float32], nearest: NDArray[np.int64]
) -> dict[str, NDArray[np.generic]]:
    names = [*TENSOR_NAMES, *(name for group in GROUPS for name in group)]
    result: dict[str, NDArray[np.generic]] = dict(zip(names, out, strict=True))
    # local linear weights may be slightly negative: keep the larger one first
    for larger, smaller in (("curv_1", "curv_2"), ("bend_1", "bend_2")):
        a, b = out[names.index(larger)], out[names.index(smaller)]
        a[:], b[:] = np.maximum(a, b), np.minimum(a, b)
    served = nearest >= 0
    for attribute in ATTRIBUTES:
        if attribute.name in FROM_NEAREST:
            empty = np.nan if attribute.dtype.startswith("float") else 0
            values = np.full(len(points), empty, dtype=attribute.numpy_dtype)
            values[served] = strain.values[attribute.name][nearest[served]]
            result[attribute.name] = values
    result["status"] = _reasons(strain, points, served)
    return {a.name: result[a.name] for a in ATTRIBUTES}


def _reasons(strain: StrainField, points: FloatArray, served: NDArray[np.bool_]) -> NDArray[np.uint8]:
    """Status of each point: fine where served, else why the nearest gauge failed, else outside."""
    from scipy.spatial import cKDTree

    status = np.where(served, np.uint8(Status.FINE), np.uint8(Status.OUTSIDE))
    failed = np.flatnonzero((strain.status != Status.FINE) & np.isfinite(strain.position).all(axis=1))
    lost = np.flatnonzero(~served)
    if len(failed) and len(lost):
        distance, which = cKDTree(strain.position[failed]).query(
            points[lost], distance_upper_bound=0.5 * strain.gauge_length
        )
        near = np.isfinite(distance)
        status[lost[near]] = strain.status[failed[which[near]]]
    return status
