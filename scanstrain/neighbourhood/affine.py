# SPDX-License-Identifier: MIT
"""The neighbourhood stage: from two aligned epochs to one local affine map per gauge."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import median_spacing
from scanstrain.epoch import Epoch
from scanstrain.errors import FitError, OptionError, explain
from scanstrain.neighbourhood.bias import REACH, gauge_bias
from scanstrain.neighbourhood.correlation import count_correlation
from scanstrain.neighbourhood.fit import CELLS, COVER, MATCHED, POINTS, SCALE_GREY, SCALE_NORMAL
from scanstrain.neighbourhood.gauges import Guide, frames_at, place_gauges, straight_guide
from scanstrain.neighbourhood.intensity import comparable_intensity
from scanstrain.neighbourhood.joint_cuts import WIDEST, cuts_at
from scanstrain.neighbourhood.joint_lines import Joint, lay_on_surface, pieces_of
from scanstrain.neighbourhood.level import Estimate, Level, make_surface
from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.neighbourhood.smooth import SmoothSurface, support_cells

FloatArray = NDArray[np.float64]
Progress = Callable[[str, float], None]

CELLS_ACROSS = 100
"""No more cells than this across a gauge: a denser cloud is averaged, at no loss for texture wider than a cell."""
COARSEST = 15
"""Cells across a gauge at the coarsest level: sets how large a displacement the pyramid captures."""
REQUIRED_DISPLACEMENT_SD = 2e-3
"""Metric default [m]: a displacement less certain than this says nothing about a structure."""
REQUIRED_STRAIN_SD = 1e-3
"""Metric default [1]: a strain less certain than this cannot tell cracking from nothing (common practice)."""
REQUIRED_TILT_SD = 5e-3
"""Metric default [rad] for tilt and spin."""
REQUIRED_CURVATURE_SD = 0.1
"""Metric default [1/m] for changes of curvature."""
SETTLED, SETTLED_SHARE = 0.1, 0.98
"""The fit stands when the last comparison moved that share of gauges by less than that part of a cell: texture is
straight over so short a way, so another comparison would change nothing."""
MIN_COVER = 0.35
"""Share of the patch that must be covered: less is a sliver at an edge or hole."""
SHARPEST = 0.5
"""Largest slope of the smooth surface at the rim of a gauge [1]: beyond it the patch spans an arris, not a surface."""
UNEXPLAINED = 1.6
"""Residual spread over the typical one of the scan beyond which one affine map does not describe the patch: a joint,
a crack, an arris or clutter runs through it. Range and incidence alone change the spread by less."""
MIN_MATCHED = 0.5
"""Share of a patch's cells that the current epoch must show."""


@dataclass(frozen=True, slots=True)
class Requirements:
    """Largest standard errors at which a component still counts as observed."""

    displacement: float = REQUIRED_DISPLACEMENT_SD
    strain: float = REQUIRED_STRAIN_SD
    tilt: float = REQUIRED_TILT_SD
    curvature: float = REQUIRED_CURVATURE_SD

    def limits(self) -> FloatArray:
        """One limit per unknown in the order of `result.PARAMETERS`."""
        d, s, t, k = self.displacement, self.strain, self.tilt, self.curvature
        return np.array([d, d, d, s, s, s, s, t, t, k, k, k])


