# SPDX-License-Identifier: MIT
"""The cloud of a result made small: points thinned evenly, positions and values in 16 bits."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import partial
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT, Limits
from scanstrain.outputs.report3d.directions import View, choose_view, facing_codes
from scanstrain.outputs.report3d.layers import Layer, make_layer
from scanstrain.outputs.report3d.pack import packed
from scanstrain.outputs.report3d.thin import even_rows, z_order
from scanstrain.outputs.words import status_word
from scanstrain.result import Result

FloatArray = NDArray[np.float64]

OFFERED = ("disp_n", "tilt", "curv_1", "strain_1", "strain_2")
"""Attributes that the view offers unless others are named, as far as the result holds any value of them."""
MOST_CODES = 65535
"""Largest code of 16 bits: positions are counted in steps of the longest side over this number."""
MOST_BYTES = 3_000_000
"""Bytes of a scene in the page: it opens at once, and the report stays one that can be sent by mail."""
ROOM = 0.95
"""Share of those bytes that is aimed at when points must go to stay below."""
FINEST_CHAINAGE = 0.01
"""Step of a chainage [m], unless 16 bits need a wider one: enough to clip by."""


@dataclass(frozen=True, slots=True)
class SceneData:
    """What the view shows.

    Parameters
    ----------
    rows : ndarray of shape (k,), intp
        Which points of the reference are shown, in the order of the view.
    total : int
        Points of the reference.
    codes : ndarray of shape (k, 3), uint16
        Positions: file coordinates are `corner + step * codes`.
    corner : ndarray of shape (3,)
        Lowest x, y, z [m].
    step : float
        Step of a position [m].
    layers : tuple of Layer
        The attributes on offer, the first one shown first.
    view : View
        Where the viewer stands at first.
    text : str
        All of it as JSON that can stand inside a page.
    """

    rows: NDArray[np.intp]
    total: int
    codes: NDArray[np.uint16]
    corner: FloatArray
    step: float
    layers: tuple[Layer, ...]
    view: View
    text: str


def scene_data(
    result: Result,
    *,
    attributes: tuple[str, ...] | None = None,
    limit: int = 200_000,
    limits: Mapping[str, Limits] | None = None,
    colour_maps: Mapping[str, str] | None = None,
    only_significant: bool = False,
    along: FloatArray | None = None,
    along_name: str = "chainage",
) -> SceneData:
    """Make the cloud of a result small enough for a page.

    Parameters
    ----------
    result : Result
        A finished comparison.
    attributes : tuple of str, optional
        What can be shown, the first one at first; by default `OFFERED`, as far as observable anywhere.
    limit : int
        How many points at most; fewer where the scene would pass 3 MB.
    limits : mapping of str to limits, optional
        Ends of the colour scales, as for the coloured clouds.
    colour_maps : mapping of str to str, optional
        Tables of colours, see `outputs.colour_maps`.
    only_significant : bool
        Whether places without a change beyond the false-discovery control are grey at first.
    along : ndarray of shape (n,), optional
        Chainage of every reference point [m], to clip by. By default the distance along the longest horizontal
        direction of the cloud.
    along_name : str
        What `along` is.

    Returns
    -------
    SceneData

    Raises
    ------
    OptionError
        No such attribute, none at all, unsuitable limits, a limit below 1, or an `along` of another length.
    """
    points = result.reference.points
    names = _offered(result) if attributes is None else attributes
    if not names:
        raise OptionError(explain("attributes", "at least one name", "none", "name for example disp_n"))
    if limit < 1:
        raise OptionError(explain("limit", "a number of points above 0", str(limit), "give for example 200000"))
    if along is not None and np.shape(along) != (len(points),):
        got, required = f"shape {np.shape(along)}", f"shape ({len(points)},)"
        raise OptionError(explain("along", required, got, "give one value a point of the reference"))
    make = partial(
        _scene, result, names=names, limits=limits or {}, colour_maps=colour_maps or {},
        only_significant=only_significant, along=along, along_name=along_name, view=choose_view(result),
    )  # fmt: skip
    while True:
        scene = make(even_rows(points, limit))
        if len(scene.text) <= MOST_BYTES or len(scene.rows) < 1000:
            return scene
        limit = int(len(scene.rows) * ROOM * MOST_BYTES / len(scene.text))


def _offered(result: Result) -> tuple[str, ...]:
    seen = tuple(name for name in OFFERED if np.isfinite(np.asarray(result.points[name], np.float64)).any())
    return seen or OFFERED[:1]


def _scene(
    result: Result, rows: NDArray[np.intp], *, names: tuple[str, ...], limits: Mapping[str, Limits],
    colour_maps: Mapping[str, str], only_significant: bool, along: FloatArray | None, along_name: str, view: View,
) -> SceneData:  # fmt: skip
    chosen = result.reference.points[rows]
    low = chosen.min(axis=0)
    step = max(float(np.ptp(chosen, axis=0).max()) / MOST_CODES, 1e-9)
    codes = np.round((chosen - low) / step).astype(np.uint16)
    order = z_order(codes)
    rows, codes = rows[order], codes[order]
    layers = tuple(
        make_layer(result, name, rows, limits=limits.get(name), colour_map=colour_maps.get(name)) for name in names
    )
    corner = low + result.reference.origin
    status = np.asarray(result.points["status"])[rows].astype(np.uint8)
    changed = np.asarray(result.points["discovery"])[rows] == 1
    payload: dict[str, Any] = {
        "epochs": f"{result.reference.label} → {result.current.label}",
        "count": len(rows),
        "total": len(result.reference.points),
        "corner": [float(part) for part in corner],
        "step": step,
        "position": [packed(np.ascontiguousarray(codes[:, axis])) for axis in range(3)],
        "facing": [packed(part) for part in facing_codes(result, result.reference.points[rows])],
        "status": packed(status),
        "changed": packed(changed.astype(np.uint8)),
        "words": {str(code): status_word(int(code)) for code in np.unique(status)},
        "layers": [layer.payload() for layer in layers],
        "along": _along(along, along_name, rows, view),
        "view": {"yaw": view.yaw, "pitch": view.pitch, "hollow": view.hollow},
        "greys": {"notSignificant": NOT_SIGNIFICANT, "notObservable": NOT_OBSERVABLE},
        "onlySignificant": only_significant,
        "gaugeLength": float(result.strain.gauge_length),
    }
    return SceneData(rows, len(result.reference.points), codes, corner, step, layers, view, page_json(payload))


def _along(along: FloatArray | None, name: str, rows: NDArray[np.intp], view: View) -> dict[str, Any]:
    """Say what the lengthwise slider clips by: a coded chainage, or a direction that the page can compute with."""
    if along is None:
        return {"name": "distance along", "direction": [float(part) for part in view.direction]}
    values = np.asarray(along, np.float64)[rows]
    known = np.isfinite(values)
    low, high = (float(values[known].min()), float(values[known].max())) if known.any() else (0.0, 0.0)
    step = max((high - low) / (MOST_CODES - 1), FINEST_CHAINAGE)
    codes = np.where(known, 1 + np.round((np.where(known, values, low) - low) / step), 0).astype(np.uint16)
    return {"name": name, "low": low, "step": step, "codes": packed(codes)}


def page_json(payload: Mapping[str, Any]) -> str:
    r"""Write JSON that is harmless inside a script element, whatever the strings in it are.

    >>> page_json({"label": "</script>"})
    '{"label":"\\u003c/script\\u003e"}'
    """
    plain = json.dumps(payload, allow_nan=False, separators=(",", ":"))
    return plain.replace("<", "\\u003c").replace(">", "\\u003e").replace("&", "\\u0026")
