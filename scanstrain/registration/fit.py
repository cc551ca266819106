# SPDX-License-Identifier: MIT
"""Iterated robust alignment of two block surfaces at one width."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypedDict

import numba
import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OverlapError, explain
from scanstrain.registration.match import Metric, Rows, observe, pair
from scanstrain.registration.rigid import about, rotation
from scanstrain.registration.surfaces import UNUSABLE, Surface
from scanstrain.registration.weak import split

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

TUKEY = 4.685
"""Cut-off of the biweight in robust standard deviations: 95 % efficient on normal errors (common practice)."""
MIN_SCALE = 1e-6
"""The robust scale may fall below the a-priori noise (common relief and curvature cancel), but not to nothing."""
MIN_MATCHES = 20
"""Fewer matched blocks do not show a surface from enough sides."""
FREEZE, FREEZE_AFTER = 1e-3, 20
"""Matches are kept once a step is below this part of a block width, and after so many iterations in any case."""
ROUNDING = 1e-12
"""A step [m] that is rounding at any extent that is accepted."""


@dataclass(frozen=True, slots=True)
class Fit:
    """State of the alignment at one level.

    Parameters
    ----------
    T_ref_grid : ndarray of shape (4, 4)
        Takes the current surface's grid frame to the reference frame.
    rows : Rows
        Every match at that pose, on stable ground or not.
    weight : ndarray of shape (m,)
        Robust weight over a-priori variance [1/m^2]; 0 off stable ground.
    scale : float
        Robust standard deviation of the standardised residuals [1].
    strong, weak : ndarray of shape (6, r), (6, 6 - r)
        Motions that were solved for and held.
    converged : bool
    iterations : int
    step : float
        Last step at the farthest place [m].
    """

    T_ref_grid: FloatArray
    rows: Rows
    weight: FloatArray
    scale: float
    strong: FloatArray
    weak: FloatArray
    converged: bool
    iterations: int
    step: float

    def variance(self) -> float:
        """Variance of unit weight, from the weighted residuals [1]."""
        return unit_variance(self.rows, self.weight)

    def standard_error(self) -> float:
        """Largest standard error of the solved motions, independent blocks assumed [m]."""
        full, _, _ = total(self.rows, self.weight)
        reduced = self.strong.T @ full[:6, :6] @ self.strong
        return float(np.sqrt(self.variance() / max(np.linalg.eigvalsh(reduced)[0], 1e-300)))


@numba.njit(cache=True, nogil=True)
def sums(
    row: FloatArray, half: FloatArray, residual: FloatArray, weight: FloatArray, group: IntArray, groups: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Per group: sum w a a', sum w (a a' - b b') and sum w a r, rows in their order."""
    n = row.shape[1]
    full, shared, right = np.zeros((groups, n, n)), np.zeros((groups, n, n)), np.zeros((groups, n))
    for i in range(len(row)):
        w, g = weight[i], group[i]
        if w == 0.0:
            continue
        for a in range(n):
            right[g, a] += w * row[i, a] * residual[i]
            for b in range(a, n):
                full[g, a, b] += w * row[i, a] * row[i, b]
                shared[g, a, b] += w * (row[i, a] * row[i, b] - half[i, a] * half[i, b])
    for g in range(groups):
        for a in range(n):
            for b in range(a):
                full[g, a, b] = full[g, b, a]
                shared[g, a, b] = shared[g, b, a]
    return full, shared, right


