# SPDX-License-Identifier: MIT
"""One piece of an object: where its gauges can stand, and their fit under a plan for the whole."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial import cKDTree

from scanstrain.cells import make_cells
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.fit import CELLS, MATCHED
from scanstrain.neighbourhood.fitting import Fitted, Fitting, Greys, material_of, some_of
from scanstrain.neighbourhood.gauges import Candidates, candidates_in
from scanstrain.neighbourhood.layout import Layout, Lines
from scanstrain.neighbourhood.level import Bare, surface_with
from scanstrain.neighbourhood.piece import Box, Source
from scanstrain.neighbourhood.plan import LEAST_POINTS, Plan
from scanstrain.neighbourhood.setting import Setting

IntArray = NDArray[np.int64]

HALO = 2.5
"""So far about its own box a piece sees points, in gauge lengths: patches of the gauges beyond the border, which move
the cells that its own gauges look at, are whole then."""
SETUPS_HALO = 1.5
"""The same on top of it where intensities of several set-ups are levelled, each over a neighbourhood of its own."""
RING = 1.5
"""So far about its own box a piece fits gauges, in gauge lengths."""
BLOCKS = 4.0
"""Points so far about a box decide on the cells in it, in block widths."""


def find_candidates(source: Source, setting: Setting, box: Box) -> Candidates:
    """Find where gauges can stand in the box of a piece."""
    from scanstrain.cells import BLOCK_WIDTH

    points = source.cut(box, BLOCKS * BLOCK_WIDTH * setting.width)[0].points
    if not len(points):
        return Candidates(np.zeros(0, np.int64), np.zeros((0, 3)), np.zeros((0, 3)))
    return candidates_in(make_cells(points, setting.width), setting.spacing, box)


def fit_piece(
    source: Source, setting: Setting, plan: Plan, layout: Layout, lines: Lines, box: Box
) -> tuple[IntArray, Fitted | None]:
    """Fit the gauges in a box.

    Parameters
    ----------
    source : Source
    setting : Setting
    plan : Plan
        What the pieces have in common.
    layout : Layout
        All gauges of the object.
    lines : Lines
    box : Box
        Of the piece.

    Returns
    -------
    own : ndarray of shape (k,)
        Numbers of the gauges in the box.
    fitted : Fitted or None
        Those gauges; None without any.
    """
    about = np.flatnonzero(box.grown(RING * setting.gauge_length).holds(layout.place))
    own = box.holds(layout.place[about])
    if not own.any():
        return about[own], None
    several = plan.textures is not None and any(len(each.known.setups) > 1 for each in plan.textures)
    pair = source.cut(box, (HALO + (SETUPS_HALO if several else 0.0)) * setting.gauge_length)
    fitted = _fit(pair, setting, plan, layout.part(about), lines)
    return about[own], some_of(fitted, np.flatnonzero(own))


def _fit(pair: tuple[Epoch, Epoch], setting: Setting, plan: Plan, layout: Layout, lines: Lines) -> Fitted:
    greys: Greys = (None, None)
    alone = len(pair[1]) < LEAST_POINTS
    if plan.textures is not None and not alone:
        greys = plan.textures[0].of(pair[0]), plan.textures[1].of(pair[1])
    material = material_of(pair, greys)
    finest = material.bare(0, setting, setting.width)
    fitting = Fitting(setting, layout, lines, finest)
    if alone:
        return _unmatched(fitting, finest)
    widths = setting.widths()
    for number, (step, models) in enumerate(zip(widths, plan.models, strict=True)):
        last = number == len(widths) - 1
        bare = finest if last else material.bare(0, setting, step), material.bare(1, setting, step)
        ours, theirs = (
            surface_with(each, model, setting.region(step)) for each, model in zip(bare, models, strict=True)
        )
        fitting.enter((ours, theirs), plan.textured[number])
        for _ in range(plan.turns if last else 1):
            fitting.turn(last=last)
    return fitting.close(plan.shared)


def _unmatched(fitting: Fitting, finest: Bare) -> Fitted:
    """Gauges that the current epoch does not show."""
    cells = cKDTree(finest.cells.position).query_ball_point(
        fitting.gauges.origin, fitting.setting.radius, return_length=True
    )
    fitting.state.info[:, CELLS], fitting.state.info[:, MATCHED] = cells, 0.0
    return fitting.close(None)
