# SPDX-License-Identifier: MIT
"""Rigid motions that the surfaces do not fix: found by eigenvalues in metric terms, and named in words."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.match import Metric, Rows
from scanstrain.registration.result import WeakDirection

FloatArray = NDArray[np.float64]

MIN_RELIABILITY = 0.7
"""Least share of a direction's information that both epochs agree on: below it too much is noise of the normals."""
FLAT = 0.95
"""Share of the normals' scatter in one direction above which the surface is called a plane."""
PRISMATIC = 0.03
"""Share of the normals' scatter along a direction below which the surface is called an extrusion along it."""
WIDEST_GAP = 0.75 * np.pi
"""Opening angle up to which a surface around an axis counts as a tunnel: a hidden floor, not a missing half."""
TRANSLATION = 0.2
"""Rotational part of a unit weak motion (in metres at the farthest point) below which it is called a slide."""


def reach(vectors: FloatArray, places: FloatArray, metric: Metric) -> FloatArray:
    """Return how far unit motions move the place that they move most.

    Parameters
    ----------
    vectors : ndarray of shape (6, k)
        Motions in (rotation x arm, translation) [m], one a column.
    places : ndarray of shape (m, 3)
        Used places [m].
    metric : Metric

    Returns
    -------
    ndarray of shape (k,)
        Largest displacement per metre of the motion [1].
    """
    arm = (places - metric.pivot) / metric.arm
    moved = np.cross(vectors[:3].T[:, None, :], arm[None]) + vectors[3:].T[:, None, :]
    return np.asarray(np.linalg.norm(moved, axis=2).max(axis=1))


def split(
    information: FloatArray,
    shared: FloatArray,
    *,
    variance: float,
    places: FloatArray,
    metric: Metric,
    budget: float,
) -> tuple[FloatArray, FloatArray]:
    """Split the six motions into those that the data fix and those that they do not.

    The information sum w a a' of noisy normals is too large, by the noise, along every motion that slides a surface
    in itself: a straight smooth tunnel then seems to fix its own roll (the effect is described by Hatleskog & Alexis
    2024). Here it is measured instead of modelled: with n and m the two epochs' own normals at a match,
    sum w sym(a(n) a(m)') has the noise of neither, as the two are independent. A direction is weak where that shared
    part is less than 70 % of the information, or where the standard error at the place moved most exceeds the budget.

    Parameters
    ----------
    information, shared : ndarray of shape (6, 6)
        Sums over the used rows in metric unknowns [1/m^2], with all of the normals and with what they share.
    variance : float
        Variance of unit weight [1].
    places : ndarray of shape (m, 3)
        Used places [m].
    metric : Metric
    budget : float
        Largest standard error at the place moved most [m].

    Returns
    -------
    strong : ndarray of shape (6, r)
        Orthonormal columns in metric unknowns.
    weak : ndarray of shape (6, 6 - r)
        The orthogonal complement.
    """
    values, vectors = np.linalg.eigh((shared + shared.T) / 2)
    total = np.einsum("ik,ij,jk->k", vectors, information, vectors)
    positive = values > 1e-14 * max(values[-1], 0.0)
    sd = np.sqrt(variance / np.where(positive, values, np.inf)) * reach(vectors, places, metric)
    strong = positive & (values > MIN_RELIABILITY * total) & (sd <= budget)
    return np.ascontiguousarray(vectors[:, strong]), np.ascontiguousarray(vectors[:, ~strong])


def complement(weak: FloatArray) -> FloatArray:
    """Return an orthonormal basis of what an orthonormal basis (6, k) leaves over, shape (6, 6 - k)."""
    return np.ascontiguousarray(np.linalg.svd(weak)[0][:, weak.shape[1] :])


def _word(vector: FloatArray) -> str:
    """Name a direction by the file axis it follows, or by its components."""
    axis = int(np.abs(vector).argmax())
    if abs(vector[axis]) > 0.9:
        return "xyz"[axis]
    return "({:.2f}, {:.2f}, {:.2f})".format(*(vector + 0.0))


def _surface_kind(normals: FloatArray, places: FloatArray) -> tuple[str, FloatArray]:
    """Say what the used surface resembles, and its axis or normal: 'wall', 'floor', 'tunnel', 'extrusion', 'body'."""
    values, vectors = np.linalg.eigh(normals.T @ normals / len(normals))
    if values[2] > FLAT:
        normal = vectors[:, 2]
        return ("floor" if abs(normal[2]) > 0.8 else "wall"), normal
    axis = vectors[:, 0]
    if values[0] > PRISMATIC:
        return "body", axis
    return ("tunnel" if _surrounds(normals, places, axis) else "extrusion"), axis


