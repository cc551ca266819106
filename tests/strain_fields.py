# SPDX-License-Identifier: MIT
"""Affine fields of known deformations for the tests of the strain stage."""

from __future__ import annotations

import numpy as np

from scanstrain.neighbourhood.result import AffineField
from scanstrain.registration.result import Registration

IN_PLANE = [0, 1, 3, 4, 5, 6]
"""Unknowns that a smooth surface without texture does not fix: u1 u2 g11 g12 g21 g22."""


def affine_field(
    position, frame, *, displacement=0.0, gradient=0.0, hessian=0.0, shape=0.0, sd=None, covariance=None,
    observable=None, status=None, points=500, gauge_length=0.6, gauge_spacing=0.15,
):  # fmt: skip
    """A field with the given numbers; NaN where not observable or not fine, as the fit hands it over."""
    position, frame = np.atleast_2d(np.asarray(position, float)), np.asarray(frame, float)
    g = len(position)
    seen = np.ones((g, 12), bool) if observable is None else np.broadcast_to(observable, (g, 12)).copy()
    status = np.zeros(g, np.uint8) if status is None else np.asarray(status, np.uint8)
    values = np.concatenate(
        [
            np.broadcast_to(displacement, (g, 3)),
            np.broadcast_to(gradient, (g, 3, 2)).reshape(g, 6),
            np.broadcast_to(hessian, (g, 3)),
        ],
        axis=1,
    ).astype(float)
    values[~seen] = np.nan
    values[status != 0] = np.nan
    if covariance is None:
        covariance = np.diag(np.square(np.full(12, 1e-6) if sd is None else np.asarray(sd, float)))
    return AffineField(
        position=position,
        frame=np.broadcast_to(frame, (g, 3, 3)).copy(),
        displacement=values[:, :3],
        gradient=values[:, 3:9].reshape(g, 3, 2),
        hessian=values[:, 9:],
        covariance=np.broadcast_to(covariance, (g, 12, 12)).copy(),
        shape=np.broadcast_to(shape, (g, 3)).astype(float),
        observable=seen,
        status=status,
        points=np.broadcast_to(points, (g,)).astype(np.int64),
        residual_normal=np.ones(g),
        residual_intensity=np.ones(g),
        gauge_length=gauge_length,
        gauge_spacing=gauge_spacing,
    )


def registration(covariance, pivot=(0.0, 0.0, 0.0)):
    """A registration at identity with the given 6x6 covariance."""
    return Registration(
        T_ref_cur=np.eye(4), origin=np.zeros(3), pivot=np.asarray(pivot, float),
        covariance=np.asarray(covariance, float),
        rms=1e-3, stable=np.ones(10, bool), overlap=1.0, scale_ppm=0.0, scale_ppm_sd=1.0, weak_directions=(),
        converged=True, iterations=5, start="identity",
    )  # fmt: skip


def random_frames(rng, count):
    """Right-handed orthonormal frames, evenly spread."""
    Q, _ = np.linalg.qr(rng.normal(size=(count, 3, 3)))
    Q[:, :, 2] *= np.sign(np.linalg.det(Q))[:, None]
    return Q


def ring_field(theta, *, radius, u0, **options):
    """Material points of an ovalising ring about the y axis, seen from inside: u_r = u0 cos 2t, u_t = -(u0/2) sin 2t.

    Frame: a1 hoop (rising t), a2 along y, n inward. Derivatives along the arc, written in the fixed frame at t:
    g11 = (u_r + u_t')/R, gn1 = -(u_r' - u_t)/R, h11 = -(u_r'' - 2 u_t' - u_r)/R^2; height over the tangent plane
    curves by +1/R, because the ring bends towards its inside.
    """
    t = np.asarray(theta, float)
    zero = np.zeros_like(t)
    out = np.stack([np.cos(t), zero, np.sin(t)], -1)
    hoop = np.stack([-np.sin(t), zero, np.cos(t)], -1)
    frame = np.stack([hoop, np.tile([0.0, 1.0, 0.0], (len(t), 1)), -out], axis=-1)
    ur, dur, ddur = u0 * np.cos(2 * t), -2 * u0 * np.sin(2 * t), -4 * u0 * np.cos(2 * t)
    ut, dut = -u0 / 2 * np.sin(2 * t), -u0 * np.cos(2 * t)
    gradient = np.zeros((len(t), 3, 2))
    gradient[:, 0, 0] = (ur + dut) / radius
    gradient[:, 2, 0] = -(dur - ut) / radius
    hessian = np.stack([-(ddur - 2 * dut - ur) / radius**2, zero, zero], -1)
    return affine_field(
        radius * out, frame, displacement=np.stack([ut, zero, -ur], -1), gradient=gradient, hessian=hessian,
        shape=[1 / radius, 0.0, 0.0], **options,
    )  # fmt: skip
