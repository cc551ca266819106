# SPDX-License-Identifier: MIT
"""A terrestrial scanner that looks at a scene: beams, occlusion, footprint, noise, intensity."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.synthetic.fixtures import Fixture
from scanstrain.synthetic.sampling import local_epoch
from scanstrain.synthetic.scene import Scene
from scanstrain.synthetic.surfaces import FloatArray

STRUCTURE, MIXED, NOTHING = -1, -2, -3
"""What a beam met, where it is not the number of a fixture."""

NEWTON_STEPS = 4
"""Each step shrinks the miss, 1e-2 m at first, by about 1e-3 or squares it: four reach rounding."""

EDGE_JUMP = 0.05
"""Neighbouring beams that differ by more range than this [m] on two objects may give a mixed echo."""

MIXED_SHARE = 0.25
"""Share of the beams at such an edge whose echo lies somewhere between the two."""

MIXED_REFLECTANCE = 0.5

BLOCK = 16384
"""Echoes that are solved for at once: their arrays stay in the processor's cache."""

COUNT_LIMIT = 65535


@dataclass(frozen=True, slots=True)
class Setup:
    """Where a scanner stands [m], its number (1 ...), and the window of azimuth and elevation it scans [rad]."""

    position: tuple[float, float, float]
    number: int
    azimuth: tuple[float, float] = (0.0, 2 * np.pi)
    elevation: tuple[float, float] = (-1.05, np.pi / 2)


@dataclass(frozen=True, slots=True)
class Scanner:
    """The instrument.

    Parameters
    ----------
    step : float
        Angle between beams, in azimuth and elevation [rad].
    range_noise : float
        Standard deviation of the range at normal incidence [m].
    incidence_growth : float
        The range noise grows by sqrt(1 + (growth * tan(incidence))^2) [1].
    angle_noise : float
        Standard deviation of each angle [rad].
    aperture, divergence : float
        Diameter of the beam at the exit [m] and its growth with range [rad]; texture is averaged over the spot.
    max_incidence : float
        Echoes at more oblique incidence are discarded [rad].
    full_range, range_power : float
        Intensity falls as (full_range / range)^power; a receiver that makes up for part of the loss has a power
        below 2.
    incidence_power : float
        Intensity falls as cos(incidence)^power; 1 is Lambert's law.
    intensity_noise : float
        Relative standard deviation of the intensity [1].
    """

    step: float = 6e-3
    range_noise: float = 5e-4
    incidence_growth: float = 0.6
    angle_noise: float = 4e-5
    aperture: float = 3.5e-3
    divergence: float = 3e-4
    max_incidence: float = 1.13
    full_range: float = 4.0
    range_power: float = 0.5
    incidence_power: float = 1.0
    intensity_noise: float = 0.02


@dataclass(frozen=True, slots=True)
class Scan:
    """An epoch and what only a simulation knows of it.

    Parameters
    ----------
    epoch : Epoch
        The noisy points, moved by the pose.
    time : ndarray of shape (n,)
        Seconds since the start.
    material : ndarray of shape (n, 2)
        Material coordinates that the beam met, NaN off the structure [m].
    clean : ndarray of shape (n, 3)
        The place met, without noise and pose, in scene coordinates [m].
    target : ndarray of shape (n,), int64
        -1 the structure, -2 a mixed echo, otherwise the number of the fixture.
    noise : ndarray of shape (n,)
        Standard deviation of the range that was simulated [m].
    """

    epoch: Epoch
    time: FloatArray
    material: FloatArray
    clean: FloatArray
    target: NDArray[np.int64]
    noise: FloatArray


@dataclass(slots=True)
class _Echoes:
    """Noise-free echoes of one set-up, one row a beam."""

    directions: FloatArray
    distance: FloatArray
    target: NDArray[np.int64]
    normal: FloatArray
    material: FloatArray
    intensity: FloatArray


