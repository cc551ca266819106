# SPDX-License-Identifier: MIT
"""Before going to site: the smallest changes that a planned set-up can show at one gauge.

Both epochs are points of an even spacing on a smooth surface, with noise of which a share may be common to
neighbouring points. The local fit is the one of the neighbourhood stage, so its standard errors follow from its
normal equations over a disc, and from the correlation of the noise by a' S a (a: weights of the estimate).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

FloatArray = NDArray[np.float64]

CONFIDENCE = 1.96
"""Normal quantile of a two-sided test at 95 %."""
POWER = 0.84
"""Normal quantile of 80 % power: together with the test a shift of 2.8 standard errors (geodetic common practice)."""
ALLOWANCE_NORMAL, ALLOWANCE_IN_PLANE = 1.10, 1.25
"""Standard errors of the program over the least possible ones: what it aims at, so that nobody plans too tightly."""
MOST_ACROSS = 1000
"""Most point spacings across a gauge: the sums over all pairs of points need memory with the square of it."""
FEWEST_ACROSS = 8
"""Fewest, as in the fit itself."""
RESOLVED = 2.0
"""Point spacings that a texture must be wide at least, or most of it falls between the points."""


@dataclass(frozen=True, slots=True)
class SetUp:
    """A planned set-up, the same at both epochs.

    Parameters
    ----------
    spacing : float
        Distance between points on the surface [m].
    noise : float
        Standard deviation of a single point along the surface normal [m].
    gauge_length : float
        Diameter of a gauge [m].
    contrast : float
        Spread of the intensity's texture over the noise of a single intensity [1]; 0 for a bare surface.
    texture_length : float
        Distance at which the correlation of the texture has fallen to 1/e [m].
    shared : float
        Share of the noise variance that neighbouring points have in common [1].
    shared_length : float
        Distance at which its correlation has fallen to 1/e [m].
    datum_sd : float
        Standard error of the registration along the normal at the place, and of displacements in the plane [m].
    thickness : float, optional
        Of the lining or wall [m], for bending strain at its face.

    Raises
    ------
    OptionError
        A value out of its range, or a gauge with too few or too many points across.
    """

    spacing: float
    noise: float
    gauge_length: float
    contrast: float = 0.0
    texture_length: float = 0.03
    shared: float = 0.2
    shared_length: float = 0.05
    datum_sd: float = 0.0
    thickness: float | None = None

    def __post_init__(self) -> None:
        for name in ("spacing", "noise", "gauge_length", "texture_length", "shared_length", "thickness"):
            value = getattr(self, name)
            if value is not None and not (np.isfinite(value) and value > 0):
                raise OptionError(explain(name, "a length above 0 m", f"{value}", "give it in metres"))
        for name in ("contrast", "datum_sd"):
            if not (np.isfinite(getattr(self, name)) and getattr(self, name) >= 0):
                raise OptionError(
                    explain(name, "a number from 0", f"{getattr(self, name)}", "give 0 where there is none")
                )
        if not 0 <= self.shared <= 1:
            raise OptionError(explain("shared", "a share from 0 to 1", f"{self.shared}", "give for example 0.2"))
        across = self.gauge_length / self.spacing
        if not FEWEST_ACROSS <= across <= MOST_ACROSS:
            raise OptionError(
                explain(
                    "gauge_length",
                    f"{FEWEST_ACROSS} to {MOST_ACROSS} point spacings",
                    f"{across:.3g} of them",
                    "check that both are in metres, or choose another gauge",
                )
            )

    @property
    def textured(self) -> bool:
        """Whether intensity can fix anything in the plane: there is a texture, and the points resolve it."""
        return self.contrast > 0 and self.texture_length >= RESOLVED * self.spacing


@dataclass(frozen=True, slots=True)
class Detectable:
    """What one quantity must reach to be seen at one place that is tested by itself.

    Parameters
    ----------
    name : str
        Of the quantity.
    unit : str
        Of the three numbers.
    sd : float or None
        Standard error; None where the set-up cannot show the quantity.
    reason : str
        Why it cannot; empty otherwise.
    """

    name: str
    unit: str
    sd: float | None
    reason: str = ""

    @property
    def limit(self) -> float | None:
        """Detection limit at 95 % confidence."""
        return None if self.sd is None else CONFIDENCE * self.sd

    @property
    def with_power(self) -> float | None:
        """Size that is detected in 80 of 100 cases."""
        return None if self.sd is None else (CONFIDENCE + POWER) * self.sd


def forecast(setup: SetUp) -> tuple[Detectable, ...]:
    """Return what a planned set-up can show at one gauge between two epochs.

    Parameters
    ----------
    setup : SetUp
        The plan.

    Returns
    -------
    tuple of Detectable
        Normal displacement, tilt, change of curvature, bending strain with a thickness; then displacement in the
        plane, strain and spin, which need texture.
    """
    radius = setup.gauge_length / 2
    # Both epochs carry the noise; shared noise is drawn anew at each, as from a scanner that was set up again.
    normal = np.sqrt(2.0) * setup.noise * ALLOWANCE_NORMAL * disc_errors(setup, order=2)
    bend = normal[3] / radius**2
    rows = [
        Detectable("normal displacement", "m", float(np.hypot(normal[0], setup.datum_sd))),
        Detectable("tilt", "rad", float(normal[1] / radius)),
        Detectable("change of curvature", "1/m", float(bend)),
    ]
    if setup.thickness is not None:
        rows.append(Detectable("bending strain at the face", "1", float(setup.thickness / 2 * bend)))
    names = (("in-plane displacement", "m"), ("strain", "1"), ("spin", "rad"))
    if not setup.textured:
        return (*rows, *(Detectable(name, unit, None, _why_not(setup)) for name, unit in names))
    # What neighbours share of an intensity's noise meets slopes of the texture that change from place to place.
    own = replace(setup, shared=0.0)
    point = np.sqrt(2.0) * tangential_error(setup) * ALLOWANCE_IN_PLANE
    mean, slope = point * disc_errors(own, order=1)[:2]
    # Spin is half the difference of two independent gradients, normal strain is one of them.
    sizes = (np.hypot(mean, setup.datum_sd), slope / radius, slope / radius / np.sqrt(2.0))
    return (*rows, *(Detectable(name, unit, float(sd)) for (name, unit), sd in zip(names, sizes, strict=True)))


def tangential_error(setup: SetUp) -> float:
    """Return the standard error in the plane [m] that the texture gives a single point of one epoch.

    A texture of spread c with the correlation exp(-(d / l)^2) has slopes of rms c sqrt(2) / l along every direction.
    """
    return setup.texture_length / (np.sqrt(2.0) * setup.contrast)


def disc_errors(setup: SetUp, *, order: int) -> FloatArray:
    """Return standard errors of a polynomial fit over the disc of a gauge, for single values with unit variance.

    The fit is by unweighted least squares with the basis 1, x, y (order 1) and x^2 / 2, x y, y^2 / 2 (order 2), x and
    y in radii. Its estimates are sums over the points, and the variance of a sum is a' S a, S with ones on
    the diagonal and the shared part of the noise, correlated by exp(-d / l), beside it.

    Parameters
    ----------
    setup : SetUp
        Spacing, gauge length, and the noise that points share.
    order : int
        0, 1 or 2.

    Returns
    -------
    ndarray of shape (1,), (3,) or (6,)
        In the order of the basis.
    """
    half = int(setup.gauge_length / 2 / setup.spacing)
    steps = np.arange(-half, half + 1) * (2 * setup.spacing / setup.gauge_length)
    x, y = np.meshgrid(steps, steps, indexing="ij")
    inside = x**2 + y**2 <= 1
    basis = np.stack([np.ones_like(x), x, y, x * x / 2, x * y, y * y / 2])[: (1, 3, 6)[order], inside]
    weights = np.linalg.solve(basis @ basis.T, basis)
    independent = (1 - setup.shared) * (weights**2).sum(axis=1)
    if setup.shared == 0:
        return np.sqrt(independent)
    return np.sqrt(independent + setup.shared * _correlated(weights, inside, setup.spacing / setup.shared_length))


def _correlated(weights: FloatArray, inside: NDArray[np.bool_], step: float) -> FloatArray:
    """Sum a' R a with R = exp(-distance) over a grid of the given step, by convolution with the Fourier transform."""
    from scipy.signal import fftconvolve

    size = len(inside)
    lag = np.arange(-size + 1, size) * step
    correlation = np.exp(-np.hypot(lag[:, None], lag[None, :]))
    out = np.empty(len(weights))
    for k, values in enumerate(weights):
        grid = np.zeros(inside.shape)
        grid[inside] = values
        spread = fftconvolve(grid, correlation)[size - 1 : 2 * size - 1, size - 1 : 2 * size - 1]
        out[k] = float((grid * spread).sum())
    return np.maximum(out, 0.0)


def _why_not(setup: SetUp) -> str:
    if setup.contrast == 0:
        return "not observable: a bare surface shows nothing in its own plane"
    return "not observable: the texture is narrower than two point spacings"
