# SPDX-License-Identifier: MIT
"""What intensity fixed: its part of the covariance, and words."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.covariance import full_covariance
from scanstrain.registration.match import Metric, Rows
from scanstrain.registration.result import WeakDirection
from scanstrain.registration.texture_fit import Texture
from scanstrain.registration.weak import name_directions, reach

FloatArray = NDArray[np.float64]


def with_texture(
    texture: Texture, solved: FloatArray, strong: FloatArray, weak: FloatArray, held: FloatArray
) -> FloatArray:
    """Put the 6x6 covariance together where intensity fixed some motions.

    The noise of range and that of intensity are independent, and an open motion does not change how the surfaces fit.
    So the strong motions have the covariance of the surfaces; the fixed ones have that of the intensity and answer to
    every error of the strong ones (Schur complement of the lower triangular system).

    Parameters
    ----------
    texture : Texture
    solved : ndarray of shape (r, r)
        Covariance in the strong directions [m^2].
    strong, weak : ndarray of shape (6, r), (6, k)
        Orthonormal bases of what the surfaces fix and of what stays held.
    held : ndarray of shape (k, k)
        Covariance of the start in the weak directions [m^2].

    Returns
    -------
    ndarray of shape (6, 6)
        In metric unknowns [m^2].
    """
    dragged = texture.follow(strong)
    return np.asarray(
        full_covariance(solved, dragged, weak, held) + texture.fixed @ texture.covariance() @ texture.fixed.T
    )


def name_textured(
    texture: Texture, rows: Rows, used: NDArray[np.bool_], metric: Metric
) -> tuple[tuple[WeakDirection, ...], tuple[WeakDirection, ...]]:
    """Name the motions that intensity fixed, and those along which its pattern repeats.

    Parameters
    ----------
    texture : Texture
    rows : Rows
    used : ndarray of shape (m,), bool
        Rows on stable ground.
    metric : Metric
    """
    sd = reach(texture.fixed, rows.place[used], metric) * np.sqrt(np.diag(texture.covariance()))
    repeating = texture.repeating
    return (
        name_directions(texture.fixed, rows, used, sd),
        name_directions(repeating, rows, used, np.full(repeating.shape[1], np.nan)),
    )


def texture_words(fixed: tuple[WeakDirection, ...], repeating: tuple[WeakDirection, ...]) -> list[str]:
    """Say what intensity fixed and what it could not, in sentences."""
    said = []
    if fixed:
        names = "; ".join(f"{each.description} (to {each.sd * 1e3:.2f} mm)" for each in fixed)
        said.append(f"returned intensity, not the surfaces, fixes these motions: {names}")
    if repeating:
        names = "; ".join(each.description for each in repeating)
        said.append(
            "the pattern of returned intensity agrees at more than one place within the capture range, so it was not "
            f"used for these motions: {names}"
        )
    return said