def simulate_scan(
    scene: Scene,
    setups: Sequence[Setup],
    *,
    deformed: bool,
    seed: int,
    scanner: Scanner = Scanner(),
    fixtures: Sequence[Fixture] = (),
    spacing: float | None = None,
    pose: FloatArray | None = None,
    label: str = "",
) -> Scan:
    """Scan a scene from several set-ups and merge them, as an export from a registered project gives them.

    Parameters
    ----------
    scene : Scene
        Object and motion.
    setups : sequence of Setup
        In the order of scanning.
    deformed : bool
        Before (False) or after (True) the motion.
    seed : int
        Same seed, same bytes.
    scanner : Scanner
        The instrument.
    fixtures : sequence of Fixture
        What stands before the surface; never moves.
    spacing : float, optional
        Points that are denser than this [m] are thinned at random to it, set-up by set-up.
    pose : ndarray of shape (4, 4), optional
        Takes scene coordinates to those of this epoch: its registration error.
    label : str
        Name of the epoch.

    Returns
    -------
    Scan
        Points in scanning order, `setup` as numbered, `classification` 6 for the structure.
    """
    parts = []
    for setup in setups:
        rng = np.random.default_rng([seed, setup.number])
        parts.append(_one_setup(scene, setup, deformed, scanner, fixtures, spacing, rng))
    points, intensity, material, clean, target, noise, column = (
        np.concatenate(part) for part in zip(*parts, strict=True)
    )
    number = np.concatenate([np.full(len(p[0]), s.number, np.uint16) for p, s in zip(parts, setups, strict=True)])
    classes = np.array([fixture.classification for fixture in fixtures] + [1, 6], dtype=np.uint8)
    epoch = local_epoch(
        scene,
        points,
        intensity,
        pose=pose,
        setup=number,
        classification=classes[target],
        label=label,
    )
    return Scan(epoch, column + 600.0 * (number - number[0]), material, clean, target, noise)


