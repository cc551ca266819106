# SPDX-License-Identifier: MIT
"""One level of the pyramid: both epochs as cells of one width, and the fit of all gauges on them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells, group, make_cells, voxel_keys
from scanstrain.neighbourhood import fit
from scanstrain.neighbourhood.covariance import Covariance, Structure, local_covariance, measure_structure
from scanstrain.neighbourhood.joint_cuts import Cuts, keep_visible, no_cuts
from scanstrain.neighbourhood.pairs import GREY, HEIGHT, Pairs, count_pairs, stride_of
from scanstrain.neighbourhood.predict import Predictor, build_predictor
from scanstrain.neighbourhood.rows import Comparison, Rows, block_density
from scanstrain.neighbourhood.smooth import SmoothSurface, heights, smooth_surface, support_cells
from scanstrain.neighbourhood.warp import blend, nearest_gauges

FloatArray = NDArray[np.float64]

CLUTTER = 6.0
"""Cells farther than this many standard deviations from the smooth surface are not surface."""
NUISANCE_DISPLACEMENT = 0.01
"""What a structure may have slid in its own plane where nothing shows it [m], one standard deviation."""
NUISANCE_GRADIENT = 5e-4
"""The same for in-plane gradients [1]: strains and spins of structures in service (common practice). On a bare lining
of radius R a hoop strain e looks like a change of curvature 2 e / R."""
WEAK_PRIOR = 10.0
"""Standard deviation of the prior that only keeps the equations solvable [m]: far beyond any motion."""


@dataclass(frozen=True, slots=True)
class Surface:
    """One epoch at one level: cells, smooth surface at the blocks, measured covariances."""

    cells: Cells
    smooth: SmoothSurface
    height: Covariance
    grey: Covariance | None
    gate: float

    @property
    def textured(self) -> bool:
        """Whether intensity shows structure anywhere."""
        return self.grey is not None and bool((self.grey.sill > 0).any())

    def predictor(self, textured: bool) -> Predictor:
        """Solve the prediction of this epoch, with intensity if `textured`."""
        return build_predictor(self.cells, self.smooth, self.height, self.grey if textured else None, gate=self.gate)


@dataclass(slots=True)
class Estimate:
    """The present state of all gauges; unknowns scaled to metres at the gauge's rim, as in `fit.fit_gauges`.

    `required`, shape (12,), holds the standard errors at which an unknown counts as observed.
    """

    held: FloatArray
    gains: FloatArray
    required: FloatArray
    values: FloatArray = field(init=False)
    covariance: FloatArray = field(init=False)
    data_sd: FloatArray = field(init=False)
    info: FloatArray = field(init=False)

    def __post_init__(self) -> None:
        g = len(self.held)
        self.values, self.covariance, self.info = np.full((g, 12), np.nan), np.zeros((g, 12, 12)), np.zeros((g, 6))
        self.data_sd = np.full((g, 12), np.inf)

    @classmethod
    def joined(cls, parts: Sequence[Estimate]) -> Estimate:
        """Put the gauges of several estimates one behind the other."""
        held, gains = np.concatenate([part.held for part in parts]), np.concatenate([part.gains for part in parts])
        out = cls(held, gains, parts[0].required)
        for name in ("values", "covariance", "data_sd", "info"):
            setattr(out, name, np.concatenate([getattr(part, name) for part in parts]))
        return out

    def some(self, chosen: NDArray[np.int64]) -> Estimate:
        """Return the estimate of some gauges."""
        out = Estimate(self.held[chosen], self.gains[chosen], self.required)
        for name in ("values", "covariance", "data_sd", "info"):
            setattr(out, name, getattr(self, name)[chosen])
        return out


@dataclass(frozen=True, slots=True)
class Bare:
    """Cells and smooth surface of one piece of an epoch, before its noise is judged."""

    cells: Cells
    smooth: SmoothSurface


@dataclass(frozen=True, slots=True)
class SurfaceModel:
    """What all pieces of one epoch at one level have in common.

    Parameters
    ----------
    gate : float
        Cells farther than this from the smooth surface are clutter [m].
    stride : int
        One in so many blocks gives its pairs.
    height : Structure
    grey : Structure or None
        Of intensity.
    """

    gate: float
    stride: int
    height: Structure
    grey: Structure | None


def make_bare(points: FloatArray, intensity: FloatArray | None, resolution: float, support_radius: float) -> Bare:
    """Cut one piece of an epoch into cells of one resolution [m], smooth over `support_radius` [m]."""
    cells = make_cells(points, resolution, intensity=intensity)
    return Bare(cells, smooth_surface(cells.centre, cells.normal, support_cells(cells.position, support_radius)))


def model_surfaces(pieces: Sequence[Bare], region: float) -> tuple[SurfaceModel, list[Surface]]:
    """Judge what pieces of one epoch have in common, noise over `region` [m], and model each of them."""
    off = np.concatenate(
        [
            heights(each.cells.position, each.cells.block, s.origin, s.frame, s.curvature)
            for each in pieces
            for s in [each.smooth]
        ]
    )
    # A robust standard deviation of cells about their smooth surface: relief and noise, without clutter.
    typical = 1.4826 * float(np.median(np.abs(off)))
    gate = CLUTTER * typical + 0.1 * pieces[0].cells.resolution
    stride = stride_of(sum(len(each.cells.key) for each in pieces))
    pairs = [_pairs(each, gate, stride, region) for each in pieces]
    grey = None if pieces[0].cells.intensity is None else measure_structure(pairs, GREY)
    model = SurfaceModel(gate, stride, measure_structure(pairs, HEIGHT), grey)
    return model, [_surface(each, part, model) for each, part in zip(pieces, pairs, strict=True)]


def surface_with(piece: Bare, model: SurfaceModel, region: float) -> Surface:
    """Model one piece of an epoch of which the common part is known."""
    return _surface(piece, _pairs(piece, model.gate, model.stride, region), model)


def make_surface(
    points: FloatArray, intensity: FloatArray | None, resolution: float, support_radius: float, region: float
) -> Surface:
    """Model an epoch by itself at one resolution [m], smooth over `support_radius` [m], noise over `region` [m]."""
    return model_surfaces([make_bare(points, intensity, resolution, support_radius)], region)[1][0]


def _pairs(piece: Bare, gate: float, stride: int, region: float) -> Pairs:
    return count_pairs(piece.cells, piece.smooth, gate=gate, region_width=region, stride=stride)


def _surface(piece: Bare, pairs: Pairs, model: SurfaceModel) -> Surface:
    height = local_covariance(pairs, HEIGHT, model.height)
    grey = None if model.grey is None else local_covariance(pairs, GREY, model.grey)
    return Surface(piece.cells, piece.smooth, height, grey, model.gate)


class Level:
    """Both epochs at one resolution, ready to be compared at any present estimate."""

    def __init__(
        self,
        reference: Surface,
        current: Surface,
        gauges: SmoothSurface,
        radius: float,
        spacing: float,
        cuts: Cuts | None = None,
        textured: bool | None = None,
    ) -> None:
        self.reference, self.gauges, self.radius, self.spacing = reference, gauges, radius, spacing
        # A piece of a textured scan may show nothing by itself.
        textured = reference.textured and current.textured if textured is None else textured
        self.textured = textured
        cells = reference.cells
        density = block_density(cells)[cells.block], block_density(current.cells)
        ours, theirs = reference.predictor(textured), current.predictor(textured)
        self.comparison = Comparison(cells, ours, theirs, density, reference.gate)
        self.cuts = cuts or no_cuts(len(gauges.origin))
        self.nearest = nearest_gauges(cells.position, gauges.origin)
        keep_visible(cells.position, self.nearest, gauges.origin, gauges.frame, self.cuts.pieces, self.cuts.start)
        gradient = NUISANCE_GRADIENT * radius
        self.nuisance = np.full(12, WEAK_PRIOR)
        self.nuisance[[0, 1]], self.nuisance[[3, 4, 5, 6]] = NUISANCE_DISPLACEMENT, gradient
        # Members are gathered through a coarse hash of their own, as wide as a gauge radius.
        self.hash = group(voxel_keys(cells.position, radius))
        self.weak = WEAK_PRIOR
        self.sheet_gate = reference.gate + 0.1 * radius
        self.capacity = int(3 * np.pi * (radius / cells.resolution) ** 2) + 256

    def rows(self, held: FloatArray, gate: float) -> Rows:
        """Compare the moved reference cells with the current epoch."""
        cells = self.reference.cells
        moved = np.zeros((len(cells), 3))
        g = self.gauges
        blend(cells.position, self.nearest, g.origin, g.frame, held, self.radius, self.spacing, moved)
        return self.comparison.rows(moved, gate)

    def fit(self, state: Estimate, *, gate: float, min_points: int) -> FloatArray:
        """Improve `state` by one comparison and one fit of every gauge; returns the table of observations."""
        g = self.gauges
        order, key, start = self.hash
        table = self.table(self.rows(state.held, gate))
        fit.fit_gauges(
            g.origin, g.frame, g.curvature, self.radius, self.sheet_gate, self.weak, state.required, self.nuisance,
            self.reference.cells.resolution, min_points, self.capacity, self.textured, key, start, table[order],
            state.gains, state.held, state.values, state.covariance, state.data_sd, state.info, self.cuts.pieces,
            self.cuts.start,
        )  # fmt: skip
        return table

    def table(self, rows: Rows) -> FloatArray:
        """Put everything that the fit needs of a cell beside each other, columns as in `fit`."""
        cells = self.reference.cells
        table = np.empty((len(cells), fit.COLUMNS))
        for column, values in (
            (fit.POSITION, cells.position), (fit.NORMAL, self.comparison.normal), (fit.COUNT, cells.count),
            (fit.VALID, rows.valid), (fit.MOVED, rows.moved), (fit.MISFIT, rows.misfit), (fit.SLOPE, rows.slope),
            (fit.GREY, rows.grey), (fit.GREY_SLOPE, rows.grey_slope), (fit.VARIANCE, rows.variance),
            (fit.OWN_GREY, rows.own_grey),
        ):  # fmt: skip
            wide = np.ndim(values) == 2
            table[:, column : column + (np.shape(values)[1] if wide else 1)] = (
                values if wide else np.reshape(values, (-1, 1))
            )
        return table
