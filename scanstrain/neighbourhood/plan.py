# SPDX-License-Identifier: MIT
"""What is common to all pieces of an object, judged once: on the whole of a small one, on samples of a large one.

A piece must not judge by itself what noise is typical or which correlation texture has: two neighbours would differ,
and a seam would show. Samples are the same cubes of space whether the object is then fitted as one piece or as many.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import FitError, explain
from scanstrain.neighbourhood.correlation import Shared, measure_shared
from scanstrain.neighbourhood.differences import PATCH
from scanstrain.neighbourhood.finish import status_of
from scanstrain.neighbourhood.fitting import Fitting, Greys, Material, joined, material_of
from scanstrain.neighbourhood.gauges import Guide, candidates_in, choose_gauges
from scanstrain.neighbourhood.layout import Lines, lay_out
from scanstrain.neighbourhood.level import Bare, SurfaceModel, model_surfaces
from scanstrain.neighbourhood.piece import Box, Source, corners_of
from scanstrain.neighbourhood.result import Status
from scanstrain.neighbourhood.setting import Setting
from scanstrain.neighbourhood.textures import FINE_CELLS, Texture, measure_texture

FloatArray = NDArray[np.float64]
Say = Callable[[str, float], None]
Steady = Callable[[FloatArray], NDArray[np.bool_]]
"""Says of places (n, 3) [m] whether they are known not to have moved."""

TURNS = 3
"""Most comparisons at the finest level."""
SETTLED, SETTLED_SHARE = 0.1, 0.98
"""The fit stands when the last comparison moved that share of gauges by less than that part of a cell: texture is
straight over so short a way, so another comparison would change nothing."""
WHOLE = 1_500_000
"""Points of an epoch up to which the whole object is its own sample."""
SAMPLE = 1_000_000
"""About so many points of an epoch are in the sample of a larger one."""
CUBE = 5.0
"""Width of a sample in gauge lengths: most of its gauges have whole patches."""
LEAST_POINTS = 1000
"""A sample with fewer points of an epoch is left out."""
FEWEST_STEADY = 40
"""Gauges amid steady ground from which shared noise is measured on it alone: their patches make some ten apart."""
MARGIN = 0.25
"""So much more is taken of both epochs, in gauge lengths: for what moved across the border."""


@dataclass(frozen=True, slots=True)
class Plan:
    """What a piece must know of the whole.

    Parameters
    ----------
    textures : pair of Texture, or None
        Of both epochs.
    models : tuple of (SurfaceModel, SurfaceModel)
        Of both epochs at every level.
    textured : tuple of bool
        Whether intensity is used at every level.
    turns : int
        Comparisons at the finest level.
    shared : Shared or None
        Noise that neighbouring points share; None where the sample does not tell.
    """

    textures: tuple[Texture, Texture] | None
    models: tuple[tuple[SurfaceModel, SurfaceModel], ...]
    textured: tuple[bool, ...]
    turns: int
    shared: Shared | None


@dataclass(frozen=True, slots=True)
class Trial:
    """The sample after its fit: its pieces and their gauges.

    Parameters
    ----------
    fittings : list of Fitting
        One a piece.
    whole : bool
        Whether the only piece is the whole object.
    warnings : tuple of str
    """

    fittings: list[Fitting]
    whole: bool
    warnings: tuple[str, ...]


def sample_of(source: Source, setting: Setting) -> tuple[Box, ...]:
    """Choose the cubes that stand for the object; all of space for a small one."""
    if max(source.size()) <= WHOLE:
        return (Box(),)
    width = CUBE * setting.gauge_length
    keys, counts = source.counts(width)
    # Cubes that the surface only grazes hold hardly a whole patch.
    full = counts >= np.median(counts)
    keys, counts = keys[full], counts[full]
    wanted = min(len(keys), max(1, int(np.ceil(SAMPLE / counts.mean()))))
    chosen = np.unique(np.linspace(0, len(keys) - 1, wanted).round().astype(np.int64))
    return tuple(Box(corner, corner + width) for corner in corners_of(keys[chosen], width))


def measure_plan(
    source: Source,
    setting: Setting,
    lines: Lines,
    free_side: FloatArray | None,
    axis: FloatArray | Guide | None,
    steady: Steady | None,
    say: Say,
) -> tuple[Plan, Trial]:
    """Fit the sample from coarse to fine and judge on it what all pieces have in common.

    `steady` says which places are known not to have moved; noise that neighbours share is measured there.

    Raises
    ------
    FitError
        No part of the sample is shown by both epochs.
    """
    say("surface model", 0.0)
    boxes = sample_of(source, setting)
    whole = not np.isfinite(boxes[0].low).any()
    pairs = [source.cut(box, MARGIN * setting.gauge_length) for box in boxes]
    pairs = [pair for pair in pairs if whole or min(map(len, pair)) >= LEAST_POINTS]
    if not pairs:
        got = f"none in {len(boxes)} samples"
        raise FitError(explain("local fit", "points of both epochs", got, "check the registration"))
    textures, greys = _textures(pairs, source, setting)
    materials = [material_of(pair, grey) for pair, grey in zip(pairs, greys, strict=True)]
    finest = [material.bare(0, setting, setting.width) for material in materials]
    fittings, warnings = _begin(finest, setting, lines, free_side, axis)
    models, textured, turns = _descend(materials, finest, fittings, setting, say)
    say("shared noise", 1.0)
    shared = _shared(fittings, setting, steady)
    return Plan(textures, tuple(models), tuple(textured), turns, shared), Trial(fittings, whole, warnings)


def _textures(
    pairs: Sequence[tuple[Epoch, Epoch]], source: Source, setting: Setting
) -> tuple[tuple[Texture, Texture] | None, list[Greys]]:
    """Judge the texture of both epochs, and make that of the sample."""
    nothing: list[Greys] = [(None, None)] * len(pairs)
    known = source.surveys() if setting.use_intensity else (None, None)
    found = []
    for epoch, survey in enumerate(known):
        if survey is None:
            return None, nothing
        made = measure_texture(
            [pair[epoch] for pair in pairs], survey, setting.gauge_length, FINE_CELLS * setting.width
        )
        if made is None:
            return None, nothing
        found.append(made)
    (ours, mine), (theirs, yours) = found
    return (ours, theirs), list(zip(mine, yours, strict=True))


def _begin(
    finest: Sequence[Bare],
    setting: Setting,
    lines: Lines,
    free_side: FloatArray | None,
    axis: FloatArray | Guide | None,
) -> tuple[list[Fitting], tuple[str, ...]]:
    """Place the gauges of the sample."""
    spots = [choose_gauges([candidates_in(bare.cells, setting.spacing, Box())], setting.spacing) for bare in finest]
    place, normal = (np.concatenate(each) for each in zip(*spots, strict=True))
    layout, warnings = lay_out(place, normal, free_side, axis)
    ends = np.cumsum([0, *(len(each) for each, _ in spots)])
    parts = [layout.part(slice(a, b)) for a, b in pairwise(ends)]
    return [Fitting(setting, part, lines, bare) for part, bare in zip(parts, finest, strict=True)], warnings


def _descend(
    materials: Sequence[Material], finest: Sequence[Bare], fittings: Sequence[Fitting], setting: Setting, say: Say
) -> tuple[list[tuple[SurfaceModel, SurfaceModel]], list[bool], int]:
    """Fit the sample level by level, and return what was common to its pieces there, and how many turns it took."""
    widths, models, textured, turns = setting.widths(), [], [], 0
    for number, step in enumerate(widths):
        say(f"fit at {1e3 * step:.0f} mm", (number + 1) / (len(widths) + 2))
        last = number == len(widths) - 1
        ours = finest if last else [material.bare(0, setting, step) for material in materials]
        theirs = [material.bare(1, setting, step) for material in materials]
        (mine, first), (yours, second) = (model_surfaces(each, setting.region(step)) for each in (ours, theirs))
        models.append((mine, yours))
        textured.append(any(each.textured for each in first) and any(each.textured for each in second))
        for fitting, surfaces in zip(fittings, zip(first, second, strict=True), strict=True):
            fitting.enter(surfaces, textured[-1])
        for turns in range(1, (TURNS if last else 1) + 1):
            for fitting in fittings:
                fitting.turn(last=last)
            still = np.concatenate([fitting.unsettled() for fitting in fittings]) < SETTLED * step
            if last and turns > 1 and np.mean(still) > SETTLED_SHARE:
                break
    return models, textured, turns


def _shared(fittings: Sequence[Fitting], setting: Setting, steady: Steady | None) -> Shared | None:
    """Measure shared noise about the sound gauges of the sample: on steady ground, as far as there is enough of it.

    What a structure does within a patch looks like noise that neighbours share; where nothing moved, it is.
    """
    status = status_of(joined([fitting.close(None) for fitting in fittings]), setting)
    ends = np.cumsum([len(fitting.change) for fitting in fittings])[:-1]
    sound = [np.flatnonzero(part == Status.FINE) for part in np.split(status, ends)]
    if steady is not None:
        still = [
            gauges[_amid(fitting.gauges.origin, steady, PATCH * setting.radius)[gauges]]
            for fitting, gauges in zip(fittings, sound, strict=True)
        ]
        sound = still if sum(map(len, still)) >= FEWEST_STEADY else sound
    return measure_shared(
        [fitting.level for fitting in fittings],
        [fitting.state for fitting in fittings],
        [fitting.table for fitting in fittings],
        sound,
    )


def _amid(places: FloatArray, steady: Steady, reach: float) -> NDArray[np.bool_]:
    """Which gauges are steady, and so are all others within `reach` [m]."""
    from scipy.spatial import cKDTree

    moving = places[~steady(places)]
    if not len(moving):
        return np.ones(len(places), np.bool_)
    return np.asarray(cKDTree(moving).query(places)[0] > reach)
