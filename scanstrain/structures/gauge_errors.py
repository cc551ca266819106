# SPDX-License-Identifier: MIT
"""Standard errors of sums over gauges that overlap on a plane and share one registration error."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import sandwich
from scanstrain.structures.wall import Wall

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Datum = Callable[[FloatArray], FloatArray]

CORE = 0.55
"""Diameter of the disc whose mean is as uncertain as the displacement of a gauge, in gauge lengths. A fit of second
order to a full patch has at its middle the error of the mean over half that diameter (its kernel is 4 - 6 r^2/R^2 on
the patch); a little more where neighbouring points share noise. The correlation of two gauges is the overlap of their
discs."""


@dataclass(frozen=True, slots=True)
class GaugeErrors:
    """What the normal displacements of gauges on a wall have in common.

    Parameters
    ----------
    rows : ndarray of shape (g, 3)
        1, distance along the wall and height on it [m] of every gauge: what a rigid motion of the wall does.
    noise : sparse array of shape (g, g)
        Covariance without registration error [m^2].
    datum : ndarray of shape (3, 3)
        Covariance of the rigid motion that registration error looks like, in units of `rows`.
    """

    rows: FloatArray
    noise: Any
    datum: FloatArray

    def noise_of(self, weights: FloatArray) -> FloatArray:
        """Return the covariance (k, k) of sums with weights (k, g), without registration error."""
        return np.asarray(weights @ (self.noise @ weights.T))

    def of(self, weights: FloatArray) -> FloatArray:
        """Return the covariance (k, k) of sums with weights (k, g)."""
        return self.noise_of(weights) + sandwich(weights @ self.rows, self.datum)

    def only(self, some: BoolArray) -> GaugeErrors:
        """Return those of some gauges (g,)."""
        return GaugeErrors(self.rows[some], self.noise[some][:, some], self.datum)


def gauge_errors(
    along: FloatArray, height: FloatArray, sd: FloatArray, *, gauge_length: float, datum: FloatArray
) -> GaugeErrors:
    """Put the errors of gauges together.

    Parameters
    ----------
    along, height : ndarray of shape (g,)
        Places on the wall [m].
    sd : ndarray of shape (g,)
        Standard errors without registration error [m].
    gauge_length : float
        Diameter of the patch that a gauge averages over [m].
    datum : ndarray of shape (3, 3)
        As in `GaugeErrors`.

    Returns
    -------
    GaugeErrors
    """
    from scipy.sparse import csr_array
    from scipy.spatial import cKDTree

    place = np.stack([along, height], axis=1)
    i, j = cKDTree(place).query_pairs(CORE * gauge_length, output_type="ndarray").T
    distance = np.linalg.norm(place[i] - place[j], axis=1) / (CORE * gauge_length)
    shared = overlap(distance) * sd[i] * sd[j]
    every = np.arange(len(sd))
    values, at = np.r_[sd**2, shared, shared], (np.r_[every, i, j], np.r_[every, j, i])
    noise = csr_array((values, at), shape=(len(sd), len(sd)))
    return GaugeErrors(np.stack([np.ones(len(sd)), along, height], axis=1), noise, datum)


def overlap(distance: FloatArray) -> FloatArray:
    """Return the share of its area that a disc has in common with one at a distance (n,) in diameters.

    Examples
    --------
    >>> overlap(np.array([0.0, 0.5, 1.0])).round(4)
    array([1.   , 0.391, 0.   ])
    """
    q = np.clip(distance, 0.0, 1.0)
    return np.asarray(2 / np.pi * (np.arccos(q) - q * np.sqrt(1 - q**2)))


def datum_on(wall: Wall, datum: Datum | None) -> FloatArray:
    """Find the rigid motion of a wall that registration error looks like.

    Along the normal of a plane a rigid motion is linear in the two distances on it, so its variance is a polynomial of
    second order whose six coefficients are the covariance of that motion: read off at nine places, exactly.

    Parameters
    ----------
    wall : Wall
    datum : callable, optional
        From places (n, 3) to the covariance (n, 3, 3) of the displacement that registration error causes there [m^2].

    Returns
    -------
    ndarray of shape (3, 3)
        Covariance of (shift [m], yaw [rad], lean [rad]) at the lower left corner; zero without a datum.
    """
    if datum is None:
        return np.zeros((3, 3))
    x, y = (part.ravel() for part in np.meshgrid([-1.0, 0.0, 1.0], [-1.0, 0.0, 1.0]))
    at = wall.places((x + 1) * wall.length / 2, (y + 1) * wall.height / 2)
    variance = np.einsum("i,nij,j->n", wall.normal, datum(at), wall.normal)
    design = np.stack([np.ones(9), 2 * x, 2 * y, x**2, 2 * x * y, y**2], axis=1)
    c00, c01, c02, c11, c12, c22 = np.linalg.lstsq(design, variance, rcond=None)[0]
    size, turn = np.linalg.eigh(np.array([[c00, c01, c02], [c01, c11, c12], [c02, c12, c22]]))
    middle = sandwich(turn, np.diag(np.maximum(size, 0.0)))
    # from the middle of the face in half extents to its corner in metres
    to_corner = np.array([[1.0, -1.0, -1.0], [0.0, 2 / wall.length, 0.0], [0.0, 0.0, 2 / wall.height]])
    return sandwich(to_corner, middle)
