# SPDX-License-Identifier: MIT
"""What the blur of a gauge adds to the error of its values.

The bias of the unknowns is estimated by the neighbourhood stage. Its square is added to their covariance wherever an
interval or a detection limit is stated (structure after Lague, Brodu & Leroux 2013, with a bias term); tests of
"nothing changed here" leave it out, since where nothing changes there is none.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import tensor_2d
from scanstrain.neighbourhood.result import PARAMETERS, Observed
from scanstrain.strain.gauges import Gauges
from scanstrain.strain.surface import principal

FloatArray = NDArray[np.float64]

_N, _G11, _G12, _G21, _G22, _GN1, _GN2, _H11, _H12, _H22 = (
    PARAMETERS.index(name) for name in ("un", "g11", "g12", "g21", "g22", "gn1", "gn2", "h11", "h12", "h22")
)


def widened(gauges: Gauges) -> Gauges:
    """Return the gauges with the square of their bias in both covariances; an unknown bias adds nothing."""
    bias = np.where(np.isfinite(gauges.bias) & gauges.observable, gauges.bias, 0.0)
    square = bias[:, :, None] * bias[:, None, :]
    return replace(gauges, covariance=gauges.covariance + square, datum_covariance=gauges.datum_covariance + square)


def bias_sizes(gauges: Gauges) -> dict[str, FloatArray]:
    """Size of the bias for each quantity that has a detection limit.

    Strain and curvature: along the direction in which it is largest; tilt: its length. First order in the motion,
    which is enough for an error.

    Returns
    -------
    dict of str to ndarray of shape (g,)
        disp_n [m], tilt and spin [rad], strain [1], curvature [1/m]; NaN where the quantity is not observable or the
        gauges around do not tell.
    """
    b = gauges.bias
    strain = np.stack([b[:, _G11], b[:, _G22], 0.5 * (b[:, _G12] + b[:, _G21])], axis=1)
    found = {
        "disp_n": (Observed.NORMAL, np.abs(b[:, _N])),
        "tilt": (Observed.TILT, np.hypot(b[:, _GN1], b[:, _GN2])),
        "spin": (Observed.SPIN, 0.5 * np.abs(b[:, _G21] - b[:, _G12])),
        "strain": (Observed.STRAIN, _largest(strain)),
        "curvature": (Observed.CURVATURE, _largest(b[:, [_H11, _H22, _H12]])),
    }
    return {name: np.where(gauges.has(what), size, np.nan) for name, (what, size) in found.items()}


def _largest(components: FloatArray) -> FloatArray:
    """Largest absolute principal value of symmetric tensors given as (11, 22, 12)."""
    larger, smaller = principal(tensor_2d(components))
    return np.maximum(np.abs(larger), np.abs(smaller))
