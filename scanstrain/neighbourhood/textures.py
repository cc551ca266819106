# SPDX-License-Identifier: MIT
"""Texture of both epochs on a common scale."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.intensity import Survey, comparable_setups, remove_offsets, survey, texture_of

FloatArray = NDArray[np.float64]
Pair = tuple[FloatArray | None, FloatArray | None]

FINE_CELLS = 2
"""Width of the voxels in which set-ups are compared, in cells."""


@dataclass(frozen=True, slots=True)
class Texture:
    """How the intensity of one epoch becomes texture.

    Parameters
    ----------
    known : Survey
    compared : ndarray of shape (k,)
        Set-ups that are compared with others.
    middle, spread : float
        Median of the texture and half the distance of its 16th and 84th percentiles: the scale that both epochs share.
    wide, fine : float
        As of `intensity.comparable_intensity` [m].
    """

    known: Survey
    compared: NDArray[np.uint16]
    middle: float
    spread: float
    wide: float
    fine: float

    def of(self, epoch: Epoch) -> FloatArray:
        """Texture of a piece of the epoch, shape (n,)."""
        out = texture_of(epoch, self.known, self.wide)
        remove_offsets(epoch, out, self.known, self.compared, self.wide, self.fine)
        return (out - self.middle) / self.spread


def measure_texture(
    pieces: Sequence[Epoch], known: Survey, wide: float, fine: float
) -> tuple[Texture, list[FloatArray]] | None:
    """Judge the texture of one epoch on pieces of it, and make theirs; None where it does not vary."""
    plain = [texture_of(piece, known, wide) for piece in pieces]
    compared = comparable_setups(pieces, plain, known, fine)
    for piece, values in zip(pieces, plain, strict=True):
        remove_offsets(piece, values, known, compared, wide, fine)
    low, middle, high = np.percentile(np.concatenate(plain), [16, 50, 84])
    if not high > low:
        return None
    found = Texture(known, compared, float(middle), 0.5 * float(high - low), wide, fine)
    return found, [(values - found.middle) / found.spread for values in plain]


def pair_of_textures(reference: Epoch, current: Epoch, gauge_length: float, width: float) -> Pair:
    """Texture of both epochs, brought to a common spread so that the local gain starts near 1."""
    out = []
    for epoch in (reference, current):
        known = survey(epoch.intensity, epoch.setup)
        found = known and measure_texture([epoch], known, gauge_length, FINE_CELLS * width)
        if not found:
            return None, None
        out.append(found[1][0])
    return out[0], out[1]
