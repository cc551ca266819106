# SPDX-License-Identifier: MIT
"""A smooth random function of two material coordinates: relief of a surface, its reflectance, correlated noise."""

from __future__ import annotations

from functools import cached_property

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

KNOTS_PER_LENGTH = 4
"""Knots in one correlation length: at 4 the spline carries the Gaussian correlation to about 1 %."""


class RandomField:
    """A stationary field of zero mean, twice continuously differentiable and periodic over `extent`.

    White noise on a grid, smoothed to the correlation exp(-(d / correlation_length)^2), taken as coefficients of
    a uniform cubic B-spline: value and gradient are exact everywhere, and the same at every call.

    Parameters
    ----------
    extent : tuple of float
        Period along both coordinates [m].
    rms : float
        Standard deviation of the values, in their own unit.
    correlation_length : float
        Lag at which the correlation has fallen to 1/e [m].
    seed : int
        Seed of the coefficients.
    """

    def __init__(self, extent: tuple[float, float], *, rms: float, correlation_length: float, seed: int) -> None:
        self.extent = extent
        self.rms = rms
        self.correlation_length = correlation_length
        self.seed = seed

    @cached_property
    def _shape(self) -> tuple[int, int]:
        knot = self.correlation_length / KNOTS_PER_LENGTH
        return max(4, round(self.extent[0] / knot)), max(4, round(self.extent[1] / knot))

    @cached_property
    def _coefficients(self) -> FloatArray:
        from scipy.ndimage import convolve1d, gaussian_filter

        noise = np.random.default_rng(self.seed).standard_normal(self._shape)
        # Noise smoothed with the spread s has the correlation exp(-(d / 2s)^2); the spline adds 1/3 knot^2.
        spread = np.sqrt((KNOTS_PER_LENGTH / 2) ** 2 - 1 / 3)
        smooth = gaussian_filter(noise, spread, mode="wrap")
        at_knots = smooth
        for axis in (0, 1):
            at_knots = convolve1d(at_knots, [1 / 6, 4 / 6, 1 / 6], axis=axis, mode="wrap")
        return np.asarray((smooth - at_knots.mean()) * (self.rms / at_knots.std()))

    def _cells(self, q: FloatArray, axis: int) -> tuple[NDArray[np.int64], FloatArray]:
        place = np.asarray(q, dtype=np.float64)[:, axis] * (self._shape[axis] / self.extent[axis])
        floor = np.floor(place)
        return floor.astype(np.int64), place - floor

    def with_gradient(self, q: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the value (n,) and its exact derivatives along both coordinates (n, 2) [unit / m]."""
        (i, s), (j, t) = self._cells(q, 0), self._cells(q, 1)
        (wi, di), (wj, dj) = (_weights(s), _weights_slope(s)), (_weights(t), _weights_slope(t))
        columns = [(j + b - 1) % self._shape[1] for b in range(4)]
        value, gradient = np.zeros(len(q)), np.zeros((len(q), 2))
        for a in range(4):
            start = (i + a - 1) % self._shape[0] * self._shape[1]
            row, row_slope = np.zeros(len(q)), np.zeros(len(q))
            for b in range(4):
                knot = self._coefficients.ravel()[start + columns[b]]
                row += wj[b] * knot
                row_slope += dj[b] * knot
            value += wi[a] * row
            gradient[:, 0] += di[a] * row
            gradient[:, 1] += wi[a] * row_slope
        return value, gradient * (np.array(self._shape) / np.array(self.extent))

    def __call__(self, q: FloatArray) -> FloatArray:
        """Return the value at the places `q` (n, 2) [m], shape (n,)."""
        return self.with_gradient(q)[0]

    def gradient(self, q: FloatArray) -> FloatArray:
        """Return the derivatives at `q`, shape (n, 2) [unit / m]."""
        return self.with_gradient(q)[1]


_Four = tuple[FloatArray, FloatArray, FloatArray, FloatArray]


def _weights(s: FloatArray) -> _Four:
    """Uniform cubic B-spline at s in [0, 1) for the four knots around."""
    r = 1 - s
    return r * r * r / 6, (3 * s - 6) * s * s / 6 + 2 / 3, (3 * r - 6) * r * r / 6 + 2 / 3, s * s * s / 6


def _weights_slope(s: FloatArray) -> _Four:
    """Derivative of `_weights`, per knot."""
    r = 1 - s
    return -r * r / 2, (3 * s - 4) * s / 2, (4 - 3 * r) * r / 2, s * s / 2
