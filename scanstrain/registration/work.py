# SPDX-License-Identifier: MIT
"""What the steps of one registration pass on to one another."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.fit import Fit
from scanstrain.registration.match import Metric
from scanstrain.registration.rigid import inverse
from scanstrain.registration.stable import Ground
from scanstrain.registration.surfaces import Surface
from scanstrain.registration.texture_fit import Texture

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(slots=True)
class Work:
    """State between the steps.

    Parameters
    ----------
    reference, current : Surface
        Finest level of both epochs.
    fit : Fit
        The latest fit.
    T, T_start : ndarray of shape (4, 4)
        Local current to local reference coordinates: now, and where the fine fit began.
    metric : Metric
        Pivot and arm of the unknowns.
    patch : ndarray of shape (b,), int64
        Patch of every reference block, of `patches` in all.
    keep : ndarray of shape (b,), bool, or None
        Stable reference blocks; None for all.
    ground : Ground or None
        Groups of patches that share one motion, found at the start.
    strong, weak : ndarray of shape (6, r), (6, k)
        Motions that are solved for, and held.
    scale_known : bool
        Whether the surfaces fix a scale.
    budget : float
        Largest standard error of a motion that counts as fixed, at the place moved most [m].
    texture : Texture or None
        What intensity says about motions that the surfaces leave open.
    """

    reference: Surface
    current: Surface
    fit: Fit
    T: FloatArray
    T_start: FloatArray
    metric: Metric
    patch: IntArray
    patches: int
    keep: BoolArray | None = None
    ground: Ground | None = None
    strong: FloatArray = field(default_factory=lambda: np.eye(6))
    weak: FloatArray = field(default_factory=lambda: np.empty((6, 0)))
    scale_known: bool = False
    budget: float = np.inf
    texture: Texture | None = None
    iterations: int = 0

    @property
    def pose(self) -> FloatArray:
        """Present pose of the current surface's grid frame."""
        return self.T @ inverse(self.current.T_grid_epoch)

    def take(self, fit: Fit) -> None:
        """Accept a fit of the present current surface."""
        self.fit = fit
        self.iterations += fit.iterations
        self.T = fit.T_ref_grid @ self.current.T_grid_epoch
