# SPDX-License-Identifier: MIT
"""Set-ups of one epoch brought together: a least-squares network over the seams between them."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.linalg import cross_matrix, rotation_matrix
from scanstrain.registration.seams import Seam

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class SetupCorrection:
    """How one set-up moves to agree with the others.

    Parameters
    ----------
    number : int
        Of the set-up.
    points : int
    rotation, translation : ndarray of shape (3,)
        Rotation vector [rad] and translation [m] at the pivot; zero where the set-up is held.
    pivot : ndarray of shape (3,)
        Local coordinates, the same for all set-ups [m].
    covariance : ndarray of shape (6, 6)
        Of (rotation, translation), relative to the set-up that is held.
    held_by : int
        Number of the set-up that this one is related to; its own where it is held itself or has no seam.
    """

    number: int
    points: int
    rotation: FloatArray
    translation: FloatArray
    pivot: FloatArray
    covariance: FloatArray
    held_by: int


def setup_corrections(epoch: Epoch, seams: tuple[Seam, ...]) -> tuple[SetupCorrection, ...]:
    """Adjust a network of set-ups to the seams between them.

    Minimises the sum over all seams of `d' S^-1 d`, where d is the seam minus what the corrections of its two set-ups
    make of it and S its covariance. To first order, which for seams of millimetres and milliradians is exact to some
    micrometre. Along a weak direction a seam is zero with the standard error of the capture range, so that a motion
    that no seam shows stays zero and one that another seam shows is free to follow. Of set-ups that are joined by
    seams the one with most points is held.

    Parameters
    ----------
    epoch : Epoch
    seams : tuple of Seam
        As `find_seams` gives them for this epoch.

    Returns
    -------
    tuple of SetupCorrection
        One for each set-up, in the order of their numbers.

    Raises
    ------
    OptionError
        The epoch has no set-up numbers, or a seam names one that it does not have.
    """
    if epoch.setup is None:
        raise OptionError(explain("set-ups", "an epoch with set-up numbers", "none", "leave align_setups out"))
    numbers, counts = np.unique(epoch.setup, return_counts=True)
    index = {int(number): k for k, number in enumerate(numbers)}
    used = [seam for seam in seams if seam.compared]
    strange = {number for seam in used for number in (seam.first, seam.second)} - set(index)
    if strange:
        raise OptionError(
            explain("set-ups", "seams of this epoch", f"set-ups {sorted(strange)}", "find the seams of this epoch")
        )
    pivot = epoch.points.mean(axis=0)
    held = _held(len(numbers), counts, [(index[seam.first], index[seam.second]) for seam in used])
    N, right = _normal_equations(used, index, pivot)
    free = np.repeat(held != np.arange(len(numbers)), 6)
    covariance, solved = np.zeros_like(N), np.zeros(len(N))
    if free.any():
        covariance[np.ix_(free, free)] = np.linalg.inv(N[np.ix_(free, free)])
        solved[free] = covariance[np.ix_(free, free)] @ right[free]
    return tuple(
        SetupCorrection(
            number=int(number),
            points=int(counts[k]),
            rotation=solved[6 * k : 6 * k + 3],
            translation=solved[6 * k + 3 : 6 * k + 6],
            pivot=pivot,
            covariance=covariance[6 * k : 6 * k + 6, 6 * k : 6 * k + 6],
            held_by=int(numbers[held[k]]),
        )
        for k, number in enumerate(numbers)
    )


def _held(count: int, points: NDArray[np.int64], pairs: list[tuple[int, int]]) -> NDArray[np.int64]:
    """For every set-up the largest of those that it is joined with, directly or through others."""
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    first, second = np.array(pairs, np.int64).reshape(-1, 2).T
    graph = coo_array((np.ones(len(first)), (first, second)), shape=(count, count))
    _, group = connected_components(graph, directed=False)
    largest = {int(g): int(np.flatnonzero(group == g)[points[group == g].argmax()]) for g in np.unique(group)}
    return np.array([largest[int(g)] for g in group])


def _normal_equations(seams: list[Seam], index: dict[int, int], pivot: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Normal matrix and right side of all corrections, rotations first, at the common pivot."""
    size = 6 * len(index)
    N, right = np.zeros((size, size)), np.zeros(size)
    for seam in seams:
        B = np.eye(6)
        B[3:, :3] = -cross_matrix(pivot - seam.pivot)
        information = np.linalg.inv(B @ seam.covariance @ B.T)
        seen = information @ B @ np.r_[seam.rotation, seam.translation]
        # A seam takes the second set-up to the first: correction of the second minus that of the first.
        a, b = (slice(6 * index[number], 6 * index[number] + 6) for number in (seam.first, seam.second))
        N[a, a] += information
        N[b, b] += information
        N[a, b] -= information
        N[b, a] -= information
        right[a] -= seen
        right[b] += seen
    return N, right


def align_setups(epoch: Epoch, seams: tuple[Seam, ...]) -> Epoch:
    """Move the set-ups of an epoch so that their seams close as well as they can.

    Parameters
    ----------
    epoch : Epoch
    seams : tuple of Seam
        As `find_seams` gives them for this epoch.

    Returns
    -------
    Epoch
        The same points with corrected coordinates.

    Raises
    ------
    OptionError
        The epoch has no set-up numbers, or a seam names one that it does not have.
    """
    points = epoch.points.copy()
    for each in setup_corrections(epoch, seams):
        if each.held_by != each.number:
            rows = epoch.setup == each.number
            R = rotation_matrix(each.rotation)
            points[rows] = (points[rows] - each.pivot) @ R.T + each.pivot + each.translation
    return replace(epoch, points=points)
