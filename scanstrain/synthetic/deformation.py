# SPDX-License-Identifier: MIT
"""Displacement fields in closed form, with their exact first and second derivatives along a surface."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from scanstrain.synthetic.surfaces import FloatArray, Surface, product

Pair = tuple[float, float]


@dataclass(frozen=True, slots=True)
class Jet:
    """A displacement vector and its derivatives along the surface, all resolved in the local frame (e1, e2, n).

    Parameters
    ----------
    value : ndarray of shape (n, 3)
        Displacement [m].
    first : ndarray of shape (n, 3, 2)
        Derivatives of the vector along q1 and q2 [1], the turning of the frame included.
    second : ndarray of shape (n, 3, 3)
        Second derivatives 11, 12 and 22 of the vector [1/m].
    """

    value: FloatArray
    first: FloatArray
    second: FloatArray


class Deformation(Protocol):
    """Anything that can say how the material moved."""

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return displacement and derivatives at the material coordinates `q` (n, 2) [m]."""
        ...


def zeros(n: int) -> Jet:
    """Return the jet of no motion at `n` places."""
    return Jet(np.zeros((n, 3)), np.zeros((n, 3, 2)), np.zeros((n, 3, 3)))


def from_components(surface: Surface, c: Jet) -> Jet:
    """Turn derivatives of the components (c1, c2, cn) into derivatives of the vector c1 e1 + c2 e2 + cn n.

    Along q1 the frame turns: d e1 = k n, d n = -k e1 (k the curvature), so D1 c = c,1 + W c with
    W = [[0, 0, -k], [0, 0, 0], [k, 0, 0]] and D2 c = c,2 (Frenet formulas of a circle).
    """
    k = surface.curvature
    if k == 0:
        return c
    first, second = c.first.copy(), c.second.copy()
    for row, other, turn in ((0, 2, -k), (2, 0, k)):
        first[:, row, 0] += turn * c.value[:, other]
        second[:, row, 0] += 2 * turn * c.first[:, other, 0] - k**2 * c.value[:, row]
        second[:, row, 1] += turn * c.first[:, other, 1]
    return Jet(c.value, first, second)


@dataclass(frozen=True, slots=True)
class Still:
    """Nothing moves."""

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return zeros."""
        del surface
        return zeros(len(q))


@dataclass(frozen=True, slots=True)
class Linear:
    """Components that are linear in the material coordinates: stretch, shear, spin, tilt, lean, or a shift.

    Parameters
    ----------
    gradient : tuple of three pairs
        Rows of components 1, 2, n; columns of the coordinates q1, q2 [1].
    centre : pair of float
        Where the displacement is `offset` [m].
    offset : tuple of float
        Displacement there [m].
    """

    gradient: tuple[Pair, Pair, Pair] = ((0.0, 0.0), (0.0, 0.0), (0.0, 0.0))
    centre: Pair = (0.0, 0.0)
    offset: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return u = offset + G (q - centre)."""
        G, c = np.asarray(self.gradient), zeros(len(q))
        c.value[:] = np.asarray(self.offset) + product(q - np.asarray(self.centre), G.T)
        c.first[:] = G
        return from_components(surface, c)


