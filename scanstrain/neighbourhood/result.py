# SPDX-License-Identifier: MIT
"""What the neighbourhood stage hands on: one local affine map per gauge."""

from __future__ import annotations

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

PARAMETERS = (
    "u1", "u2", "un",
    "g11", "g12", "g21", "g22", "gn1", "gn2",
    "h11", "h12", "h22",
)  # fmt: skip
"""Order of the unknowns in `AffineField.covariance`: displacement, gradient row by row, second derivatives."""


class Status(IntEnum):
    """Why a place has no number; 0 is fine."""

    FINE = 0
    TOO_FEW_POINTS = 1
    NO_OVERLAP = 2
    EDGE = 3
    NOT_CONVERGED = 4
    JOINT = 5
    OUTSIDE = 6
    DEGENERATE = 7


STATUS_WORDS = {
    Status.FINE: "fine",
    Status.TOO_FEW_POINTS: "too few points in the patch",
    Status.NO_OVERLAP: "the current epoch does not show this place",
    Status.EDGE: "the patch is one-sided or has a gap: edge of the surface",
    Status.NOT_CONVERGED: "the local fit did not converge",
    Status.JOINT: "residuals exceed the noise: a joint, crack or arris crosses the patch",
    Status.OUTSIDE: "no valid gauge within half a gauge length",
    Status.DEGENERATE: "the points do not span a surface",
}


class Observed(IntEnum):
    """Bits of the `observed` attribute."""

    NORMAL = 1
    TILT = 2
    CURVATURE = 4
    DISPLACEMENT_U = 8
    DISPLACEMENT_V = 16
    STRAIN = 32
    SPIN = 64


@dataclass(frozen=True, slots=True)
class SharedNoise:
    """Noise that neighbouring points share.

    Parameters
    ----------
    share : float
        Its part of the noise variance of a single point [1]; 0 where none shows.
    length : float
        Lag at which its correlation is 1/e [m]; 0 where there is none.
    """

    share: float
    length: float


@dataclass(frozen=True, slots=True)
class Correlation:
    """What the scans themselves show of noise that neighbouring points share.

    Parameters
    ----------
    height, intensity : SharedNoise
        Of the two kinds of observations; intensity is None where it is not used.
    factor : tuple of float
        Typical factor that it puts on the standard error of each unknown, in the order of `PARAMETERS` [1].
    """

    height: SharedNoise
    intensity: SharedNoise | None
    factor: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class AffineField:
    """Local affine maps from the reference to the current surface, one per gauge.

    Every gauge has an orthonormal right-handed frame (a1, a2, n): two tangents and the unit normal towards the
    free side. A reference point at tangent coordinates (x1, x2) [m] from the gauge moved by, in that frame,
    `u_k + g_k1 x1 + g_k2 x2`, and its normal component also by `h11 x1^2/2 + h12 x1 x2 + h22 x2^2/2`.

    Parameters
    ----------
    position : ndarray of shape (g, 3)
        Gauge places on the reference surface, local coordinates [m].
    frame : ndarray of shape (g, 3, 3)
        Columns are a1, a2, n: `frame @ (c1, c2, cn)` is a vector in local axes.
    displacement : ndarray of shape (g, 3)
        (u1, u2, un) in the gauge frame [m].
    gradient : ndarray of shape (g, 3, 2)
        g[k, j] = change of component k per metre along tangent j [1].
    hessian : ndarray of shape (g, 3)
        (h11, h12, h22), second derivatives of the normal component [1/m].
    covariance : ndarray of shape (g, 12, 12)
        Of the unknowns in the order of `PARAMETERS`, from observations only, registration not included.
    shape : ndarray of shape (g, 3)
        (s11, s12, s22), second derivatives of the reference surface's own height over the tangent plane [1/m].
    observable : ndarray of shape (g, 12), bool
        Whether the data support each unknown. What is not observable holds NaN in the value arrays.
    status : ndarray of shape (g,), uint8
        A `Status` for each gauge; values are NaN where it is not 0.
    points : ndarray of shape (g,), int64
        Reference points behind the fit.
    residual_normal, residual_intensity : ndarray of shape (g,)
        Root mean square of standardised residuals of the two kinds of rows [1]; near 1 where the noise model holds.
    gauge_length, gauge_spacing : float
        Patch diameter and distance between gauges [m].
    warnings : tuple of str
        Sentences for the user.
    correlation : Correlation, optional
        Noise that neighbouring points share, counted in `covariance`; None where too few gauges tell.
    bias : ndarray of shape (g, 12), optional
        How far the unknowns are off because the motion varies within the gauge: estimate minus truth, in the order of
        `PARAMETERS`; 0 where no more shows than noise explains, NaN where the gauges around support no statement.
    gauge_lengths : ndarray of shape (g,), optional
        Patch diameter of each gauge where a ladder chose it [m]; None where all have `gauge_length`.
    gauge_length_reason : str
        Why `gauge_length` is what it is.
    """

    position: FloatArray
    frame: FloatArray
    displacement: FloatArray
    gradient: FloatArray
    hessian: FloatArray
    covariance: FloatArray
    shape: FloatArray
    observable: NDArray[np.bool_]
    status: NDArray[np.uint8]
    points: NDArray[np.int64]
    residual_normal: FloatArray
    residual_intensity: FloatArray
    gauge_length: float
    gauge_spacing: float
    warnings: tuple[str, ...] = ()
    correlation: Correlation | None = None
    bias: FloatArray | None = None
    gauge_lengths: FloatArray | None = None
    gauge_length_reason: str = "Set by the caller."

    def __len__(self) -> int:
        return len(self.position)