def _surrounds(normals: FloatArray, places: FloatArray, axis: FloatArray) -> bool:
    """Whether a surface along `axis` closes more than half a turn around the place where its normals meet."""
    flat = np.eye(3) - np.outer(axis, axis)
    n = normals @ flat
    n = n / np.maximum(np.linalg.norm(n, axis=1, keepdims=True), 1e-12)
    P = np.eye(3)[None] - n[:, :, None] * n[:, None, :]
    A = P.sum(axis=0) + np.outer(axis, axis)
    centre = np.linalg.solve(A, np.einsum("mij,mj->i", P, places @ flat))
    u = np.linalg.svd(flat)[0][:, :2]
    across = (places - centre) @ u
    angles = np.sort(np.arctan2(across[:, 1], across[:, 0]))
    gap = np.diff(np.r_[angles, angles[0] + 2 * np.pi]).max()
    return bool(gap < WIDEST_GAP)


def _slides(basis: FloatArray) -> FloatArray:
    """Turn an orthonormal basis of weak translations (3, k) to the directions that people use."""
    if basis.shape[1] == 3:
        return np.eye(3)
    if basis.shape[1] == 1:
        v = basis[:, 0]
        return np.asarray((v * np.sign(v[np.abs(v).argmax()]))[:, None])
    normal = np.cross(basis[:, 0], basis[:, 1])
    level = np.array([1.0, 0.0, 0.0]) if abs(normal[2]) > 0.8 else np.cross([0.0, 0.0, 1.0], normal)
    first = level - normal * (level @ normal)
    first = first / np.linalg.norm(first)
    first = first * np.sign(first[np.abs(first).argmax()])
    second = np.cross(normal, first)
    return np.stack([first, second * np.sign(second[np.abs(second).argmax()])], axis=1)


def _slide_words(direction: FloatArray, kind: str, axis: FloatArray) -> str:
    if kind == "tunnel" and abs(direction @ axis) > 0.9:
        return "slide along the tunnel axis"
    if kind in ("wall", "floor") and abs(direction @ axis) < 0.3:
        return f"slide in the {kind}'s plane along {_word(direction)}"
    return f"slide along {_word(direction)}"


def _turn_words(direction: FloatArray, kind: str, axis: FloatArray) -> str:
    if kind == "tunnel" and abs(direction @ axis) > 0.9:
        return "roll about the tunnel axis"
    if kind in ("wall", "floor") and abs(direction @ axis) > 0.9:
        return f"turn in the {kind}'s plane"
    return f"turn about {_word(direction)}"


def name_directions(
    directions: FloatArray, rows: Rows, used: NDArray[np.bool_], sd: FloatArray
) -> tuple[WeakDirection, ...]:
    """Name weak motions in words.

    Parameters
    ----------
    directions : ndarray of shape (6, k)
        As `separate` gives them, in metric unknowns.
    rows : Rows
    used : ndarray of shape (m,), bool
        Rows on stable ground.
    sd : ndarray of shape (k,)
        Standard error that is claimed for each at the place that it moves most [m].

    Returns
    -------
    tuple of WeakDirection
    """
    if not directions.shape[1]:
        return ()
    kind, axis = _surface_kind(rows.normal[used], rows.place[used])
    named = []
    for vector, error in zip(directions.T, sd, strict=True):
        turning, sliding = np.linalg.norm(vector[:3]), np.linalg.norm(vector[3:])
        slide = turning < TRANSLATION
        part = vector[3:] / sliding if slide else vector[:3] / turning
        words = _slide_words(part, kind, axis) if slide else _turn_words(part, kind, axis)
        named.append(WeakDirection(description=words, vector=vector, sd=float(error)))
    return tuple(named)


def separate(weak: FloatArray) -> FloatArray:
    """Return an orthonormal basis of the same span, slides along usual directions first, then turns.

    Eigenvectors of equal (zero) eigenvalues are an arbitrary mixture, so slides and turns are separated by the
    singular values of the rotational part.

    Parameters
    ----------
    weak : ndarray of shape (6, k)
        Orthonormal basis of the weak motions in metric unknowns.

    Returns
    -------
    ndarray of shape (6, k)
    """
    if not weak.shape[1]:
        return weak
    _, size, Vt = np.linalg.svd(weak[:3])
    size = np.r_[size, np.zeros(max(0, weak.shape[1] - 3))]
    mixed = weak @ Vt.T
    pure, turns = mixed[:, size < TRANSLATION], mixed[:, size >= TRANSLATION]
    if pure.shape[1]:
        wanted = _slides(np.linalg.svd(pure[3:], full_matrices=False)[0])
        # Rotate inside the span only: the nearest orthonormal basis to the wanted directions.
        U, _, Wt = np.linalg.svd(pure[3:].T @ wanted)
        pure = pure @ (U @ Wt)
    return np.concatenate([pure, turns], axis=1)
