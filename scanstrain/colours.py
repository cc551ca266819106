# SPDX-License-Identifier: MIT
"""Intensity and colour taken together as one texture: the combination that stands out most from its own noise.

Neighbouring points show the same surface, so what differs between them is noise, and what varies beyond it is texture.
The combination of channels with the largest ratio of the two is the first of the minimum/maximum autocorrelation
factors (Switzer & Green 1984). It is the same for both epochs, and its local gain and offset stay free in the fit.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch

FloatArray = NDArray[np.float64]

SAMPLE = 40_000
"""Points of each epoch whose neighbours are looked up: covariances of four channels need no more."""
WORTH_IT = 1.2
"""Ratio of texture to noise, over that of intensity alone, from which colour is worth the change."""
RIDGE = 1e-6
"""Of the noise covariance, relative to its mean variance: grey images carry the same thrice."""
CHANNELS = ("intensity", "red", "green", "blue")


def with_colour(reference: Epoch, current: Epoch) -> tuple[Epoch, Epoch, tuple[str, ...]]:
    """Put the best combination of intensity and colour in the place of intensity, where both epochs have colour.

    Parameters
    ----------
    reference, current : Epoch
        Both epochs.

    Returns
    -------
    reference, current : Epoch
        With another `intensity`, or as they were where colour adds little or one of them has none.
    notices : tuple of str
        What was done; empty where nothing was.
    """
    pair = (reference, current)
    if any(epoch.colour is None for epoch in pair):
        return reference, current, ()
    given = all(epoch.intensity is not None for epoch in pair)
    channels = [_channels(epoch, given) for epoch in pair]
    if any(each is None for each in channels):
        return reference, current, ()
    known = [each for each in channels if each is not None]
    total, noise = (sum(parts) for parts in zip(*map(_covariances, pair, known), strict=True))
    weights, ratio = _best(np.asarray(total), np.asarray(noise))
    alone = total[0, 0] / max(noise[0, 0], 1e-300) if given else 1.0
    if not ratio - 1.0 > WORTH_IT * max(alone - 1.0, 0.0):
        return reference, current, ()
    names = CHANNELS if given else CHANNELS[1:]
    share = np.abs(weights) / np.abs(weights).sum()
    parts = ", ".join(f"{name} {100 * part:.0f} %" for name, part in zip(names, share, strict=True))
    notice = (
        f"Texture is taken from intensity and colour together ({parts})."
        if given
        else (f"There is no intensity in both scans; texture is taken from colour ({parts}).")
    )
    first, second = (
        replace(epoch, intensity=np.asarray(values @ weights, np.float32))
        for epoch, values in zip(pair, known, strict=True)
    )
    return first, second, (notice,)


def _channels(epoch: Epoch, with_intensity: bool) -> FloatArray | None:
    """Channels of an epoch (n, c) about their medians in units of their spread; None where one does not vary."""
    columns = [epoch.intensity] if with_intensity else []
    columns += list(np.asarray(epoch.colour).T)
    out = np.stack([np.asarray(column, np.float64) for column in columns], axis=1)
    low, middle, high = np.percentile(out, [16, 50, 84], axis=0)
    if not np.isfinite(out).all() or not (high > low).all():
        return None
    return np.asarray((out - middle) / (0.5 * (high - low)))


def _covariances(epoch: Epoch, values: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Covariance of the channels, and that of their noise from differences of nearest neighbours, each (c, c)."""
    from scipy.spatial import cKDTree

    chosen = np.random.default_rng(0).permutation(len(values))[:SAMPLE]
    _, near = cKDTree(epoch.points, balanced_tree=False).query(epoch.points[chosen], k=2)
    # Coincident points may name one another first; whichever of the two is not the point itself is a neighbour.
    other = np.where(near[:, 1] == chosen, near[:, 0], near[:, 1])
    difference = values[chosen] - values[other]
    # Echoes from edges and people would make covariances of their own.
    calm = (np.abs(difference) < 6.0 * 1.4826 * np.median(np.abs(difference), axis=0) + 1e-9).all(axis=1)
    apart = difference[calm]
    return np.atleast_2d(np.cov(values[chosen], rowvar=False)), apart.T @ apart / (2.0 * max(len(apart), 1))


def _best(total: FloatArray, noise: FloatArray) -> tuple[FloatArray, float]:
    """Weights of the largest ratio of total to noise variance, the first large one positive, and that ratio."""
    from scipy.linalg import eigh

    ridge = RIDGE * np.trace(noise) / len(noise) + 1e-12
    ratios, vectors = eigh(total, noise + ridge * np.eye(len(noise)))
    weights = vectors[:, -1]
    weights = weights * np.sign(weights[np.argmax(np.abs(weights))])
    # So that the combination has the spread of one of its channels.
    return weights / np.sqrt(weights @ total @ weights), float(ratios[-1])
