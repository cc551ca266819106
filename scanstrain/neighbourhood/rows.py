# SPDX-License-Identifier: MIT
"""Observation rows: every reference cell, moved by the present estimate, against the predicted current epoch.

Both epochs are predicted with the same method: the reference at its own cells, the current epoch at the moved ones.
So what smoothing does to a surface it does to both, and it drops out of their difference; a scan compared with
itself shows nothing at all. The noise of a single cell reaches a sum of rows through its neighbours' predictions
much as it would by itself.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.neighbourhood.fit import SAME_SHEET
from scanstrain.neighbourhood.predict import Predictor, choose_block, predict_at

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


LEAST_NOISE = 5e-5
"""Noise of a single height that is assumed at least [m]: no scanner does better, rounding in the file does worse."""


@dataclass(frozen=True, slots=True)
class Rows:
    """One surface row and one intensity row per reference cell, linearised at the motion `moved`.

    Parameters
    ----------
    valid : ndarray of shape (c,), bool
        Whether the current epoch shows the cell.
    moved : ndarray of shape (c, 3)
        Displacement at which the row was linearised [m].
    misfit : ndarray of shape (c,)
        Height of the moved cell over the predicted surface [m].
    slope : ndarray of shape (c, 3)
        Derivative of `misfit` by the displacement: the local normal of the predicted surface, local axes.
    grey : ndarray of shape (c,)
        Predicted intensity at the moved cell.
    grey_slope : ndarray of shape (c, 3)
        Derivative of `grey` by the displacement [1/m].
    own_grey : ndarray of shape (c,)
        Intensity of the cell that `grey` is compared with.
    variance : ndarray of shape (c, 4)
        Of height and intensity: what a row adds to the error of a fit (both epochs' noise shares and unresolved
        structure), then the spread expected of single residuals: (height, intensity, height, intensity).
    """

    valid: NDArray[np.bool_]
    moved: FloatArray
    misfit: FloatArray
    slope: FloatArray
    grey: FloatArray
    grey_slope: FloatArray
    own_grey: FloatArray
    variance: FloatArray


@numba.njit(cache=True, nogil=True, parallel=True)
def _evaluate(
    position: FloatArray, moved: FloatArray, count: FloatArray, normal: FloatArray, own_density: FloatArray,
    density: FloatArray, gate: float, own_noise: FloatArray, noise: FloatArray,
    key: IntArray, size: float, origin: FloatArray, frame: FloatArray, curvature: FloatArray, first: IntArray,
    st: FloatArray, weights_h: FloatArray, weights_i: FloatArray, constant: FloatArray, variance: FloatArray,
    unresolved: FloatArray, through: FloatArray, height_table: FloatArray, intensity_table: FloatArray, step: float,
    valid: NDArray[np.bool_], misfit: FloatArray, slope: FloatArray, grey: FloatArray, grey_slope: FloatArray,
    out_variance: FloatArray,
) -> None:  # fmt: skip
    for c in numba.prange(len(position)):
        valid[c] = False
        x, y, z = position[c, 0] + moved[c, 0], position[c, 1] + moved[c, 1], position[c, 2] + moved[c, 2]
        b = choose_block(x, y, z, key, first, size, origin)
        if b < 0:
            continue
        dot = 0.0
        for a in range(3):
            dot += normal[c, a] * frame[b, a, 2]
        if abs(dot) < SAME_SHEET:
            continue
        out = np.empty(8)
        near = predict_at(
            b,
            x,
            y,
            z,
            origin,
            frame,
            curvature,
            first,
            st,
            weights_h,
            weights_i,
            constant,
            height_table,
            intensity_table,
            step,
            out,
        )
        if not near or abs(out[0]) > gate:
            continue
        valid[c] = True
        misfit[c], grey[c] = out[0], out[4]
        for a in range(3):
            slope[c, a], grey_slope[c, a] = out[1 + a], out[5 + a]
        # The current epoch's noise reaches a sum of rows as its own points do: by the ratio of point densities.
        share = own_density[c] / max(density[b], 1e-9)
        out_variance[c, 0] = (own_noise[c, 0] + noise[b, 0] * share) / count[c] + unresolved[b, 0]
        out_variance[c, 1] = (own_noise[c, 1] + noise[b, 1] * share) / count[c] + unresolved[b, 1]
        # Of relief both predictions miss the same, which drops out of their difference; the noise in them does not.
        out_variance[c, 2] = own_noise[c, 0] / count[c] + through[b, 0]
        out_variance[c, 3] = own_noise[c, 1] / count[c] + variance[b, 1]


def block_density(cells: Cells) -> FloatArray:
    """Points per square metre of surface about every block, from the points and cells of the block [1/m^2].

    The area a block covers is counted in its occupied cells, corrected for the cells that are empty by chance at
    the mean count (Poisson).
    """
    occupied = np.diff(cells.start).astype(np.float64)
    rate = cells.weight / np.maximum(occupied, 1.0)
    # For Poisson counts with mean m the occupied cells hold m / (1 - exp(-m)) on average: invert by iteration.
    m = np.maximum(rate, 1.0 + 1e-6)
    for _ in range(30):
        m = rate * (1.0 - np.exp(-m))
    return np.maximum(m, 0.05) / cells.resolution**2


class Comparison:
    """A reference epoch, predicted at its own cells once, and a current epoch that it is compared with.

    Parameters
    ----------
    cells : Cells
        Reference epoch.
    reference, current : Predictor
        Of the two epochs.
    density : pair of ndarray
        Reference point density at each cell, and current point density at each block [1/m^2].
    gate : float
        Cells farther than this from the reference's own predicted surface are clutter [m].
    """

    def __init__(
        self,
        cells: Cells,
        reference: Predictor,
        current: Predictor,
        density: tuple[FloatArray, FloatArray],
        gate: float,
    ) -> None:
        self.cells, self.reference, self.current, self.density = cells, reference, current, density
        self.normal = np.ascontiguousarray(reference.surface.frame[cells.block][:, :, 2])
        self.noise = np.ascontiguousarray(reference.noise[cells.block])
        at_rest = np.zeros((len(cells), 3))
        self.own = _against(
            reference, cells, self.normal, self.noise, at_rest, density[0], block_density(cells), 10 * gate
        )
        self.own_valid = self.own.valid & (np.abs(self.own.misfit) < gate)
        # Onto the own predicted surface, along its normal.
        length = np.einsum("ca,ca->c", self.own.slope, self.own.slope)
        self.to_surface = -(self.own.misfit / np.maximum(length, 1e-9))[:, None] * self.own.slope
        # A prediction at a cell combines that cell with what its neighbours say; the less the cell weighs, the more
        # of what they miss stays in it.
        single = self.noise / cells.count[:, None]
        # Blocks too empty to predict carry an infinite variance; their cells are not valid.
        error = np.where(np.isfinite(reference.variance), reference.variance, 0.0)[cells.block]
        missed = np.where(np.isfinite(reference.unresolved), reference.unresolved, 0.0)[cells.block]
        share = single / np.maximum(single + error, 1e-300)
        self.missed = share**2 * missed
        self.spread = share * error
        self.spread[:, 0] = np.where(np.isfinite(reference.through), reference.through, 0.0)[cells.block, 0]
        self.single = single

    def rows(self, moved: FloatArray, gate: float) -> Rows:
        """Compare at the displacement `moved` (c, 3) [m] of every cell; misfits beyond `gate` [m] are no match."""
        rows = _against(
            self.current, self.cells, self.normal, self.noise, moved, self.density[0], self.density[1], 10 * gate
        )
        misfit = rows.misfit + np.einsum("ca,ca->c", rows.slope, self.to_surface)
        variance = rows.variance
        variance[:, :2] += self.missed
        variance[:, 2:] += self.spread - self.single
        variance[:, 0::2] += (LEAST_NOISE**2 / self.cells.count)[:, None]
        return replace(
            rows,
            valid=rows.valid & self.own_valid & (np.abs(misfit) < gate),
            misfit=misfit,
            own_grey=self.own.grey,
            variance=np.maximum(variance, 1e-30),
        )

    def back(self, chosen: IntArray, moved: FloatArray, gate: float) -> Back:
        """Compare the current cells `chosen`, moved back by `moved` (c, 3) [m], with the predicted reference."""
        cells = self.current.cells
        block = cells.block[chosen]
        normal = np.ascontiguousarray(self.current.surface.frame[block][:, :, 2])
        noise = np.ascontiguousarray(self.current.noise[block])
        part = replace(cells, position=cells.position[chosen], count=cells.count[chosen])
        density = self.density[1][block], block_density(self.cells)
        rows = _against(self.reference, part, normal, noise, -moved, *density, gate)
        return Back(rows.valid, rows.misfit, rows.slope, rows.grey, normal, noise)


@dataclass(frozen=True, slots=True)
class Back:
    """Current cells against the predicted reference: as of `Rows`, with the cells' normals and noise variances."""

    valid: NDArray[np.bool_]
    misfit: FloatArray
    slope: FloatArray
    grey: FloatArray
    normal: FloatArray
    noise: FloatArray


def _against(
    predictor: Predictor,
    cells: Cells,
    normal: FloatArray,
    noise: FloatArray,
    moved: FloatArray,
    own_density: FloatArray,
    density: FloatArray,
    gate: float,
) -> Rows:
    """Compare moved cells with a predicted epoch, whose point density is given by block."""
    n = len(cells)
    out = (
        np.zeros(n, np.bool_), np.zeros(n), np.zeros((n, 3)), np.zeros(n), np.zeros((n, 3)), np.ones((n, 4)),
    )  # fmt: skip
    surface = predictor.surface
    _evaluate(
        cells.position, moved, cells.count, normal, own_density, density, gate, noise, predictor.noise,
        predictor.cells.key, predictor.cells.block_size, surface.origin, surface.frame, surface.curvature,
        predictor.start, predictor.st, predictor.height, predictor.intensity, predictor.constant, predictor.variance,
        predictor.unresolved, predictor.through, predictor.height_table, predictor.intensity_table,
        predictor.table_step, *out,
    )  # fmt: skip
    return Rows(out[0], moved, *out[1:5], np.zeros(n), out[5])