def fit_affine(
    reference: Epoch,
    current: Epoch,
    *,
    gauge_length: float,
    gauge_spacing: float | None = None,
    resolution: float | None = None,
    use_intensity: bool = True,
    min_points: int = 30,
    required_displacement_sd: float | None = None,
    required_strain_sd: float | None = None,
    free_side: FloatArray | None = None,
    axis: FloatArray | Guide | None = None,
    joints: Sequence[Joint] = (),
    progress: Progress | None = None,
) -> AffineField:
    """Fit a local affine map of the reference surface onto the current one at every gauge.

    Minimises, per gauge, the weighted squares of two kinds of misfit: the height of every moved reference cell over
    the current surface, and the difference of its intensity from the predicted one up to a local gain and offset.
    Surface and intensity of both epochs are best linear predictions with covariances measured on the scans.
    Displacements larger than the texture's own width are reached over a pyramid of coarser cells.

    Parameters
    ----------
    reference, current : Epoch
        In one local frame; `current` already registered.
    gauge_length : float
        Diameter of the patch of one gauge [m].
    gauge_spacing : float, optional
        Distance between gauges [m]; a quarter of the gauge length by default.
    resolution : float, optional
        Cell width [m]; by default the point spacing of the coarser epoch, or a hundredth of the gauge length if
        that is more.
    use_intensity : bool
        Whether intensity may fix in-plane components.
    min_points : int
        Fewest matched cells of a gauge.
    required_displacement_sd, required_strain_sd : float, optional
        Standard errors above which in-plane displacement [m] and strain [1] are given as not observable.
    free_side : ndarray of shape (3,), optional
        A local point on the free side of the surface [m]: fixes the sign of normals.
    axis : ndarray of shape (3,) or callable, optional
        Unit direction of a straight tunnel, or for any tunnel the nearest places on its axis and the directions
        there, each (n, 3), from places (n, 3): normals look to the axis and a2 runs along it, otherwise a2 is upward.
    joints : sequence of Joint
        Lines across which the surface is not continuous: a patch ends at them.
    progress : callable, optional
        Called with a phrase and the share done.

    Returns
    -------
    AffineField

    Raises
    ------
    OptionError
        A length that does not fit the spacing or the object.
    FitError
        No gauge anywhere could be fitted.
    """
    say = progress or _silent
    spacing = gauge_spacing or gauge_length / 4
    width = cell_width(reference, current, gauge_length=gauge_length, resolution=resolution)
    grey_reference, grey_current = (
        pair_of_textures(reference, current, gauge_length, width) if use_intensity else (None, None)
    )
    radius = gauge_length / 2
    support = max(gauge_length / 4, 6 * width)

    say("surface model", 0.0)
    finest = make_surface(reference.points, grey_reference, width, support, max(spacing, 4 * width))
    places, normals = place_gauges(finest.cells, spacing)
    guide = straight_guide(axis, places) if isinstance(axis, np.ndarray) else axis
    gauges, warnings = frames_at(places, normals, support_cells(finest.cells.position, radius), free_side, guide)
    traces = [lay_on_surface(joint, finest.cells, radius) for joint in joints]
    pieces = pieces_of(joints, traces, width, radius)
    cuts = cuts_at(gauges.origin, gauges.frame, gauges.curvature, radius, *pieces)
    need = Requirements(
        displacement=required_displacement_sd or REQUIRED_DISPLACEMENT_SD,
        strain=required_strain_sd or REQUIRED_STRAIN_SD,
    )
    state = Estimate(np.zeros((len(places), 12)), np.ones(len(places)), need.limits() / units_of(radius))

    change = np.zeros((len(places), 3))
    widths = _pyramid(width, gauge_length)
    for number, step in enumerate(widths):
        say(f"fit at {1e3 * step:.0f} mm", (number + 1) / (len(widths) + 2))
        last = number == len(widths) - 1
        wide = max(support, 6 * step)
        ours = finest if last else make_surface(reference.points, grey_reference, step, wide, max(spacing, 4 * step))
        level = Level(
            ours,
            make_surface(current.points, grey_current, step, wide, max(spacing, 4 * step)),
            gauges,
            radius,
            spacing,
            cuts,
        )
        gate = max(ours.gate, 4 * step) if not last else ours.gate + step
        for turn in range(3 if last else 1):
            before = state.held[:, :3].copy()
            table = level.fit(state, gate=gate, min_points=min_points)
            change = np.abs(state.held[:, :3] - before)
            seen = state.data_sd[:, :3] <= state.required[:3]
            if last and turn and np.mean(np.where(seen, change, 0.0).max(axis=1) < SETTLED * step) > SETTLED_SHARE:
                break
    say("fit done", 1.0)
    status = gauge_status(state, gauges, radius, change.max(axis=1) > 0.5 * width, min_points)
    if not (status == Status.FINE).any():
        counts = ", ".join(f"{Status(s).name.lower()} {int((status == s).sum())}" for s in np.unique(status))
        raise FitError(
            explain(
                "local fit",
                "at least one gauge that can be fitted",
                counts,
                "use a longer gauge_length or denser scans",
            )
        )
    say("shared noise", 1.0)
    correlation = count_correlation(level, state, table, np.flatnonzero(status == Status.FINE))
    field = _field(state, gauges, status, need, gauge_length, spacing, warnings)
    reach = cuts_at(gauges.origin, gauges.frame, gauges.curvature, REACH / WIDEST * radius, *pieces)
    return replace(field, correlation=correlation, bias=gauge_bias(field, reference.points, reach))