def total(rows: Rows, weight: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Sum over all rows: (7, 7), (7, 7) and (7,), as `sums`."""
    full, shared, right = sums(rows.row, rows.half, rows.residual, weight, np.zeros(len(weight), np.int64), 1)
    return full[0], shared[0], right[0]


def unit_variance(rows: Rows, weight: FloatArray) -> float:
    """Variance of unit weight: weighted mean of the standardised squared residuals [1]."""
    used = weight > 0
    robust = weight[used] * rows.sd[used] ** 2
    return float((weight[used] * rows.residual[used] ** 2).sum() / max(robust.sum() - 6, 1.0))


def biweight(z: FloatArray) -> FloatArray:
    """Tukey's redescending weight of residuals given in units of the cut-off."""
    return np.asarray(np.maximum(1 - z**2, 0.0) ** 2)


def robust_scale(z: FloatArray) -> float:
    """Median absolute value, scaled to the standard deviation of a normal distribution."""
    return float(np.median(np.abs(z))) * 1.4826 if len(z) else np.inf


def level_metric(surface: Surface) -> Metric:
    """Centre and reach of the usable blocks of a surface."""
    return metric_of(surface.cells.centre[surface.state != UNUSABLE])


def metric_of(places: FloatArray) -> Metric:
    """Centre of places [m] and the distance of the farthest."""
    pivot = places.mean(axis=0)
    return Metric(pivot=pivot, arm=float(np.linalg.norm(places - pivot, axis=1).max()))


class Limits(TypedDict):
    """What `align` is to reach: budget and tolerance [m], most iterations."""

    budget: float
    tolerance: float
    limit: int


def rough(surface: Surface, limit: int) -> Limits:
    """Limits for a fit that is not the last one: what wide blocks fix badly is left to narrower ones."""
    return Limits(budget=surface.width / 4, tolerance=1e-3 * surface.width, limit=limit)


def step_of(vector: FloatArray, metric: Metric) -> FloatArray:
    """Return the 4x4 motion of a step in metric unknowns (6,)."""
    return about(metric.pivot, vector[:3] / metric.arm, vector[3:])


def motion(T: FloatArray, metric: Metric) -> FloatArray:
    """Return the metric unknowns (6,) of a 4x4 motion: the inverse of `step_of`."""
    from scipy.spatial.transform import Rotation

    vector = Rotation.from_matrix(T[:3, :3]).as_rotvec()
    moved = T[:3, :3] @ metric.pivot + T[:3, 3] - metric.pivot
    return np.r_[vector * metric.arm, rotation(-vector / 2) @ moved]


def align(
    reference: Surface,
    current: Surface,
    T_ref_grid: FloatArray,
    *,
    metric: Metric,
    budget: float,
    tolerance: float,
    limit: int,
    strong: tuple[FloatArray, FloatArray] | None = None,
    keep: BoolArray | None = None,
) -> Fit:
    """Align two surfaces by iteratively reweighted Gauss-Newton steps.

    Minimises sum rho(r / (scale sd)) over the rigid motion, r as in `match.observe`, rho Tukey's biweight. The scale
    starts at the median of the residuals and only falls, and the a-priori noise is a floor to it (after Yang & Holst
    2025: a threshold that falls monotonically and never passes below the detection level). Weak motions are left out
    of each step.

    Parameters
    ----------
    reference, current : Surface
    T_ref_grid : ndarray of shape (4, 4)
        Where to begin.
    metric : Metric
    budget : float
        Standard error at the place moved most beyond which a motion is held [m].
    tolerance : float
        Step at the farthest point that ends the iteration [m]; 0 means a hundredth of the standard error.
    limit : int
        Most iterations.
    strong : pair of ndarray, optional
        The motions to solve for and to hold, if they are decided already.
    keep : ndarray of shape (b,), bool, optional
        Reference blocks on stable ground. Default: all.

    Returns
    -------
    Fit

    Raises
    ------
    OverlapError
        Too few blocks find a partner.
    """
    T, scale, step = T_ref_grid, np.inf, np.inf
    pairs = pair(reference, current, T)
    for iteration in range(1, limit + 1):
        # Matches that still flip would keep the last digits from settling.
        if step > FREEZE * reference.width and 1 < iteration <= FREEZE_AFTER:
            pairs = pair(reference, current, T)
        rows, weight, scale = weigh(reference, current, pairs, T, scale, metric, keep)
        full, shared, right = total(rows, weight)
        variance, places = unit_variance(rows, weight), rows.place[weight > 0]
        V, W = strong or split(
            full[:6, :6], shared[:6, :6], variance=variance, places=places, metric=metric, budget=budget
        )
        reduced = V.T @ full[:6, :6] @ V
        solved = V @ (np.linalg.pinv(reduced, rcond=1e-14, hermitian=True) @ (V.T @ right[:6]))
        step = float(np.linalg.norm(solved[:3]) + np.linalg.norm(solved[3:]))
        sd = np.sqrt(variance / max(np.linalg.eigvalsh(reduced)[0], 1e-300)) if V.shape[1] else 0.0
        T = step_of(solved, metric) @ T
        converged = step <= max(tolerance or 0.01 * sd, ROUNDING)
        if converged:
            break
    rows, weight, scale = weigh(reference, current, pairs, T, scale, metric, keep)
    return Fit(T, rows, weight, scale, V, W, converged, iteration, step)


def weigh(
    reference: Surface,
    current: Surface,
    pairs: IntArray,
    T_ref_grid: FloatArray,
    scale: float,
    metric: Metric,
    keep: BoolArray | None = None,
) -> tuple[Rows, FloatArray, float]:
    """Make rows at a pose and give them robust weights.

    Parameters
    ----------
    reference, current : Surface
    pairs : ndarray of shape (m, 2)
        Blocks that match.
    T_ref_grid : ndarray of shape (4, 4)
    scale : float
        Robust scale so far; the new one is not larger.
    metric : Metric
    keep : ndarray of shape (b,), bool, optional
        Reference blocks on stable ground. Default: all.

    Returns
    -------
    rows : Rows
    weight : ndarray of shape (m,)
        [1/m^2]
    scale : float
    """
    rows = observe(reference, current, pairs, T_ref_grid, metric)
    used = np.ones(len(rows.block), bool) if keep is None else keep[rows.block]
    if used.sum() < MIN_MATCHES:
        got = f"{int(used.sum())} of {reference.flat()} blocks {reference.width:.3g} m wide"
        raise OverlapError(
            explain(
                "registration",
                f"at least {MIN_MATCHES} reference blocks with a matching current block",
                got,
                "check that both scans show the same surface, or widen capture_range",
            )
        )
    z = rows.residual / rows.sd
    scale = max(MIN_SCALE, min(scale, robust_scale(z[used])))
    weight = np.where(used, biweight(z / (TUKEY * scale)), 0.0) / rows.sd**2
    return rows, weight, scale
