# SPDX-License-Identifier: MIT
"""How far a gauge is off because the motion varies within it.

One affine map (with second derivatives of the normal part) blurs what changes within a patch: a strain by R^2/12 times
its Laplacian over a full disc of radius R. What the map leaves out is seen by the gauges around: a polynomial one order
higher in plane, and two orders higher along the normal, is fitted to what they depart from the gauge's own map. So the
bias is the difference between the basis in use and the richer one, without a second fit to the points.

The noise of that difference is known and taken off its square; what remains is the bias that the data show.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from math import factorial

import numpy as np
from numpy.typing import NDArray

from scanstrain.neighbourhood.joint_cuts import Cuts, beyond, no_cuts
from scanstrain.neighbourhood.polynomials import exponents, leakage, moments, terms
from scanstrain.neighbourhood.result import AffineField, Status

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

REACH = 2.0
"""Distance of the gauges that are consulted, in radii of a gauge: a gauge length. Nearer ones share most of their
points with the gauge and tell little, farther ones are another place."""
HIGHEST = 6
"""Order of the moments that the richest basis needs."""
MOST = 60
"""Gauges consulted at most, the nearest ones: at the default spacing there are 50."""
FEWEST = 8
"""Gauges that a statement needs: the fit has as many unknowns along the normal as three of them give numbers."""
SAME_SHEET = 0.8
"""Cosine between two normals below which the gauges stand on different sheets, as for points of a patch."""
RIDGE = 1e-9
"""Added to unit diagonals [1]: keeps the equations of gauges in a line solvable; their noise then forbids an answer."""
CHUNK = 200
"""Gauges worked at a time: bounds the memory."""
_LATTICE = 12
"""Points across a radius of the even layout that judges how noise of overlapping gauges adds up."""


@dataclass(frozen=True, slots=True)
class Basis:
    """The unknowns that one component of the motion is fitted by.

    Parameters
    ----------
    fitted, order : int
        Order of the gauge's own polynomial and of the richer one.
    derivatives : tuple of pairs
        What a gauge gives of the component, as derivatives by both coordinates.
    """

    fitted: int
    order: int
    derivatives: tuple[tuple[int, int], ...]


_SLOPES = ((0, 0), (1, 0), (0, 1))
_BENDS = ((2, 0), (1, 1), (0, 2))
IN_PLANE = (Basis(1, 3, _SLOPES), Basis(1, 2, _SLOPES))
NORMAL = (Basis(2, 4, _SLOPES + _BENDS), Basis(2, 3, _SLOPES + _BENDS))
"""Each with one that goes an order less far: over a full disc the first order left out changes nothing and the second
one matters, while one-sided gauges at an edge feel the first one and seldom know the second."""
COLUMNS = ((0, 3, 4), (1, 5, 6), (2, 7, 8, 9, 10, 11))
"""Unknowns of each component, first two in plane and then along the normal, by their place in `result.PARAMETERS`."""


def gauge_bias(field: AffineField, points: FloatArray, cuts: Cuts | None = None) -> FloatArray:
    """Estimate how far every unknown of every gauge is off.

    Parameters
    ----------
    field : AffineField
    points : ndarray of shape (n, 3)
        Of the reference, local coordinates [m]: they tell which part of a disc is covered.
    cuts : Cuts, optional
        Joints about every gauge within `REACH` radii; what lies beyond one is not consulted.

    Returns
    -------
    ndarray of shape (g, 12)
        Estimate minus truth, in the order and units of `result.PARAMETERS`; 0 where no more shows than noise explains,
        NaN where the gauges around do not support a statement.
    """
    out = np.full((len(field), 12), np.nan)
    fine = np.flatnonzero(np.asarray(field.status) == Status.FINE)
    if len(fine) < FEWEST:
        return out
    near = _neighbours(field, fine, cuts or no_cuts(len(field)))
    moment = _covered(field, fine, points)
    leak = {}
    for basis in (*IN_PLANE, *NORMAL):
        each = _scaled_leakage(basis, moment)
        leak[basis] = np.zeros((len(field), *each.shape[1:]))
        leak[basis][fine] = each
    for first in range(0, len(fine), CHUNK):
        rows = slice(first, first + CHUNK)
        out[fine[rows]] = _of_some(field, fine[rows], near[rows], leak)
    return out


def _neighbours(field: AffineField, fine: IntArray, cuts: Cuts) -> IntArray:
    """Gauges about each fitted one on its own sheet and side, -1 where there are no more; shape (g, m)."""
    from scipy.spatial import cKDTree

    reach = REACH * field.gauge_length / 2
    _, near = cKDTree(field.position[fine]).query(field.position[fine], k=MOST, distance_upper_bound=reach)
    near = np.where(near < len(fine), fine[np.minimum(near, len(fine) - 1)], -1)
    normal = field.frame[:, :, 2]
    near[np.einsum("gki,gi->gk", normal[near], normal[fine]) < SAME_SHEET] = -1
    for row in np.flatnonzero(np.diff(cuts.start)[fine]):
        g = fine[row]
        place = (field.position[near[row]] - field.position[g]) @ field.frame[g]
        pieces = cuts.pieces[cuts.start[g] : cuts.start[g + 1]]
        near[row, [bool(beyond(x, y, pieces, False)) for x, y, _ in place]] = -1
    return near


def _covered(field: AffineField, fine: IntArray, points: FloatArray) -> FloatArray:
    """Moments of the part of each disc that has points, in radii; shape (g, 7, 7)."""
    from scipy.spatial import cKDTree

    radius = field.gauge_length / 2
    pairs = cKDTree(field.position[fine]).sparse_distance_matrix(cKDTree(points), radius, output_type="ndarray")
    g = fine[pairs["i"]]
    away = (points[pairs["j"]] - field.position[g]) / radius
    x, y = (np.einsum("ni,ni->n", away, field.frame[g, :, k]) for k in (0, 1))
    return moments(x, y, pairs["i"], len(fine), HIGHEST)


def _of_some(field: AffineField, own: IntArray, near: IntArray, leak: dict[Basis, FloatArray]) -> FloatArray:
    """Bias of some gauges, shape (n, 12)."""
    radius = field.gauge_length / 2
    scale = np.array([1.0] * 3 + [1 / radius] * 6 + [1 / radius**2] * 3)
    place, departure = _departures(field, own, near, radius)
    variance = np.einsum("gii->gi", field.covariance) / scale**2
    known = field.observable & np.isfinite(variance) & (variance > 0)
    kernel = np.maximum(1.0 - (place[..., 0] ** 2 + place[..., 1] ** 2) / REACH**2, 0.0) ** 2 * (near >= 0)
    out = np.full((len(own), 12), np.nan)
    for component, columns in enumerate(COLUMNS):
        bases, k = (NORMAL if component == 2 else IN_PLANE), list(columns)
        weight = kernel * known[near][:, :, k].all(axis=2)
        given = np.where(weight[..., None] > 0, departure[:, :, k], 0.0)
        error = np.where(weight[..., None] > 0, variance[near][:, :, k], 1.0)
        enough = ((weight > 0).sum(axis=1) >= FEWEST) & known[own][:, k].all(axis=1)
        repeated = shared_noise(bases[0], round(field.gauge_spacing / radius, 2))
        rows = np.flatnonzero(enough)
        for basis in bases:
            at, around = own[rows], near[rows]
            gain = _gains(basis, place[rows], error[rows], weight[rows], leak[basis][around], leak[basis][at])
            bias = np.einsum("nkmd,nmd->nk", gain, given[rows])
            noise = repeated * np.einsum("nkmd,nmd->nk", gain**2, error[rows])
            sure = np.sign(bias) * np.sqrt(np.maximum(bias**2 - noise, 0.0))
            told = (noise < variance[at][:, k]).all(axis=1)
            out[rows[told][:, None], k] = sure[told] * scale[k]
            rows = rows[~told]
    return out


def _departures(field: AffineField, own: IntArray, near: IntArray, radius: float) -> tuple[FloatArray, FloatArray]:
    """Places of the gauges around in the own tangent plane [radii], and what they depart from the own map.

    The map is continued in space with the rotation of the normal, so a rigid motion of a curved surface departs by
    nothing. Returns shapes (n, m, 2) and (n, m, 12), the second in metres at the rim.
    """
    F, values = field.frame, np.where(field.observable, _values(field), 0.0)
    P = np.einsum("nia,nmib->nmab", F[own], F[near])
    r = np.einsum("nmi,nia->nma", field.position[near] - field.position[own][:, None], F[own])
    M = np.zeros((len(own), near.shape[1], 3, 3))
    G, H = values[:, 3:9].reshape(-1, 3, 2), values[:, [9, 10, 10, 11]].reshape(-1, 2, 2)
    M[..., :2] = G[own][:, None]
    M[..., 0, 2], M[..., 1, 2] = -G[own, 2, 0, None], -G[own, 2, 1, None]
    moved = values[own, None, :3] + np.einsum("nmab,nmb->nma", M, r)
    bend = np.einsum("nab,nmb->nma", H[own], r[..., :2])
    moved[..., 2] += 0.5 * np.einsum("nma,nma->nm", bend, r[..., :2])
    M[..., 2, :2] += bend
    T = P[..., :2, :2]
    displacement = np.einsum("nmab,nmb->nma", P, values[near][..., :3]) - moved
    gradient = (P @ G[near] - M @ P[..., :2]) @ np.linalg.inv(T)
    hessian = T @ H[near] @ np.swapaxes(T, -1, -2) - H[own][:, None]
    flat = np.stack([hessian[..., 0, 0], hessian[..., 0, 1], hessian[..., 1, 1]], axis=-1)
    gradient = gradient.reshape(*near.shape, 6)
    return r[..., :2] / radius, np.concatenate([displacement, radius * gradient, radius**2 * flat], axis=-1)


def _values(field: AffineField) -> FloatArray:
    return np.concatenate([field.displacement, field.gradient.reshape(-1, 6), field.hessian], axis=1)


def _gains(
    basis: Basis, place: FloatArray, variance: FloatArray, weight: FloatArray, leak: FloatArray, own_leak: FloatArray
) -> FloatArray:
    """How each number of each gauge around adds to the bias of one component, shape (n, k, m, d).

    `leak` (n, m, d, l) and `own_leak` (n, d, l) say what the fits of the gauges around and of the own one make of
    orders that they leave out: so those are seen for the averages that they are.
    """
    rows = _rows(basis, place) + leak @ _above(basis, place)
    w = weight[..., None] / variance
    weighted = rows * w[..., None]
    count, many, kinds, unknowns = rows.shape
    flat, weighed = rows.reshape(count, many * kinds, unknowns), weighted.reshape(count, many * kinds, unknowns)
    N = np.swapaxes(weighed, 1, 2) @ flat
    unit = 1.0 / np.sqrt(np.maximum(np.einsum("nii->ni", N), 1e-300))
    inverse = np.linalg.inv(N * unit[:, :, None] * unit[:, None, :] + RIDGE * np.eye(unknowns))
    inverse *= unit[:, :, None] * unit[:, None, :]
    above = own_leak @ inverse[:, -own_leak.shape[2] :]
    return np.asarray(above @ np.swapaxes(weighed, 1, 2)).reshape(count, above.shape[1], many, kinds)


def _rows(basis: Basis, place: FloatArray) -> FloatArray:
    """What each gauge gives of every term, shape (..., d, k)."""
    x, y = place[..., 0], place[..., 1]
    return np.stack([terms(x, y, basis.order, dx=dx, dy=dy) for dx, dy in basis.derivatives], axis=-2)


def _above(basis: Basis, place: FloatArray) -> FloatArray:
    """Coefficients above the fitted order of every term, about each place, shape (..., l, k)."""
    x, y = place[..., 0], place[..., 1]
    high = [(p, q) for p, q in exponents(basis.order).tolist() if p + q > basis.fitted]
    return np.stack([terms(x, y, basis.order, dx=p, dy=q) / (factorial(p) * factorial(q)) for p, q in high], axis=-2)


def _scaled_leakage(basis: Basis, moment: FloatArray) -> FloatArray:
    """`leakage` in derivatives at the centre in place of coefficients: x^2 counts twice."""
    twice = np.array([2.0 if (dx, dy) in ((2, 0), (0, 2)) else 1.0 for dx, dy in basis.derivatives])
    usable = np.isfinite(moment[:, 0, 0])
    return np.asarray(leakage(np.where(usable[:, None, None], moment, 0.0), basis.fitted, basis.order) * twice[:, None])


@lru_cache(maxsize=32)
def shared_noise(basis: Basis, spacing: float) -> FloatArray:
    """Factor on the variance of a bias because gauges overlap, from an even layout under white noise of points.

    Parameters
    ----------
    basis : Basis
    spacing : float
        Of gauges, in radii [1].

    Returns
    -------
    ndarray of shape (k,)
    """
    steps = np.arange(-int(REACH / spacing), int(REACH / spacing) + 1) * spacing
    place = np.stack(np.meshgrid(steps, steps, indexing="ij"), axis=-1).reshape(-1, 2)
    distance = np.hypot(*place.T)
    place = place[distance < REACH][np.argsort(distance[distance < REACH], kind="stable")][:MOST]
    ends = np.arange(-(REACH + 1) * _LATTICE, (REACH + 1) * _LATTICE + 1) / _LATTICE
    cloud = np.stack(np.meshgrid(ends, ends, indexing="ij"), axis=-1).reshape(-1, 2)
    each = np.stack([_estimator(basis, cloud - at) for at in place])
    variance = np.broadcast_to((each**2).sum(axis=2).mean(axis=0), (1, len(place), each.shape[1]))
    weight = (np.maximum(1.0 - (place**2).sum(axis=1) / REACH**2, 0.0) ** 2)[None]
    disc = cloud[np.hypot(*cloud.T) <= 1.0]
    moment = moments(disc[:, 0], disc[:, 1], np.zeros(len(disc), np.int64), 1, HIGHEST)
    leak = _scaled_leakage(basis, moment)
    gain = _gains(basis, place[None], variance, weight, leak[:, None], leak)[0]
    together = (np.einsum("kmd,mdp->kp", gain, each, optimize=True) ** 2).sum(axis=1)
    return np.asarray(together / np.einsum("kmd,kmd,md->k", gain, gain, variance[0]))


def _estimator(basis: Basis, away: FloatArray) -> FloatArray:
    """Weights of the points of an even cloud in the fit of one gauge, shape (k, n)."""
    inside = np.hypot(*away.T) <= 1.0
    rows = terms(away[inside, 0], away[inside, 1], basis.fitted)
    twice = np.array([2.0 if (dx, dy) in ((2, 0), (0, 2)) else 1.0 for dx, dy in basis.derivatives])
    out = np.zeros((rows.shape[1], len(away)))
    out[:, inside] = twice[:, None] * np.linalg.pinv(rows)
    return out