@dataclass(frozen=True, slots=True)
class Rigid:
    """A finite rigid motion x -> R (x - pivot) + pivot + translation of the whole surface."""

    rotation_vector: tuple[float, float, float] = (0.0, 0.0, 0.0)
    translation: tuple[float, float, float] = (0.0, 0.0, 0.0)
    pivot: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the motion of each place and of its tangents."""
        turn = rotation(self.rotation_vector) - np.eye(3)
        F = surface.frames(q)
        moved = product(surface.points(q) - np.asarray(self.pivot), turn.T) + np.asarray(self.translation)
        local = np.asarray(F.transpose(0, 2, 1) @ turn @ F)
        jet = zeros(len(q))
        jet.value[:] = np.einsum("nij,ni->nj", F, moved)
        jet.first[:] = local[:, :, :2]
        jet.second[:, :, 0] = surface.curvature * local[:, :, 2]
        return jet


@dataclass(frozen=True, slots=True)
class Ovalisation:
    """A ring that changes shape at constant length: u_r = a cos(m t) outwards, u_t = -(a/m) sin(m t).

    The inextensional modes of a ring (Rayleigh 1894); m = 2 turns the circle into an oval.
    """

    amplitude: float
    mode: int = 2
    phase: float = 0.0

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the motion at the angles t = curvature * q1 - phase."""
        k, m, a = surface.curvature, self.mode, self.amplitude
        t = m * (k * q[:, 0] - self.phase)
        cos, sin, jet = np.cos(t), np.sin(t), zeros(len(q))
        jet.value[:, 0], jet.value[:, 2] = -(a / m) * sin, -a * cos
        jet.first[:, 0, 0], jet.first[:, 2, 0] = -a * k * cos, a * m * k * sin
        jet.second[:, 0, 0], jet.second[:, 2, 0] = a * m * k**2 * sin, a * (m * k) ** 2 * cos
        return from_components(surface, jet)


@dataclass(frozen=True, slots=True)
class Bulge:
    """A sinusoidal bulge w = w0 sin(pi x / a) sin(pi y / b) towards the free side over a panel."""

    amplitude: float
    corner: Pair
    size: Pair

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the bulge inside the panel and rest outside it."""
        w = np.pi / np.asarray(self.size)
        p = (q - np.asarray(self.corner)) * w
        inside = ((p >= 0) & (p <= np.pi)).all(axis=1) * self.amplitude
        (sx, sy), (cx, cy), jet = np.sin(p).T, np.cos(p).T, zeros(len(q))
        jet.value[:, 2] = inside * sx * sy
        jet.first[:, 2] = np.stack([w[0] * cx * sy, w[1] * sx * cy], 1) * inside[:, None]
        second = np.stack([-(w[0] ** 2) * sx * sy, w[0] * w[1] * cx * cy, -(w[1] ** 2) * sx * sy], 1)
        jet.second[:, 2] = second * inside[:, None]
        return from_components(surface, jet)


@dataclass(frozen=True, slots=True)
class Dome:
    """A round bulge w0 (1 - r^2 / radius^2)^4 towards the free side, smooth where it ends."""

    amplitude: float
    centre: Pair
    radius: float

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the bulge inside the radius and rest outside it."""
        p = (q - np.asarray(self.centre)) / self.radius
        rest, jet = np.clip(1 - (p**2).sum(axis=1), 0.0, None), zeros(len(q))
        w = self.amplitude * rest**4
        slope = -8 * self.amplitude / self.radius * rest**3
        bend = 48 * self.amplitude / self.radius**2 * rest**2
        along = slope / self.radius
        jet.value[:, 2] = w
        jet.first[:, 2] = slope[:, None] * p
        jet.second[:, 2, 0] = along + bend * p[:, 0] ** 2
        jet.second[:, 2, 1] = bend * p[:, 0] * p[:, 1]
        jet.second[:, 2, 2] = along + bend * p[:, 1] ** 2
        return from_components(surface, jet)