def _one_setup(
    scene: Scene,
    setup: Setup,
    deformed: bool,
    scanner: Scanner,
    fixtures: Sequence[Fixture],
    spacing: float | None,
    rng: np.random.Generator,
) -> tuple[NDArray[np.generic], ...]:
    """Points, intensity, material, clean places, targets, range noise and time of one set-up."""
    start = np.asarray(setup.position, dtype=np.float64)
    directions, grid = _beams(setup, scanner.step, rng)
    echoes = _first_echoes(scene, start, directions, fixtures)
    _mix_edges(scene, echoes, grid, rng)
    cosine = np.clip(np.abs((echoes.normal * directions).sum(axis=1)), 1e-6, 1.0)
    keep = (echoes.target != NOTHING) & (cosine > np.cos(scanner.max_incidence))
    if spacing is not None:
        level = np.hypot(directions[:, 0], directions[:, 1])
        with np.errstate(invalid="ignore"):
            keep &= rng.random(len(keep)) * spacing**2 < (scanner.step * echoes.distance) ** 2 * level / cosine
    rows = np.flatnonzero(keep)
    _meet_skin(scene, start, echoes, rows[echoes.target[rows] == STRUCTURE], deformed)
    d, distance, normal = directions[rows], echoes.distance[rows], echoes.normal[rows]
    incidence = np.clip(np.abs((normal * d).sum(axis=1)), 0.05, 1.0)
    intensity = _average_spot(scene, scanner, echoes, rows)
    intensity *= incidence**scanner.incidence_power * (scanner.full_range / distance) ** scanner.range_power
    intensity *= 1 + scanner.intensity_noise * rng.standard_normal(len(rows))
    noise = scanner.range_noise * np.sqrt(1 + scanner.incidence_growth**2 * (1 / incidence**2 - 1))
    clean = start + distance[:, None] * d
    across, over = _perpendicular(d)
    wobble = distance[:, None] * scanner.angle_noise * rng.standard_normal((len(rows), 2))
    points = clean + d * (noise * rng.standard_normal(len(rows)))[:, None]
    points += across * wobble[:, :1] + over * wobble[:, 1:]
    column_time = 0.02 * (rows // grid[1])
    counts = np.clip(np.round(intensity), 1, COUNT_LIMIT)
    return points, counts, echoes.material[rows], clean, echoes.target[rows], noise, column_time


def _beams(setup: Setup, step: float, rng: np.random.Generator) -> tuple[FloatArray, tuple[int, int]]:
    """Return unit directions column by column, with a random start of the grid, and its shape."""
    phase = rng.random(2)
    low, high = np.array([setup.azimuth, setup.elevation]).T
    columns, rows = (int(n) for n in (high - low) // step)
    azimuth = low[0] + (np.arange(columns) + phase[0]) * step
    elevation = low[1] + (np.arange(rows) + phase[1]) * step
    a, e = (grid.ravel() for grid in np.meshgrid(azimuth, elevation, indexing="ij"))
    return np.stack([np.cos(e) * np.cos(a), np.cos(e) * np.sin(a), np.sin(e)], axis=1), (columns, rows)


def _first_echoes(scene: Scene, start: FloatArray, directions: FloatArray, fixtures: Sequence[Fixture]) -> _Echoes:
    """Let every beam meet the nearest of the base surface and the fixtures."""
    n = len(directions)
    distance, target = scene.surface.ranges(start, directions), np.full(n, STRUCTURE)
    with np.errstate(invalid="ignore"):
        material, _ = scene.surface.project(start + distance[:, None] * directions)
        missed = ~(np.isfinite(distance) & (distance > 0) & _inside(scene, material))
    distance[missed], target[missed], material[missed] = np.inf, NOTHING, np.nan
    normal, reflectance = np.zeros((n, 3)), np.zeros(n)
    normal[~missed] = scene.surface.frames(material[~missed])[:, :, 2]
    for number, fixture in enumerate(fixtures):
        met, face = fixture.hit(start, directions)
        near = met < distance
        distance[near], normal[near], target[near] = met[near], face[near], number
        reflectance[near], material[near] = fixture.reflectance * scene.reflectance, np.nan
    return _Echoes(directions, distance, target, normal, material, reflectance)


def _inside(scene: Scene, q: FloatArray) -> NDArray[np.bool_]:
    a0, a1, b0, b1 = scene.surface.bounds
    u, v = q.T
    return np.asarray((u >= a0) & (u <= a1) & (v >= b0) & (v <= b1))


def _meet_skin(scene: Scene, start: FloatArray, echoes: _Echoes, rows: NDArray[np.int64], deformed: bool) -> None:
    """Move the echoes `rows` from the base to the moved skin: start + distance * direction = skin(q), by Newton."""
    if len(rows) > BLOCK:
        for first in range(0, len(rows), BLOCK):
            _meet_skin(scene, start, echoes, rows[first : first + BLOCK], deformed)
        return
    d, q, distance = echoes.directions[rows], echoes.material[rows], echoes.distance[rows]
    for _ in range(NEWTON_STEPS):
        points, tangents = scene.skin(q, deformed=deformed)
        miss = points - start - distance[:, None] * d
        step = np.linalg.solve(np.concatenate([tangents, -d[:, :, None]], axis=2), -miss[:, :, None])[:, :, 0]
        q, distance = q + step[:, :2], distance + step[:, 2]
    normal = np.cross(tangents[:, :, 0], tangents[:, :, 1])
    echoes.normal[rows] = normal / np.linalg.norm(normal, axis=1, keepdims=True)
    echoes.material[rows], echoes.distance[rows] = q, distance


def _mix_edges(scene: Scene, echoes: _Echoes, grid: tuple[int, int], rng: np.random.Generator) -> None:
    """Put some beams at the edge of an object between it and what lies behind, as a split footprint does."""
    number = np.arange(len(echoes.distance)).reshape(grid)
    for here, next_ in ((number[:, :-1], number[:, 1:]), (number[:-1], number[1:])):
        a, b = here.ravel(), next_.ravel()
        with np.errstate(invalid="ignore"):
            jump = np.abs(echoes.distance[a] - echoes.distance[b])
        edge = (jump > EDGE_JUMP) & np.isfinite(jump) & (echoes.target[a] != echoes.target[b])
        draw, weight = rng.random((2, len(a)))
        split = edge & (draw < MIXED_SHARE)
        a, b, w = a[split], b[split], weight[split]
        echoes.distance[a] = w * echoes.distance[a] + (1 - w) * echoes.distance[b]
        echoes.intensity[a] = MIXED_REFLECTANCE * scene.reflectance
        echoes.target[a], echoes.material[a] = MIXED, np.nan


def _average_spot(scene: Scene, scanner: Scanner, echoes: _Echoes, rows: NDArray[np.int64]) -> FloatArray:
    """Return the intensity at normal incidence of the echoes `rows`, averaged over the laser spot.

    Four places at diameter / sqrt(8) have the second moment of a uniform disc.
    """
    values = echoes.intensity[rows].copy()
    on = echoes.target[rows] == STRUCTURE
    at = rows[on]
    if not len(at):
        return values
    d, n, q = echoes.directions[at], echoes.normal[at], echoes.material[at]
    radius = (scanner.aperture + scanner.divergence * echoes.distance[at]) / np.sqrt(8)
    axes = scene.surface.frames(q)[:, :, :2]
    total = np.zeros(len(at))
    for side in _perpendicular(d):
        # The spot on an inclined surface: each ray of the beam runs on along d until it meets the tangent plane.
        reach = side - d * ((side * n).sum(axis=1) / (d * n).sum(axis=1))[:, None]
        offset = np.einsum("nij,ni->nj", axes, reach) * radius[:, None]
        total += scene.intensity(q + offset) + scene.intensity(q - offset)
    values[on] = total / 4
    return values


def _perpendicular(d: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Two unit vectors across each direction: level, and along the elevation."""
    level = np.stack([-d[:, 1], d[:, 0], np.zeros(len(d))], axis=1)
    level /= np.maximum(np.linalg.norm(level, axis=1, keepdims=True), 1e-12)
    return level, np.cross(d, level)
