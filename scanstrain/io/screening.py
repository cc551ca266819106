# SPDX-License-Identifier: MIT
"""Which points of a file cannot be points of the scanned object.

Four rules, each counted and told; nothing else is ever dropped:

1. *no value*: a coordinate is NaN or infinite, or holds the raw integer -2^31 that LAS writers leave for such values;
2. *withheld*: the file itself flags the point as not to be used (LAS withheld bit);
3. *no return*: the coordinates are exactly (0, 0, 0) ten times or more; scanners export lost pulses so, and a
   surface does not give the same point ten times;
4. *stray*: the point lies farther than 1 km **and** farther than 20 diagonals from the box that holds the middle
   98 % of the scan along every axis. Terrestrial scanners reach about a kilometre, so a single set-up cannot make
   such a point, while a long tunnel, seen thinly at its far end, stays well inside.

Where more than half of the points would go, the file is refused: then the file is at fault and not some points.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

ZERO_RETURNS = 10
STRAY_DISTANCE = 1000.0  # metre
STRAY_DIAGONALS = 20.0
TRIMMED_SHARE = 0.01
SAMPLE = 200_000
"""Points from which the middle of the scan is found, taken at a fixed stride."""


@dataclass(frozen=True, slots=True)
class Screening:
    """Points to keep, and sentences about the others."""

    kept: NDArray[np.bool_]
    notices: tuple[str, ...]

    @property
    def dropped(self) -> int:
        """How many points do not serve."""
        return int(len(self.kept) - np.count_nonzero(self.kept))


def screen(
    coordinates: FloatArray,
    *,
    without_value: NDArray[np.bool_] | None = None,
    withheld: NDArray[np.bool_] | None = None,
) -> Screening:
    """Apply the four rules of this module.

    Parameters
    ----------
    coordinates : ndarray of shape (n, 3)
        File coordinates [m].
    without_value, withheld : ndarray of shape (n,), bool, optional
        What the file format itself says about points.
    """
    kept: NDArray[np.bool_] = np.asarray(np.isfinite(coordinates).all(axis=1))
    if without_value is not None:
        kept &= ~without_value
    counts = {"have no coordinates": len(kept) - np.count_nonzero(kept)}
    if withheld is not None and withheld.any():
        counts["are flagged as withheld"] = np.count_nonzero(kept & withheld)
        kept &= ~withheld
    zero = kept & (coordinates == 0.0).all(axis=1)
    if np.count_nonzero(zero) >= ZERO_RETURNS:
        counts["stand at exactly (0, 0, 0) and are lost pulses"] = np.count_nonzero(zero)
        kept &= ~zero
    stray = _strays(coordinates, kept)
    counts["are strays, more than 1 km and 20 diagonals away from the rest"] = np.count_nonzero(stray)
    kept &= ~stray
    notices = tuple(f"{count} points {what}: dropped" for what, count in counts.items() if count)
    return Screening(kept, notices)


def _strays(coordinates: FloatArray, kept: NDArray[np.bool_]) -> NDArray[np.bool_]:
    stray = np.zeros(len(kept), bool)
    sample = coordinates[:: max(len(kept) // SAMPLE, 1)][kept[:: max(len(kept) // SAMPLE, 1)]]
    if len(sample) < 3:
        return stray
    # order statistics without interpolation: one far value among a hundred must not pull the box towards itself
    trimmed = max(int(np.ceil(TRIMMED_SHARE * len(sample))), 1)
    order = np.partition(sample, (trimmed, len(sample) - 1 - trimmed), axis=0)
    low, high = order[trimmed], order[-1 - trimmed]
    limit = max(STRAY_DISTANCE, STRAY_DIAGONALS * float(np.linalg.norm(high - low)))
    for axis in range(3):
        values = coordinates[:, axis]
        stray |= (values < low[axis] - limit) | (values > high[axis] + limit)
    return stray & kept
