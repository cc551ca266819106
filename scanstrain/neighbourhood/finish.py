# SPDX-License-Identifier: MIT
"""From the fitted gauges of all pieces to the field: status, observability, units."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import FitError, explain
from scanstrain.neighbourhood.correlation import Shared
from scanstrain.neighbourhood.fit import CELLS, COVER, MATCHED, POINTS, SCALE_GREY, SCALE_NORMAL
from scanstrain.neighbourhood.fitting import Fitted
from scanstrain.neighbourhood.level import Estimate
from scanstrain.neighbourhood.result import AffineField, Correlation, Status
from scanstrain.neighbourhood.setting import Setting, units_of
from scanstrain.neighbourhood.smooth import SmoothSurface

FloatArray = NDArray[np.float64]

MOVING = 0.5
"""A gauge that still moved by this part of a cell at the last comparison has not converged."""
MIN_COVER = 0.35
"""Share of the patch that must be covered: less is a sliver at an edge or hole."""
SHARPEST = 0.5
"""Largest slope of the smooth surface at the rim of a gauge [1]: beyond it the patch spans an arris, not a surface."""
UNEXPLAINED = 1.6
"""Residual spread over the typical one of the scan beyond which one affine map does not describe the patch: a joint,
a crack, an arris or clutter runs through it. Range and incidence alone change the spread by less."""
MIN_MATCHED = 0.5
"""Share of a patch's cells that the current epoch must show."""


def gauge_status(
    state: Estimate, gauges: SmoothSurface, radius: float, moving: NDArray[np.bool_], min_points: int
) -> NDArray[np.uint8]:
    """Give every gauge its reason code."""
    total, matched, cover = state.info[:, CELLS], state.info[:, MATCHED], state.info[:, COVER]
    status = np.full(len(total), Status.FINE, np.uint8)
    status[moving] = Status.NOT_CONVERGED
    spread = np.sqrt(state.info[:, SCALE_NORMAL])
    # Where a scan has less noise than its model, or none at all, what is left of it says nothing.
    typical = max(np.nanmedian(spread), 0.5) if np.isfinite(spread).any() else np.inf
    status[spread > UNEXPLAINED * typical] = Status.JOINT
    bend = np.abs(gauges.curvature[:, [0, 2]]).max(axis=1) + np.abs(gauges.curvature[:, 1])
    status[(cover < MIN_COVER) | (bend * radius > SHARPEST)] = Status.EDGE
    status[~np.isfinite(state.values).all(axis=1)] = Status.DEGENERATE
    status[matched < min_points] = Status.TOO_FEW_POINTS
    status[matched < MIN_MATCHED * total] = Status.NO_OVERLAP
    status[total < min_points] = Status.TOO_FEW_POINTS
    status[gauges.support < 6] = Status.DEGENERATE
    return status


def status_of(fitted: Fitted, setting: Setting) -> NDArray[np.uint8]:
    """Reason codes (g,) of the gauges of a whole object, or of a sample of it."""
    moving = fitted.change.max(axis=1, initial=0.0) > MOVING * setting.width
    return gauge_status(fitted.state, fitted.gauges, setting.radius, moving, setting.min_points)


def finish(fitted: Fitted, setting: Setting, shared: Shared | None, warnings: tuple[str, ...]) -> AffineField:
    """Make the field of all gauges.

    Raises
    ------
    FitError
        No gauge anywhere could be fitted.
    """
    status = status_of(fitted, setting)
    fine = status == Status.FINE
    if not fine.any():
        counts = ", ".join(f"{Status(s).name.lower()} {int((status == s).sum())}" for s in np.unique(status))
        raise FitError(
            explain(
                "local fit",
                "at least one gauge that can be fitted",
                counts,
                "use a longer gauge_length or denser scans",
            )
        )
    correlation = None
    if shared is not None:
        factor = np.sqrt(np.median(fitted.growth[fine], axis=0))
        height, *grey = shared.described
        correlation = Correlation(height, grey[0] if grey else None, tuple(float(f) for f in factor))
    return _field(fitted, setting, status, correlation, warnings)


def _field(
    fitted: Fitted,
    setting: Setting,
    status: NDArray[np.uint8],
    correlation: Correlation | None,
    warnings: tuple[str, ...],
) -> AffineField:
    """Scale the unknowns back to their units and blank what is not observable."""
    state, gauges, need = fitted.state, fitted.gauges, setting.need
    scale = units_of(setting.radius)
    values = state.values * scale
    covariance = state.covariance * scale[:, None] * scale[None, :]
    sd = state.data_sd * scale
    fine = status == Status.FINE
    # Normal unknowns keep their final error: the tangential ones that nothing shows are bounded there, not unknown.
    normal = [2, 7, 8, 9, 10, 11]
    sd[:, normal] = np.sqrt(np.maximum(np.einsum("gii->gi", covariance), 0.0))[:, normal]
    observable = (sd <= need.limits()) & fine[:, None] & np.isfinite(values)
    values = np.where(observable, values, np.nan)
    return AffineField(
        position=gauges.origin,
        frame=gauges.frame,
        displacement=values[:, :3].copy(),
        gradient=values[:, 3:9].reshape(-1, 3, 2).copy(),
        hessian=values[:, 9:].copy(),
        covariance=covariance,
        shape=gauges.curvature,
        observable=observable,
        status=status,
        points=state.info[:, POINTS].astype(np.int64),
        residual_normal=np.sqrt(state.info[:, SCALE_NORMAL]),
        residual_intensity=np.sqrt(state.info[:, SCALE_GREY]),
        gauge_length=setting.gauge_length,
        gauge_spacing=setting.spacing,
        warnings=warnings,
        correlation=correlation,
    )
