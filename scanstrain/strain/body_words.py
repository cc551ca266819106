# SPDX-License-Identifier: MIT
"""Words for the rigid motions of a body that nothing fixes."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FLAT = 0.95
"""Share of the normals' scatter in one direction above which a body is called a plane."""
PRISMATIC = 0.03
"""Share along a direction below which it is called an extrusion along that axis."""
WIDEST_GAP = 0.75 * np.pi
"""Opening angle between normals up to which an extrusion counts as a tunnel [rad]."""
PURE = 0.9
"""Cosine between a motion and the one that names it above which the name stands alone."""


def name_motions(weak: FloatArray, normals: FloatArray) -> list[tuple[str, FloatArray]]:
    """Name the motions of a subspace by the slides and turns that people use.

    The named motion that lies in the subspace best comes first and is taken out of it; then the next, until nothing is
    left. Eigenvectors alone would be arbitrary mixtures of slides and turns.

    Parameters
    ----------
    weak : ndarray of shape (6, k)
        Orthonormal basis in (rotation x arm, translation).
    normals : ndarray of shape (g, 3)
        Unit normals of the body towards its free side.

    Returns
    -------
    list of (str, ndarray of shape (6,))
        Words and unit vector of each; the vectors are orthonormal.
    """
    kind, axes = _shape(normals)
    candidates = [
        (words(axis, number, kind), np.r_[np.zeros(3), axis] if words is _slide else np.r_[axis, np.zeros(3)])
        for words in (_slide, _turn)
        for number, axis in enumerate(axes)
    ]
    named: list[tuple[str, FloatArray]] = []
    while weak.shape[1]:
        inside = [float(np.linalg.norm(weak.T @ vector)) for _, vector in candidates]
        # Rounded, so that the order of equals is that of the list.
        best = int(np.argmax(np.round(inside, 6)))
        words, vector = candidates[best]
        within = weak @ (weak.T @ vector) / inside[best]
        named.append((words if inside[best] > PURE else f"a mixed motion, mostly {words}", within))
        rest = weak - np.outer(within, within @ weak)
        weak = np.linalg.svd(rest, full_matrices=False)[0][:, : weak.shape[1] - 1]
    return named


def _shape(normals: FloatArray) -> tuple[str, FloatArray]:
    """Kind of body, and its axes (3, 3) row by row: normal last for a plane, along it last for an extrusion."""
    values, vectors = np.linalg.eigh(normals.T @ normals / len(normals))
    if values[2] > FLAT:
        return ("floor" if abs(vectors[2, 2]) > 0.8 else "wall"), _with_last(vectors[:, 2])
    if values[0] > PRISMATIC:
        return "body", np.eye(3)
    axis = vectors[:, 0]
    angles = np.sort(np.arctan2(normals @ vectors[:, 1], normals @ vectors[:, 2]))
    gap = float(np.diff(np.r_[angles, angles[0] + 2 * np.pi]).max())
    return ("tunnel" if gap < WIDEST_GAP else "extrusion"), _with_last(axis)


def _with_last(last: FloatArray) -> FloatArray:
    """Orthonormal axes, the first level where that is possible, each with its largest component positive."""
    level = np.array([1.0, 0.0, 0.0]) if abs(last[2]) > 0.8 else np.cross([0.0, 0.0, 1.0], last)
    first = level - last * (level @ last)
    first = first / np.linalg.norm(first)
    axes = np.stack([first, np.cross(last, first), last])
    return np.asarray(axes * np.sign(axes[np.arange(3), np.abs(axes).argmax(axis=1)])[:, None])


def _word(direction: FloatArray) -> str:
    axis = int(np.abs(direction).argmax())
    if abs(direction[axis]) > PURE:
        return "xyz"[axis]
    return "({:.2f}, {:.2f}, {:.2f})".format(*(direction + 0.0))


def _slide(direction: FloatArray, number: int, kind: str) -> str:
    if kind == "tunnel" and number == 2:
        return "slide along the tunnel axis"
    if kind in ("wall", "floor") and number < 2:
        return f"slide in the {kind}'s plane along {_word(direction)}"
    return f"slide along {_word(direction)}"


def _turn(direction: FloatArray, number: int, kind: str) -> str:
    if kind == "tunnel" and number == 2:
        return "roll about the tunnel axis"
    if kind in ("wall", "floor") and number == 2:
        return f"turn in the {kind}'s plane"
    return f"turn about {_word(direction)}"
