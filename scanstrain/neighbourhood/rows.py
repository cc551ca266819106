# SPDX-License-Identifier: MIT
"""Observation rows: every reference cell, moved by the present estimate, against the predicted current epoch."""

from __future__ import annotations

from dataclasses import dataclass

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import Cells
from scanstrain.neighbourhood.covariance import Covariance
from scanstrain.neighbourhood.fit import SAME_SHEET
from scanstrain.neighbourhood.predict import Predictor, choose_block, predict_at

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


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
    variance: FloatArray


@numba.njit(cache=True, nogil=True, parallel=True)
def _evaluate(
    position: FloatArray, moved: FloatArray, count: FloatArray, normal: FloatArray, own_density: FloatArray,
    density: FloatArray, gate: float, own_noise: FloatArray, noise: FloatArray,
    key: IntArray, size: float, origin: FloatArray, frame: FloatArray, curvature: FloatArray, first: IntArray,
    st: FloatArray, weights_h: FloatArray, weights_i: FloatArray, constant: FloatArray, variance: FloatArray,
    unresolved: FloatArray, height_table: FloatArray, intensity_table: FloatArray, step: float,
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
        out_variance[c, 2] = own_noise[c, 0] / count[c] + variance[b, 0]
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


def evaluate_rows(
    cells: Cells, normal: FloatArray, moved: FloatArray, predictor: Predictor,
    noise: tuple[Covariance, Covariance | None], *, gate: float, density: tuple[FloatArray, FloatArray],
) -> Rows:  # fmt: skip
    """Compare every reference cell, moved by `moved`, with the predicted current epoch.

    Parameters
    ----------
    cells : Cells
        Reference epoch.
    normal : ndarray of shape (c, 3)
        Surface normal at each cell, either sign.
    moved : ndarray of shape (c, 3)
        Present displacement of each cell [m].
    predictor : Predictor
        Current epoch.
    noise : pair of Covariance
        Of the reference epoch: height, intensity.
    gate : float
        Misfits beyond this are no match [m].
    density : pair of ndarray
        Reference point density at each cell, and current point density at each block [1/m^2].
    """
    n = len(cells)
    out = (
        np.zeros(n, np.bool_), np.zeros(n), np.zeros((n, 3)), np.zeros(n), np.zeros((n, 3)), np.ones((n, 4)),
    )  # fmt: skip
    height, grey = noise
    own_noise = np.stack([height.noise, (grey or height).noise], axis=1)[cells.block]
    current = predictor.surface
    _evaluate(
        cells.position, moved, cells.count, normal, density[0], density[1], gate, own_noise, predictor.noise,
        predictor.cells.key,
        predictor.cells.block_size, current.origin, current.frame, current.curvature, predictor.start, predictor.st,
        predictor.height, predictor.intensity, predictor.constant, predictor.variance, predictor.unresolved,
        predictor.height_table, predictor.intensity_table, predictor.table_step, *out,
    )  # fmt: skip
    return Rows(out[0], moved, *out[1:])
