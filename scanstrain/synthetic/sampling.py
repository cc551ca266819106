# SPDX-License-Identifier: MIT
"""Epochs drawn directly on a scene: known spacing, known noise, no point twice."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch, make_epoch
from scanstrain.synthetic.fields import RandomField
from scanstrain.synthetic.scene import Scene
from scanstrain.synthetic.surfaces import FloatArray, Surface, product

STRAY_HEIGHT = (0.03, 0.4)
"""Outliers stand this far in front of the surface [m]: cables, people, dust."""


def jittered_grid(surface: Surface, spacing: float, rng: np.random.Generator) -> FloatArray:
    """Return one place at random in every cell of a grid over the surface.

    Parameters
    ----------
    surface : Surface
        Where to draw.
    spacing : float
        Side of a cell [m]; the density is 1 / spacing^2.
    rng : numpy.random.Generator
        Source of the jitter.

    Returns
    -------
    ndarray of shape (n, 2)
        Material coordinates [m].
    """
    a0, a1, b0, b1 = surface.bounds
    counts = np.array([max(1, round((a1 - a0) / spacing)), max(1, round((b1 - b0) / spacing))])
    cells = np.stack(np.meshgrid(*(np.arange(n) for n in counts), indexing="ij"), axis=-1).reshape(-1, 2)
    share = (cells + rng.random(cells.shape)) / counts
    return np.asarray(np.array([a0, b0]) + share * np.array([a1 - a0, b1 - b0]))


def sample_epoch(
    scene: Scene,
    *,
    deformed: bool,
    spacing: float = 0.01,
    noise: float = 5e-4,
    intensity_noise: float = 10.0,
    seed: int,
    pose: FloatArray | None = None,
    noise_direction: Literal["normal", "isotropic"] = "normal",
    correlated_share: float = 0.0,
    correlation_length: float = 0.03,
    outliers: float = 0.0,
    holes: tuple[tuple[float, float, float], ...] = (),
    label: str = "",
) -> Epoch:
    """Draw one epoch of a scene; both epochs of a pair are drawn independently of one another.

    Parameters
    ----------
    scene : Scene
        Object and motion.
    deformed : bool
        Before (False) or after (True) the motion.
    spacing : float
        Mean distance between points [m].
    noise : float
        Standard deviation of a point along the normal, or of each coordinate if isotropic [m].
    intensity_noise : float
        Standard deviation of the intensity [counts].
    seed : int
        Same seed, same points. Give the two epochs different ones.
    pose : ndarray of shape (4, 4), optional
        Takes scene coordinates to the coordinates of this epoch: its registration error.
    noise_direction : {"normal", "isotropic"}
        Whether noise also moves points across the surface.
    correlated_share, correlation_length : float
        Share of the noise variance along the normal that is correlated [1], and over which lag [m].
    outliers : float
        Share of points that stand in front of the surface [1].
    holes : tuple of (q1, q2, radius)
        Discs without points [m].
    label : str
        Name of the epoch.

    Returns
    -------
    Epoch
        With intensity, in local coordinates with `scene.origin` as origin.
    """
    rng = np.random.default_rng(seed)
    q = jittered_grid(scene.surface, spacing, rng)
    for u, v, radius in holes:
        q = q[np.hypot(q[:, 0] - u, q[:, 1] - v) > radius]
    points, normal = scene.points(q, deformed=deformed), scene.normals(q, deformed=deformed)
    free = noise * float(np.sqrt(1.0 - correlated_share))
    if noise_direction == "isotropic":
        points = points + rng.normal(0.0, free, points.shape)
    else:
        points = points + normal * rng.normal(0.0, free, (len(q), 1))
    if correlated_share > 0:
        rms = noise * float(np.sqrt(correlated_share))
        points = points + normal * _wave(scene.surface, rms, correlation_length, rng)(q)[:, None]
    if outliers > 0:
        stray = rng.random(len(q)) < outliers
        points[stray] += normal[stray] * rng.uniform(*STRAY_HEIGHT, (int(stray.sum()), 1))
    intensity = scene.intensity(q) + rng.normal(0.0, intensity_noise, len(q))
    return local_epoch(scene, points, intensity, pose=pose, label=label)


def _wave(surface: Surface, rms: float, correlation_length: float, rng: np.random.Generator) -> RandomField:
    """Noise that neighbouring points share."""
    a0, a1, b0, b1 = surface.bounds
    seed = int(rng.integers(2**31))
    return RandomField((a1 - a0, b1 - b0), rms=rms, correlation_length=correlation_length, seed=seed)


def local_epoch(
    scene: Scene,
    points: FloatArray,
    intensity: FloatArray,
    *,
    pose: FloatArray | None = None,
    setup: NDArray[np.uint16] | None = None,
    classification: NDArray[np.uint8] | None = None,
    label: str = "",
) -> Epoch:
    """Move local scene points by `pose` and make an epoch of them that shares the origin of the scene."""
    T = np.eye(4) if pose is None else np.asarray(pose, dtype=np.float64)
    epoch = make_epoch(
        product(points, T[:3, :3].T) + T[:3, 3],
        origin=np.zeros(3),
        label=label or "scan",
        intensity=intensity.astype(np.float32),
        setup=setup,
        classification=classification,
    )
    # Not added to the points and taken off again: that would round them to the grid of large survey values.
    return Epoch(
        points=epoch.points,
        origin=np.asarray(scene.origin, dtype=np.float64),
        intensity=epoch.intensity,
        setup=epoch.setup,
        classification=epoch.classification,
        label=epoch.label,
    )
