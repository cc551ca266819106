# SPDX-License-Identifier: MIT
"""What the neighbourhood stage is asked for: lengths, limits, lines; the same for every piece of an object."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

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
FEWEST_SPACINGS = 8
"""A gauge shorter than this many point spacings is refused."""


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


@dataclass(frozen=True, slots=True)
class Setting:
    """Lengths and limits.

    Parameters
    ----------
    gauge_length, spacing, width : float
        Diameter of a patch, distance between gauges, and finest cell width [m].
    use_intensity : bool
        Whether intensity may fix in-plane components.
    min_points : int
        Fewest matched cells of a gauge.
    need : Requirements
    """

    gauge_length: float
    spacing: float
    width: float
    use_intensity: bool = True
    min_points: int = 30
    need: Requirements = field(default_factory=Requirements)

    @property
    def radius(self) -> float:
        """Of a patch [m]."""
        return self.gauge_length / 2

    def widths(self) -> list[float]:
        """Cell widths from coarse to fine, in steps of at most three [m]."""
        width = self.width
        coarse = max(width, self.gauge_length / COARSEST)
        steps = int(np.ceil(np.log(coarse / width) / np.log(3.0) + 1e-9)) if coarse > 1.3 * width else 0
        return [width * (coarse / width) ** (k / steps) for k in range(steps, 0, -1)] + [width]

    def support(self, step: float) -> float:
        """Radius over which the surface is smooth at cells of a width [m]."""
        return max(self.gauge_length / 4, 6 * step)

    def region(self, step: float) -> float:
        """Width over which noise is judged at cells of a width [m]."""
        return max(self.spacing, 4 * step)


def units_of(radius: float) -> FloatArray:
    """Factors from the unknowns of the fit, metres at the rim, to those of the field: m, 1 and 1/m."""
    return np.array([1.0] * 3 + [1 / radius] * 6 + [1 / radius**2] * 3)


def cell_width(spacing: float, extent: float, gauge_length: float, resolution: float | None) -> float:
    """Check lengths against each other and choose the cell width.

    Parameters
    ----------
    spacing : float
        Between the points of the coarser epoch [m].
    extent : float
        Of the object [m].
    gauge_length, resolution : float, float or None
        As of `fit_affine`.

    Raises
    ------
    OptionError
        A length that does not fit the spacing or the object.
    """
    if not spacing > 0:
        raise OptionError(explain("the scans", "distinct points", "only coincident ones", "export the scans again"))
    if gauge_length < FEWEST_SPACINGS * spacing:
        raise OptionError(
            explain(
                "gauge_length",
                f"more than {FEWEST_SPACINGS} point spacings ({FEWEST_SPACINGS * spacing:.4f} m here)",
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
