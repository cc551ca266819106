# SPDX-License-Identifier: MIT
"""Walls as plain point sets in closed form, and gauges that are fitted to noise by their definition."""

from __future__ import annotations

import numpy as np

UP = np.array([0.0, 0.0, 1.0])


def axes(bearing=0.0, lean=0.0):
    """Right, up in the plane and normal of a wall that faces south at bearing 0; its top leans to the free side."""
    right = np.array([np.cos(bearing), np.sin(bearing), 0.0])
    level = np.cross(right, UP)
    return right, np.cos(lean) * UP + np.sin(lean) * level, np.cos(lean) * level - np.sin(lean) * UP


def patch(rng, corner, one, other, *, density, noise=0.002):
    """Points on a parallelogram with two edges, `density` a square metre."""
    one, other = np.asarray(one, float), np.asarray(other, float)
    across = np.cross(one, other)
    area = np.linalg.norm(across)
    a, b = rng.random((2, int(density * area)))
    return (
        np.asarray(corner)
        + a[:, None] * one
        + b[:, None] * other
        + noise * rng.normal(size=(len(a), 1)) * across / area
    )


def yard(rng, *, length=8.0, height=4.0, bearing=0.0, lean=0.0, density=400, noise=0.002, corner=(5.0, 3.0, 1.0)):
    """A wall with an opening, pavement, return walls at both ends, a buttress, a pipe and strays before it."""
    right, up, normal = axes(bearing, lean)
    level, corner = np.cross(right, UP), np.asarray(corner, float)
    face = patch(rng, corner, length * right, height * up, density=density, noise=noise)
    along, high = (face - corner) @ right, (face - corner) @ up
    opening = (along > 0.6 * length) & (along < 0.6 * length + 1.2) & (high > 1.0) & (high < 2.5)
    parts = [
        face[~opening],
        patch(rng, corner - 0.5 * right, (length + 1) * right, 5 * level, density=density, noise=noise),
        patch(rng, corner, 2.0 * level, height * UP, density=density, noise=noise),
        patch(rng, corner + length * right, 1.5 * level, height * UP, density=density, noise=noise),
        patch(
            rng, corner + 0.35 * length * right + 0.3 * normal, 0.6 * right, height * up, density=density, noise=noise
        ),
    ]
    angle, rise = rng.uniform(0, np.pi, 800), rng.uniform(0, height, 800)
    pipe = np.outer(1.2 + 0.05 * np.cos(angle), right) + np.outer(0.1 + 0.05 * np.sin(angle), normal)
    parts.append(corner + pipe + rise[:, None] * up)
    strays = rng.uniform([0, 0, 0], [length, 4, height], (400, 3))
    parts.append(corner + strays[:, :1] * right + strays[:, 1:2] * level + strays[:, 2:] * UP)
    return np.concatenate(parts)


def grid(length, height, spacing, margin=0.0):
    """Places (g, 2) of gauges on a square grid."""
    x = np.arange(margin + spacing / 2, length - margin, spacing)
    y = np.arange(margin + spacing / 2, height - margin, spacing)
    return np.stack(np.meshgrid(x, y, indexing="ij"), axis=-1).reshape(-1, 2)


def gauge_operator(places, length, height, gauge_length, point_spacing):
    """Sparse (g, n) weights of the middle of a second-order fit to the points of a wall within each gauge."""
    from scipy.sparse import csr_array
    from scipy.spatial import cKDTree

    points = grid(length, height, point_spacing)
    start, columns, weights = [0], [], []
    for place, near in zip(places, cKDTree(points).query_ball_point(places, gauge_length / 2), strict=True):
        x, y = (points[near] - place).T
        design = np.stack([np.ones(len(x)), x, y, x * x, x * y, y * y], axis=1)
        weights.append(np.linalg.pinv(design)[0])
        columns.append(near)
        start.append(start[-1] + len(near))
    return csr_array((np.concatenate(weights), np.concatenate(columns), start), shape=(len(places), len(points)))
