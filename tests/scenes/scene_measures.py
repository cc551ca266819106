# SPDX-License-Identifier: MIT
"""Estimates against the exact truth of a scene: errors per gauge, the Cramér-Rao bound there, plain scenes to draw."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from scanstrain.synthetic import Lining, RandomField, Scene, cramer_rao, normal_displacement_bound, truth

MOTION = ("u1", "u2", "un", "g11", "g12", "g21", "g22", "gn1", "gn2")
"""The unknowns that have an exact truth at a gauge, in the order of the covariance."""

REFLECTANCE_NOISE = 30.0
"""Noise of intensity in the drawn scenes [counts]: 2 % of the mean reflectance, as the simulated scanner has it."""


def skin(surface, *, rms, correlation_length, seed):
    """A random field over a whole surface: its relief [m] or its reflectance [1]."""
    a0, a1, b0, b1 = surface.bounds
    return RandomField((a1 - a0, b1 - b0), rms=rms, correlation_length=correlation_length, seed=seed)


def textured(surface, deformation, *, seed=1):
    """A scene as of the demonstration: relief of 1 mm over 50 mm, reflectance of 18 % over 40 mm."""
    return Scene(
        surface,
        deformation,
        relief=skin(surface, rms=0.001, correlation_length=0.05, seed=10 * seed + 1),
        texture=skin(surface, rms=0.18, correlation_length=0.04, seed=10 * seed + 2),
    )


@dataclass(frozen=True)
class Errors:
    """Estimate minus truth of every gauge, its standard error, and where the gauge stands.

    Parameters
    ----------
    error, sd : ndarray of shape (g, 9)
        In the order of `MOTION`; NaN where no value is given.
    material : ndarray of shape (g, 2)
        Material coordinates of the gauges [m].
    inside : ndarray of shape (g,), bool
        The whole patch lies on the structure, and the gauge has a fit.
    """

    error: np.ndarray
    sd: np.ndarray
    material: np.ndarray
    inside: np.ndarray
    truth: dict

    def of(self, name, where=None):
        """Error and standard error of one unknown where it is given, patch inside the structure by default."""
        k = MOTION.index(name)
        seen = (self.inside if where is None else where) & np.isfinite(self.error[:, k])
        return self.error[seen, k], self.sd[seen, k]


def errors_of(scene, field, *, shift=0.0, registration=None, margin=None):
    """Compare an affine field with the truth of its scene.

    Parameters
    ----------
    scene : Scene
    field : AffineField
    shift : ndarray of shape (3,)
        Takes local coordinates of the field to those of the scene [m].
    registration : Registration, optional
        Its covariance is added where the datum counts.
    margin : float, optional
        Distance of a gauge from the ends of the structure [m]; half a gauge length by default.
    """
    exact = truth(scene, field.position + shift)
    F = np.asarray(scene.surface.frames(exact["material"]))
    A = field.frame
    whole = A.transpose(0, 2, 1) @ F @ exact["gradient"] @ F[:, :, :2].transpose(0, 2, 1) @ A[:, :, :2]
    moved = np.einsum("gik,gi->gk", A, exact["displacement"])
    reference = np.concatenate([moved, whole.reshape(-1, 6)], axis=1)
    given = np.concatenate([field.displacement, field.gradient.reshape(-1, 6)], axis=1)
    variance = np.einsum("gii->gi", field.covariance)[:, :9].copy()
    if registration is not None:
        datum = registration.displacement_covariance(field.position)
        variance[:, :3] += np.einsum("gik,gij,gjk->gk", A, datum, A)
        turn = np.einsum("gik,ij,gjk->gk", A, registration.covariance[:3, :3], A)
        variance[:, [7, 8]] += turn[:, [1, 0]]
    inside = exact["on_structure"] & (field.status == 0)
    inside &= within(scene.surface, exact["material"], field.gauge_length / 2 if margin is None else margin)
    return Errors(given - reference, np.sqrt(variance), exact["material"], inside, exact)


def within(surface, q, margin):
    """Places at least `margin` [m] from the ends of the surface; a closed ring has no end along its arc."""
    a0, a1, b0, b1 = surface.bounds
    inside = (q[:, 1] > b0 + margin) & (q[:, 1] < b1 - margin)
    closed = isinstance(surface, Lining) and np.isclose(a1 - a0, 2 * np.pi * surface.radius)
    return inside & (closed | ((q[:, 0] > a0 + margin) & (q[:, 0] < a1 - margin)))


def rms(values):
    """Root mean square."""
    return float(np.sqrt(np.mean(np.square(values))))


def coverage(error, sd):
    """Share of errors within the 95 % interval."""
    return float((np.abs(error) < 1.96 * sd).mean())


def mean_and_error(values, material, patch):
    """Mean of overlapping gauges and its standard error from the means of separate patches `patch` [m] wide.

    Neighbouring gauges share points, so the spread of single gauges over root n would claim too much.
    """
    key = np.floor(material / patch).astype(np.int64)
    _, group = np.unique(key, axis=0, return_inverse=True)
    group = group.ravel()
    means = np.bincount(group, values) / np.bincount(group)
    return float(values.mean()), float(means.std(ddof=1) / np.sqrt(len(means)))


def beam_variance(scan, setups, scene, scanner, places):
    """Variance along the surface normal of simulated points [m^2], from the simulated range and angle noise.

    `places` selects points of the scan, all on the structure.
    """
    where = np.array([setup.position for setup in setups])
    number = {setup.number: k for k, setup in enumerate(setups)}
    start = where[[number[int(s)] for s in scan.epoch.setup[places]]]
    beam = scan.clean[places] - start
    distance = np.linalg.norm(beam, axis=1)
    normal = scene.normals(scan.material[places], deformed=True)
    cosine = np.abs(np.einsum("ni,ni->n", beam, normal)) / distance
    along, across = scan.noise[places] * cosine, scanner.angle_noise * distance * np.sqrt(1 - cosine**2)
    return along**2 + across**2


def normal_bounds(surface, material, radius, reference, current):
    """Cramér-Rao bounds of (un, gn1, gn2, h11, h12, h22) for patches about material places, one row of six a place.

    `reference` and `current` are pairs of material coordinates (n, 2) and variances along the normal (n,) or float.
    NaN where an epoch has fewer than 12 points.
    """
    from scipy.spatial import cKDTree

    found = []
    for q, variance in (reference, current):
        tree = cKDTree(q)
        found.append((q, np.broadcast_to(variance, len(q)), tree.query_ball_point(material, radius)))
    out = np.full((len(material), 6), np.nan)
    for g, place in enumerate(material):
        (a, va, near_a), (b, vb, near_b) = ((q, v, rows[g]) for q, v, rows in found)
        if min(len(near_a), len(near_b)) < 12:
            continue
        bound = normal_displacement_bound(
            a[near_a] - place, b[near_b] - place, reference_variance=va[near_a], current_variance=vb[near_b]
        )
        out[g] = np.sqrt(np.diag(bound))
    return out


def in_plane_bound(scene, place, q, radius, variance, grey_variance):
    """Cramér-Rao bound of (u1, u2, g11, g12, g21, g22) where surface and reflectance were known in advance.

    Rows as of the local fit: the height sees tangential motion through the slope of the relief, the intensity
    through the slope of the texture; a gain and an offset of intensity are estimated along. `variance` and
    `grey_variance` are those of the difference of both epochs, per point of the reference patch.
    """
    near = q[np.hypot(*(q - place).T) < radius]
    x, y = (near - place).T
    one, zero = np.ones(len(near)), np.zeros(len(near))
    slope = scene.relief.gradient(near) if scene.relief is not None else np.zeros((len(near), 2))
    surface = tangential(-slope, x, y)
    normal = np.stack([one, x, y, x * x / 2, x * y, y * y / 2], axis=1)
    height = np.concatenate([surface, normal, zero[:, None], zero[:, None]], axis=1)
    grey = tangential(scene.reflectance * scene.texture.gradient(near), x, y)
    level = scene.intensity(near) - scene.reflectance
    intensity = np.concatenate([grey, np.zeros((len(near), 6)), level[:, None], one[:, None]], axis=1)
    rows = np.concatenate([height, intensity])
    variances = np.concatenate([np.full(len(near), variance), np.full(len(near), grey_variance)])
    return np.sqrt(np.diag(cramer_rao(rows, variances))[:6])


def tangential(slope, x, y):
    """Columns (u1, u2, g11, g12, g21, g22) of a quantity with the given slope (n, 2)."""
    s, t = slope.T
    return np.stack([s, t, s * x, s * y, t * x, t * y], axis=1)