@dataclass(frozen=True, slots=True)
class Cantilever:
    """A wall fixed at its foot q2 = 0 under even load: w = tip (z^4 - 4 z^3 + 6 z^2) / 3, z = q2 / height."""

    tip: float
    height: float

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the lean towards the free side (handbook beam table)."""
        z, h, jet = q[:, 1] / self.height, self.height, zeros(len(q))
        jet.value[:, 2] = self.tip * (z**4 - 4 * z**3 + 6 * z**2) / 3
        jet.first[:, 2, 1] = self.tip / h * (4 * z**3 - 12 * z**2 + 12 * z) / 3
        jet.second[:, 2, 2] = self.tip / h**2 * 4 * (1 - z) ** 2
        return from_components(surface, jet)


@dataclass(frozen=True, slots=True)
class StrainBump:
    """Uniaxial strain peak * exp(-4 ln 2 (x / width)^2) along q1; `width` is its full width at half height [m]."""

    peak: float
    centre: float
    width: float

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the displacement that integrates the strain from the centre."""
        from scipy.special import erf

        b = 2 * np.sqrt(np.log(2)) / self.width
        x, jet = b * (q[:, 0] - self.centre), zeros(len(q))
        strain = self.peak * np.exp(-(x**2))
        jet.value[:, 0] = self.peak * np.sqrt(np.pi) / (2 * b) * erf(x)
        jet.first[:, 0, 0] = strain
        jet.second[:, 0, 0] = -2 * b * x * strain
        return from_components(surface, jet)


@dataclass(frozen=True, slots=True)
class Sum:
    """Several displacement fields added."""

    parts: tuple[Deformation, ...]

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the sum of the parts."""
        total = zeros(len(q))
        for part in self.parts:
            jet = part.jet(surface, q)
            total = Jet(total.value + jet.value, total.first + jet.first, total.second + jet.second)
        return total


@dataclass(frozen=True, slots=True)
class Windowed:
    """A displacement field that fades to exactly nothing outside a rectangle, twice continuously differentiable.

    Parameters
    ----------
    inner : Deformation
        The field that fades.
    low, high : pair of float
        Corners of the rectangle [m]; infinite where a side shall not fade.
    ramp : pair of float
        Length over which each side rises from 0 to 1 [m].
    """

    inner: Deformation
    low: Pair
    high: Pair
    ramp: Pair

    def jet(self, surface: Surface, q: FloatArray) -> Jet:
        """Return the product of window and field by the product rule."""
        (a, a1, a2), (b, b1, b2) = (_window(q[:, i], self.low[i], self.high[i], self.ramp[i]) for i in (0, 1))
        w, jet = a * b, self.inner.jet(surface, q)
        d = np.stack([a1 * b, a * b1], axis=1)
        dd = np.stack([a2 * b, a1 * b1, a * b2], axis=1)
        u, first = jet.value[:, :, None], jet.first
        cross = np.stack(
            [
                2 * d[:, None, 0] * first[:, :, 0],
                d[:, None, 0] * first[:, :, 1] + d[:, None, 1] * first[:, :, 0],
                2 * d[:, None, 1] * first[:, :, 1],
            ],
            axis=2,
        )
        return Jet(
            w[:, None] * jet.value,
            w[:, None, None] * first + u * d[:, None, :],
            w[:, None, None] * jet.second + u * dd[:, None, :] + cross,
        )


def _window(x: FloatArray, low: float, high: float, ramp: float) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Rise and fall by the step s^3 (10 - 15 s + 6 s^2), with first and second derivative."""
    up, fall = np.clip((x - low) / ramp, 0, 1), np.clip((high - x) / ramp, 0, 1)
    f, f1, f2 = _step(up)
    g, g1, g2 = _step(fall)
    return f * g, (f1 * g - f * g1) / ramp, (f2 * g - 2 * f1 * g1 + f * g2) / ramp**2


def _step(s: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    return s**3 * (10 - 15 * s + 6 * s**2), 30 * (s * (1 - s)) ** 2, 60 * s * (1 - s) * (1 - 2 * s)


def rotation(vector: tuple[float, float, float] | NDArray[np.float64]) -> FloatArray:
    """Return the 3x3 rotation of a rotation vector [rad] (Rodrigues' formula)."""
    w = np.asarray(vector, dtype=np.float64)
    angle = float(np.linalg.norm(w))
    if angle == 0:
        return np.eye(3)
    x, y, z = w / angle
    K = np.array([[0.0, -z, y], [z, 0.0, -x], [-y, x, 0.0]])
    return np.asarray(np.eye(3) + np.sin(angle) * K + (1 - np.cos(angle)) * (K @ K))
