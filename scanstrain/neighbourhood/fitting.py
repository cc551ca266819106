# SPDX-License-Identifier: MIT
"""The fit of the gauges of one piece, level by level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.correlation import Shared, count_shared
from scanstrain.neighbourhood.gauges import frames_at
from scanstrain.neighbourhood.joint_cuts import cuts_at
from scanstrain.neighbourhood.layout import Layout, Lines
from scanstrain.neighbourhood.level import Bare, Estimate, Level, Surface, make_bare
from scanstrain.neighbourhood.setting import Setting, units_of
from scanstrain.neighbourhood.smooth import SmoothSurface, support_cells

FloatArray = NDArray[np.float64]
Greys = tuple[FloatArray | None, FloatArray | None]


@dataclass(frozen=True, slots=True)
class Material:
    """Points of a piece of both epochs and their texture."""

    reference: FloatArray
    current: FloatArray
    greys: Greys

    def bare(self, epoch: int, setting: Setting, step: float) -> Bare:
        """Cut the reference (0) or the current epoch (1) into cells of a width [m]."""
        points = (self.reference, self.current)[epoch]
        return make_bare(points, self.greys[epoch], step, setting.support(step))


def material_of(pair: tuple[Epoch, Epoch], greys: Greys) -> Material:
    """Take what the fit needs of a piece of both epochs."""
    return Material(pair[0].points, pair[1].points, greys)


@dataclass(frozen=True, slots=True)
class Fitted:
    """Gauges of a piece after the last fit.

    Parameters
    ----------
    state : Estimate
    gauges : SmoothSurface
    change : ndarray of shape (g, 3)
        What the last comparison moved [m].
    growth : ndarray of shape (g, 12)
        Factor that shared noise put on the variance of each unknown.
    """

    state: Estimate
    gauges: SmoothSurface
    change: FloatArray
    growth: FloatArray


class Fitting:
    """The gauges of one piece on their way from coarse to fine."""

    def __init__(self, setting: Setting, layout: Layout, lines: Lines, finest: Bare) -> None:
        radius, g = setting.radius, len(layout)
        self.setting = setting
        support = support_cells(finest.cells.position, radius)
        self.gauges = frames_at(layout.place, layout.normal, support, layout.look, layout.along)
        at = self.gauges
        self.cuts = cuts_at(at.origin, at.frame, at.curvature, radius, lines.ends, lines.half)
        self.state = Estimate(np.zeros((g, 12)), np.ones(g), setting.need.limits() / units_of(radius))
        self.change = np.zeros((g, 3))
        self.level: Level
        self.table: FloatArray

    def enter(self, surfaces: tuple[Surface, Surface], textured: bool) -> None:
        """Go on with both epochs at the next resolution."""
        setting = self.setting
        self.level = Level(*surfaces, self.gauges, setting.radius, setting.spacing, self.cuts, textured)

    def turn(self, *, last: bool) -> None:
        """Compare and fit once, `last` saying whether this is the finest level."""
        ours, before = self.level.reference, self.state.held[:, :3].copy()
        step = ours.cells.resolution
        gate = ours.gate + step if last else max(ours.gate, 4 * step)
        self.table = self.level.fit(self.state, gate=gate, min_points=self.setting.min_points)
        self.change = np.abs(self.state.held[:, :3] - before)

    def unsettled(self) -> FloatArray:
        """How far the last comparison moved every gauge in what it shows [m], shape (g,)."""
        seen = self.state.data_sd[:, :3] <= self.state.required[:3]
        return np.asarray(np.where(seen, self.change, 0.0).max(axis=1, initial=0.0))

    def close(self, shared: Shared | None) -> Fitted:
        """Count shared noise in the standard errors and let the cells go."""
        before = np.einsum("gii->gi", self.state.covariance).copy()
        if shared is not None:
            count_shared(self.level, self.state, self.table, shared)
        growth = np.einsum("gii->gi", self.state.covariance) / np.maximum(before, 1e-300)
        return Fitted(self.state, self.gauges, self.change, growth)


def joined(parts: Sequence[Fitted]) -> Fitted:
    """Put the gauges of several pieces one behind the other."""
    return Fitted(
        Estimate.joined([part.state for part in parts]),
        SmoothSurface(
            *(np.concatenate([getattr(part.gauges, each.name) for part in parts]) for each in fields(SmoothSurface))
        ),
        np.concatenate([part.change for part in parts]),
        np.concatenate([part.growth for part in parts]),
    )


def some_of(whole: Fitted, chosen: NDArray[np.int64]) -> Fitted:
    """Return some gauges."""
    return Fitted(
        whole.state.some(chosen),
        SmoothSurface(*(getattr(whole.gauges, each.name)[chosen] for each in fields(SmoothSurface))),
        whole.change[chosen],
        whole.growth[chosen],
    )