def _silent(_phrase: str, _share: float) -> None:
    """Report progress to nobody."""


def units_of(radius: float) -> FloatArray:
    """Factors from the unknowns of the fit, metres at the rim, to those of the field: m, 1 and 1/m."""
    return np.array([1.0] * 3 + [1 / radius] * 6 + [1 / radius**2] * 3)


def cell_width(reference: Epoch, current: Epoch, *, gauge_length: float, resolution: float | None = None) -> float:
    """Check lengths against each other and choose the cell width [m]; arguments and errors as of `fit_affine`."""
    spacing = max(median_spacing(reference.points), median_spacing(current.points))
    extent = float(np.ptp(reference.points, axis=0).max())
    if not spacing > 0:
        raise OptionError(explain("the scans", "distinct points", "only coincident ones", "export the scans again"))
    if gauge_length < 8 * spacing:
        raise OptionError(
            explain(
                "gauge_length",
                f"more than 8 point spacings ({8 * spacing:.4f} m here)",
                f"{gauge_length} m",
                "use a longer gauge",
            )
        )
    if gauge_length > extent:
        raise OptionError(
            explain(
                "gauge_length",
                f"no more than the object ({extent:.2f} m)",
                f"{gauge_length} m",
                "use a shorter gauge",
            )
        )
    return resolution or max(spacing, gauge_length / CELLS_ACROSS)


def _pyramid(width: float, gauge_length: float) -> list[float]:
    """Cell widths from coarse to fine, in steps of at most three [m]."""
    coarse = max(width, gauge_length / COARSEST)
    steps = int(np.ceil(np.log(coarse / width) / np.log(3.0) + 1e-9)) if coarse > 1.3 * width else 0
    return [width * (coarse / width) ** (k / steps) for k in range(steps, 0, -1)] + [width]


def pair_of_textures(
    reference: Epoch, current: Epoch, gauge_length: float, width: float
) -> tuple[FloatArray | None, FloatArray | None]:
    """Texture of both epochs, brought to a common spread so that the local gain starts near 1."""
    out = []
    for epoch in (reference, current):
        texture = comparable_intensity(epoch, gauge_length, 2 * width)
        if texture is None:
            return None, None
        low, middle, high = np.percentile(texture, [16, 50, 84])
        if not high > low:
            return None, None
        out.append((texture - middle) / (0.5 * (high - low)))
    return out[0], out[1]


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


def _field(
    state: Estimate,
    gauges: SmoothSurface,
    status: NDArray[np.uint8],
    need: Requirements,
    gauge_length: float,
    spacing: float,
    warnings: tuple[str, ...],
) -> AffineField:
    """Scale the unknowns back to their units and blank what is not observable."""
    radius = gauge_length / 2
    scale = units_of(radius)
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
        gauge_length=gauge_length,
        gauge_spacing=spacing,
        warnings=warnings,
    )
