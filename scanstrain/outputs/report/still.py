# SPDX-License-Identifier: MIT
"""A picture of the 3-D view, for print and for browsers that cannot draw it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.outputs.colour import NOT_OBSERVABLE, NOT_SIGNIFICANT
from scanstrain.outputs.report3d import SceneData
from scanstrain.result import Result

WIDTH, HEIGHT = 1200, 720
"""Size of the picture [dots]."""
MARGIN = 0.04
"""Free rim, as a share of the width."""
PAPER = 255
DOT = 3
"""Edge of the square that stands for a point [dots]."""


def still(result: Result, scene: SceneData, *, only_significant: bool) -> NDArray[np.uint8]:
    """Draw the cloud of a scene from where the viewer stands at first, parallel projection, nearest point on top.

    Parameters
    ----------
    result : Result
    scene : SceneData
    only_significant : bool
        Grey out points without a change beyond the false-discovery control.

    Returns
    -------
    ndarray of shape (HEIGHT, WIDTH, 3), uint8
        RGB on white.
    """
    layer, view = scene.layers[0], scene.view
    values = np.asarray(result.points[layer.scale.attribute.name], np.float64)[scene.rows]
    rgb = layer.scale.table[layer.scale.rows(np.where(np.isfinite(values), values, 0.0))]
    if only_significant and layer.scale.masked:
        rgb = np.where((np.asarray(result.points["discovery"])[scene.rows] == 1)[:, None], rgb, NOT_SIGNIFICANT)
    rgb = np.where(np.isfinite(values)[:, None], rgb, NOT_OBSERVABLE)
    place = np.asarray(scene.codes * scene.step, np.float64)
    column, row, depth = _project(place, view.yaw, view.pitch)
    shown = _towards(result, scene) if view.hollow else np.ones(len(place), bool)
    picture = np.full((HEIGHT, WIDTH, 3), PAPER, np.uint8)
    order = np.argsort(depth)
    order = order[shown[order]]
    # later ones overwrite earlier ones: the nearest point stays
    for down in range(DOT):
        for right in range(DOT):
            picture[row[order] + down, column[order] + right] = rgb[order]
    return picture


def _project(
    place: NDArray[np.float64], yaw: float, pitch: float
) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.float64]]:
    """Columns, rows and nearness of places (k, 3) seen from a direction, fitted into the picture."""
    to = np.array([np.cos(pitch) * np.cos(yaw), np.cos(pitch) * np.sin(yaw), np.sin(pitch)])
    right = np.array([-np.sin(yaw), np.cos(yaw), 0.0])
    across, up = place @ right, place @ np.cross(to, right)
    room = np.array([WIDTH, HEIGHT]) * (1 - 2 * MARGIN) - DOT
    scale = float((room / np.maximum([np.ptp(across), np.ptp(up)], 1e-9)).min())
    middle = [(part.min() + part.max()) / 2 for part in (across, up)]
    column = np.round(WIDTH / 2 + scale * (across - middle[0])).astype(np.intp)
    row = np.round(HEIGHT / 2 - scale * (up - middle[1])).astype(np.intp)
    return column, row, place @ to


def _towards(result: Result, scene: SceneData) -> NDArray[np.bool_]:
    """Which points face the viewer: seen into, a tunnel shows its far side."""
    from scipy.spatial import cKDTree

    known = np.isfinite(result.strain.normal).all(axis=1)
    if not known.any():
        return np.ones(len(scene.rows), bool)
    _, nearest = cKDTree(result.strain.position[known]).query(result.reference.points[scene.rows])
    yaw, pitch = scene.view.yaw, scene.view.pitch
    to = np.array([np.cos(pitch) * np.cos(yaw), np.cos(pitch) * np.sin(yaw), np.sin(pitch)])
    return np.asarray(result.strain.normal[known][nearest] @ to > 0)
