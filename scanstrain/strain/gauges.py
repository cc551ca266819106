# SPDX-License-Identifier: MIT
"""The gauges that have a fit, prepared for the strain stage: plain arrays without NaN, masks beside them."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.result import PARAMETERS, AffineField, Observed, Status
from scanstrain.registration.result import Registration
from scanstrain.strain.uncertainty import registration_covariance

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

ALIGNED = 0.1
"""A gauge tangent whose cosine with a structure axis is below this (6 degrees) adds nothing to that component."""

DATUM_LIMIT = 0.01
"""A displacement [m], tilt or spin [rad] whose datum is less certain than this is not given: the registration left
that motion open, whatever the local fit saw."""

_OF_THE_DATUM = (Observed.NORMAL, Observed.TILT, Observed.SPIN)
"""What refers to the datum; strain and curvature do not."""

_NEEDS = {
    Observed.NORMAL: ("un",),
    Observed.TILT: ("gn1", "gn2"),
    Observed.CURVATURE: ("h11", "h12", "h22"),
    Observed.STRAIN: ("g11", "g12", "g21", "g22", "gn1", "gn2"),
    Observed.SPIN: ("g12", "g21"),
}


@dataclass(frozen=True, slots=True)
class Gauges:
    """Fitted gauges only.

    Parameters
    ----------
    fine : ndarray of shape (all gauges,), bool
        Which gauges of the field these are.
    position, frame, shape : ndarray
        As in `AffineField`.
    parameters : ndarray of shape (g, 12)
        Unknowns in the order of `PARAMETERS`, zero where not observable.
    observable : ndarray of shape (g, 12), bool
        By the local fit.
    anchored : ndarray of shape (g, 12), bool
        Of these, the ones whose datum is known well enough to state a motion.
    covariance : ndarray of shape (g, 12, 12)
        From observations; rows and columns of what is not observable are zero.
    datum_covariance : ndarray of shape (g, 12, 12)
        The same with the error of the registration added.
    bias : ndarray of shape (g, 12)
        How far the unknowns are off because the motion varies within a gauge; NaN where not known.
    """

    fine: BoolArray
    position: FloatArray
    frame: FloatArray
    shape: FloatArray
    parameters: FloatArray
    observable: BoolArray
    anchored: BoolArray
    covariance: FloatArray
    datum_covariance: FloatArray
    bias: FloatArray

    def __len__(self) -> int:
        return len(self.position)

    @property
    def displacement(self) -> FloatArray:
        """(u1, u2, un), shape (g, 3) [m]."""
        return self.parameters[:, :3]

    @property
    def has_displacement(self) -> BoolArray:
        """Whether the whole displacement vector is observable."""
        return np.asarray(self.anchored[:, :3].all(axis=1))

    def has(self, what: Observed) -> BoolArray:
        """Whether each gauge observes `what` (not for the displacements along u and v, which need axes)."""
        known = self.anchored if what in _OF_THE_DATUM else self.observable
        return np.asarray(known[:, [PARAMETERS.index(name) for name in _NEEDS[what]]].all(axis=1))

    def observed_bits(self, axes: FloatArray) -> NDArray[np.uint8]:
        """Bits of `Observed`; displacement along u or v needs the tangents that are not square to that axis."""
        bits = np.zeros(len(self), dtype=np.uint8)
        for what in _NEEDS:
            bits |= np.where(self.has(what), np.uint8(what), np.uint8(0))
        for column, what in enumerate((Observed.DISPLACEMENT_U, Observed.DISPLACEMENT_V)):
            share = np.abs(np.einsum("gik,gi->gk", self.frame[:, :, :2], axes[:, :, column]))
            seen = ((share < ALIGNED) | self.anchored[:, :2]).all(axis=1)
            bits |= np.where(seen, np.uint8(what), np.uint8(0))
        return bits

    def scatter(self, values: NDArray[np.generic], fill: float) -> NDArray[np.generic]:
        """Put one row a fitted gauge back among all gauges."""
        out = np.full((len(self.fine), *values.shape[1:]), fill, dtype=values.dtype)
        out[self.fine] = values
        return out


def fitted_gauges(field: AffineField, registration: Registration | None) -> Gauges:
    """Take the fitted gauges out of an affine field.

    Raises
    ------
    OptionError
        If the covariance of the registration is not finite.
    """
    fine = np.asarray(field.status) == Status.FINE
    position, frame = field.position[fine], field.frame[fine]
    parameters = np.concatenate(
        [field.displacement[fine], field.gradient[fine].reshape(-1, 6), field.hessian[fine]], axis=1
    )
    observable = field.observable[fine] & np.isfinite(parameters)
    seen = observable[:, :, None] & observable[:, None, :]
    covariance = np.where(seen, field.covariance[fine], 0.0)
    datum, anchored = covariance, observable
    if registration is not None:
        if not np.isfinite(registration.covariance).all():
            raise OptionError(
                explain("registration", "a finite covariance", "NaN or infinity", "register again, or leave it out")
            )
        error = registration_covariance(position, frame, registration)
        datum = covariance + np.where(seen, error, 0.0)
        anchored = observable & (np.sqrt(np.einsum("gii->gi", error)) <= DATUM_LIMIT)
    return Gauges(
        fine=fine,
        position=position,
        frame=frame,
        shape=field.shape[fine],
        parameters=np.where(observable, parameters, 0.0),
        observable=observable,
        anchored=anchored,
        covariance=covariance,
        datum_covariance=datum,
        bias=np.full(parameters.shape, np.nan) if field.bias is None else field.bias[fine],
    )
