# SPDX-License-Identifier: MIT
"""Rows of intensity along open motions: their robust fit and its covariance from patches."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.linalg import at_least, leave_one_out
from scanstrain.registration.covariance import RESOLUTION
from scanstrain.registration.fit import TUKEY, biweight, robust_scale, step_of, sums
from scanstrain.registration.match import Metric
from scanstrain.registration.rigid import inverse
from scanstrain.registration.texture_image import Image, View, view

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MIN_NODES = 200
"""Fewer common places show no texture."""
MIN_PATCHES = 6
"""Fewer patches give no covariance."""
MIN_AGREEMENT = 0.2
"""Least share of a motion's information that both images agree on: below it the slopes are noise. Noise in the slopes
costs no bias here, so the limit is lower than that of the surfaces."""
PATCH_CUT = 3.5
"""Cut-off of the biweight of patches in robust standard deviations over all open motions; along one of two motions
that is 4.9."""
LEAST_RATIO = 0.5
"""Slope of the score over weight is not taken as less: half of what normal errors give is no efficient fit any more."""
MAX_STEPS, MONOTONE, FREEZE_AFTER, SETTLED = 40, 4, 12, 1e-6
"""Most steps of one fit; how many of them with a score that does not redescend, since that one has one solution from
anywhere; after how many the weights of patches stay; the last step [m]."""


@dataclass(frozen=True, slots=True)
class Nodes:
    """Reference places at which intensities are compared.

    Parameters
    ----------
    place, normal : ndarray of shape (n, 3)
        [m], and of the block.
    block, patch : ndarray of shape (n,), int64
        Reference block and patch.
    patches : int
    window : ndarray of shape (n,), int64
        Small window, inside which the two images may differ in level and gain.
    seen : View
        The reference image there.
    """

    place: FloatArray
    normal: FloatArray
    block: IntArray
    patch: IntArray
    patches: int
    window: IntArray
    seen: View

    def among(self, keep: NDArray[np.bool_]) -> Nodes:
        """Return the nodes in kept blocks, `keep` of shape (b,)."""
        k = keep[self.block]
        seen = View(self.seen.value[k], self.seen.gradient[k], self.seen.seen[k])
        return Nodes(self.place[k], self.normal[k], self.block[k], self.patch[k], self.patches, self.window[k], seen)


@dataclass(frozen=True, slots=True)
class TextureRows:
    """Rows at a pose: `residual = row @ step + noise`, with robust weights.

    Parameters
    ----------
    row, half : ndarray of shape (m, 6)
        Mean and half difference of the two epochs' own rows, in metric unknowns [intensity/m].
    residual, weight : ndarray of shape (m,)
        Reference minus current, in units of intensity; robust weight of the place times that of its patch.
    block, patch : ndarray of shape (m,), int64
    ratio : float
        Mean slope of the robust score over its mean weight [1].
    of_patch : ndarray of shape (p,)
        Robust weight of every patch.
    patch_ratio : float
        The part of `ratio` that comes from them.
    """

    row: FloatArray
    half: FloatArray
    residual: FloatArray
    weight: FloatArray
    block: IntArray
    patch: IntArray
    ratio: float
    of_patch: FloatArray
    patch_ratio: float


@dataclass(frozen=True, slots=True)
class TextureFit:
    """Open motions as texture fixes them.

    Parameters
    ----------
    T : ndarray of shape (4, 4)
        Current to reference.
    basis : ndarray of shape (6, v)
        Orthonormal: the open motions on which both images carry information.
    covariance : ndarray of shape (v, v)
        [m^2]
    response : ndarray of shape (v, 6)
        What an error of any motion does to the fitted ones [1].
    """

    T: FloatArray
    basis: FloatArray
    covariance: FloatArray
    response: FloatArray


@dataclass(slots=True)
class Texture:
    """What intensity says about open motions.

    Parameters
    ----------
    nodes : Nodes
    theirs : Image
        Of the current epoch.
    fixed, repeating : ndarray of shape (6, a), (6, b)
        Orthonormal: motions that intensity fixes, and those along which its pattern repeats.
    searched : ndarray of shape (6, k)
        All motions that were open.
    aside : ndarray of shape (6,)
        Motion that aligns the images along those that stay held; not part of the result.
    start : ndarray of shape (6, 6)
        Covariance of the start along the searched motions [m^2].
    fit : TextureFit
        The latest fit.
    """

    nodes: Nodes
    theirs: Image
    fixed: FloatArray
    repeating: FloatArray
    searched: FloatArray
    aside: FloatArray
    start: FloatArray
    fit: TextureFit

    def covariance(self) -> FloatArray:
        """Covariance along the fixed motions (a, a) [m^2]; what is not informed has the uncertainty of the start."""
        return covariance_along(self.fixed, self.fit, self.start)

    def follow(self, strong: FloatArray) -> FloatArray:
        """Return what errors along strong motions (6, r) become when the images are aligned again, (6, r)."""
        dragged = self.fit.basis @ (self.fit.response @ strong)
        return np.asarray(strong - self.fixed @ (self.fixed.T @ dragged))


def covariance_along(directions: FloatArray, fit: TextureFit, start: FloatArray) -> FloatArray:
    """Covariance (a, a) [m^2] along directions (6, a); what is not informed has the covariance (6, 6) of the start."""
    inside = directions.T @ fit.basis
    outside = directions.T - inside @ fit.basis.T
    return np.asarray(inside @ fit.covariance @ inside.T + outside @ start @ outside.T)


def fit_texture(
    nodes: Nodes, theirs: Image, T: FloatArray, open_motions: FloatArray, metric: Metric
) -> TextureFit | None:
    """Fit open motions by intensity, the others as they are.

    Gauss-Newton on the difference of the two images at common places with the mean of their slopes, biweights per
    place and per patch. Both images are smoothed alike, so the difference has no mean where the pose is right; noise
    of value and slope at one place is independent within an image and enters with opposite signs from the two, so the
    fixed point has no bias. Noise in the slopes would make the plain information too large; as for normals
    (`weak.split`), sum w sym(a b') with the two epochs' own rows a and b has the noise of neither.

    Parameters
    ----------
    nodes : Nodes
    theirs : Image
        Of the current epoch.
    T : ndarray of shape (4, 4)
        Current to reference, to begin with.
    open_motions : ndarray of shape (6, k)
        Orthonormal, in metric unknowns.
    metric : Metric

    Returns
    -------
    TextureFit or None
        None where too little is seen, nothing is informed, or the steps do not settle.
    """
    frozen = None
    for turn in range(MAX_STEPS):
        rows = observe(nodes, theirs, T, metric, open_motions, frozen, early=turn < MONOTONE)
        if rows is None:
            return None
        frozen = (rows.of_patch, rows.patch_ratio) if turn >= FREEZE_AFTER else None
        full, shared, right = (s[0] for s in _summed(rows, np.zeros(len(rows.weight), np.int64), 1))
        basis = _informed(full, shared, open_motions)
        if not basis.shape[1]:
            return None
        step = basis @ np.linalg.solve(basis.T @ shared @ basis, basis.T @ right) / rows.ratio
        T = step_of(step, metric) @ T
        if np.linalg.norm(step) < SETTLED and turn >= MONOTONE:
            break
    else:
        return None
    covariance, response = _covariance(rows, nodes.patches, basis)
    return None if covariance is None else TextureFit(T, basis, covariance, response)


def observe(
    nodes: Nodes,
    theirs: Image,
    T: FloatArray,
    metric: Metric,
    open_motions: FloatArray,
    frozen: tuple[FloatArray, float] | None = None,
    *,
    early: bool = False,
) -> TextureRows | None:
    """Make rows of all places that both epochs show, None if they are too few; weights of patches may be given."""
    back = inverse(T)
    other = view(theirs, nodes.place @ back[:3, :3].T + back[:3, 3], nodes.normal @ back[:3, :3].T)
    both = nodes.seen.seen & other.seen
    if both.sum() < MIN_NODES:
        return None
    arm = (nodes.place[both] - metric.pivot) / metric.arm
    a, b = (-np.c_[np.cross(arm, g), g] for g in (nodes.seen.gradient[both], other.gradient[both] @ T[:3, :3].T))
    row, half, patch = (a + b) / 2, (a - b) / 2, nodes.patch[both]
    residual = nodes.seen.value[both] - other.value[both]
    window, mean = nodes.window[both], (nodes.seen.value[both] + other.value[both]) / 2
    rough = _without_level(residual[:, None], mean, np.ones(len(mean)), window)[:, 0]
    weight = biweight(rough / (TUKEY * max(robust_scale(rough), 1e-12)))
    clean = _without_level(np.column_stack([residual, row, half]), mean, weight, window)
    residual, row, half = clean[:, 0], clean[:, 1:7], clean[:, 7:]
    scale = TUKEY * max(robust_scale(residual), 1e-12)
    weight, u2 = biweight(residual / scale), np.minimum((residual / scale) ** 2, 1.0)
    of_patch, patch_ratio = frozen or _patch_weights(
        row @ open_motions, residual * weight, weight, patch, nodes.patches, early
    )
    weight = weight * of_patch[patch]
    slope = np.where(u2 < 1, (1 - u2) * (1 - 5 * u2), 0.0) * of_patch[patch]
    ratio = max(float(slope.sum() / max(weight.sum(), 1e-300)) * patch_ratio, LEAST_RATIO)
    return TextureRows(row, half, residual, weight, nodes.block[both], patch, ratio, of_patch, patch_ratio)


def _without_level(columns: FloatArray, mean: FloatArray, weight: FloatArray, window: IntArray) -> FloatArray:
    """Take out of columns (m, c), window by window, what a difference in level and gain of the images explains."""
    count = int(window.max()) + 1

    def summed(values: FloatArray) -> FloatArray:
        return np.asarray(np.bincount(window, values, minlength=count), np.float64)

    n = np.maximum(summed(weight), 1e-12)
    m = mean - (summed(weight * mean) / n)[window]
    size = np.maximum(summed(weight * m * m), 1e-12)
    out = np.empty_like(columns)
    for c, column in enumerate(columns.T):
        level, gain = summed(weight * column) / n, summed(weight * m * column) / size
        out[:, c] = column - level[window] - gain[window] * m
    return out


def _patch_weights(
    row: FloatArray, score: FloatArray, weight: FloatArray, patch: IntArray, count: int, early: bool
) -> tuple[FloatArray, float]:
    """Weigh down patches that pull away as one: ground that slid in itself shows only here.

    Returns weights (count,) and the mean slope of their score over the mean weight.
    """
    k = row.shape[1]
    g = np.stack([np.bincount(patch, score * row[:, j], minlength=count) for j in range(k)], axis=1)
    N = np.empty((count, k, k))
    for i in range(k):
        for j in range(k):
            N[:, i, j] = np.bincount(patch, weight * row[:, i] * row[:, j], minlength=count)
    size = np.trace(N, axis1=1, axis2=2)
    present = size > 0
    ridge = 1e-6 * np.where(present, size, 1.0)[:, None, None] * np.eye(k)
    pull = np.sqrt(np.maximum((g * np.linalg.solve(N + ridge, g[..., None])[..., 0]).sum(axis=1) / k, 0.0))
    # Median of chi with k degrees of freedom over root k (Wilson & Hilferty 1931).
    usual = (1 - 2 / (9 * k)) ** 1.5
    z = pull / max(float(np.median(pull[present])) / usual, 1e-12)
    if early:
        return np.where(present, 1 / np.maximum(z, 1.0), 0.0), 1.0
    u = z / PATCH_CUT
    weights = np.where(present, biweight(u), 0.0)
    # Along the pull of a patch the score bends; across it, it grows with the weight alone.
    slope = (np.where(u < 1, (1 - u**2) * (1 - 5 * u**2), 0.0) + (k - 1) * weights) / k
    return weights, float((slope * size).sum() / max((weights * size).sum(), 1e-300))


def _summed(rows: TextureRows, group: IntArray, groups: int) -> tuple[FloatArray, FloatArray, FloatArray]:
    summed: tuple[FloatArray, FloatArray, FloatArray] = sums(
        rows.row, rows.half, rows.residual, rows.weight, group, groups
    )
    return summed


def _informed(full: FloatArray, shared: FloatArray, open_motions: FloatArray) -> FloatArray:
    """Open motions along which the two images agree on the slopes, orthonormal (6, v)."""
    values, vectors = np.linalg.eigh(open_motions.T @ shared @ open_motions)
    plain = np.einsum("ik,ij,jk->k", vectors, open_motions.T @ full @ open_motions, vectors)
    good = (values > MIN_AGREEMENT * plain) & (values > 0)
    return np.ascontiguousarray(open_motions @ vectors[:, good])


def _covariance(rows: TextureRows, patches: int, basis: FloatArray) -> tuple[FloatArray | None, FloatArray]:
    """Leave-one-patch-out covariance as in `covariance.estimate`, with a floor from single blocks; and the response."""
    _, N_P, g_P = _summed(rows, rows.patch, patches)
    shared = N_P.sum(axis=0)
    present = np.unique(rows.patch[rows.weight > 0])
    N = basis.T @ shared @ basis
    response = np.linalg.solve(N, basis.T @ shared)
    if len(present) < MIN_PATCHES:
        return None, response
    clustered = leave_one_out(np.einsum("ai,gab,bj->gij", basis, N_P[present], basis), g_P[present] @ basis)
    block, index = np.unique(rows.block, return_inverse=True)
    _, _, g_b = _summed(rows, index.ravel().astype(np.int64), len(block))
    single = np.linalg.solve(N, basis.T @ g_b.T)
    both = at_least(clustered, single @ single.T) / rows.ratio**2
    return both + RESOLUTION**2 * np.eye(len(N)), response
