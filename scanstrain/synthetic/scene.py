# SPDX-License-Identifier: MIT
"""A surface with its skin (relief, reflectance) and its motion: where every piece of material is at both epochs."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from scanstrain.synthetic.deformation import Deformation, Jet, Still
from scanstrain.synthetic.fields import RandomField
from scanstrain.synthetic.surfaces import FloatArray, Surface


@dataclass(frozen=True, slots=True)
class Scene:
    """An object before and after a known deformation, in local coordinates.

    The skin rides on the base surface: a place at height h over it moves from X + h n to x + h m, with n and m the
    unit normals before and after (Kirchhoff's hypothesis), so that a rigid motion moves the skin rigidly too.

    Parameters
    ----------
    surface : Surface
        The undeformed base.
    deformation : Deformation
        Motion of the base between the epochs.
    relief : RandomField, optional
        Height of the skin over the base [m].
    texture : RandomField, optional
        Reflectance relative to the mean, minus 1 [1].
    reflectance : float
        Mean intensity at normal incidence [counts].
    origin : tuple of float
        Survey coordinates of the local origin [m].
    """

    surface: Surface
    deformation: Deformation = field(default_factory=Still)
    relief: RandomField | None = None
    texture: RandomField | None = None
    reflectance: float = 1500.0
    origin: tuple[float, float, float] = (0.0, 0.0, 0.0)

    def intensity(self, q: FloatArray) -> FloatArray:
        """Return the intensity at normal incidence at `q` (n, 2), shape (n,) [counts]."""
        texture = 0.0 if self.texture is None else self.texture(q)
        return np.full(len(q), self.reflectance) * (1.0 + texture)

    def jet(self, q: FloatArray, *, deformed: bool) -> Jet:
        """Return the displacement and its derivatives at `q`; nothing moves before the deformation."""
        return (self.deformation if deformed else Still()).jet(self.surface, q)

    def normals(self, q: FloatArray, *, deformed: bool) -> FloatArray:
        """Return the unit normals of the base towards the free side, (n, 3)."""
        m = local_tangents(self.jet(q, deformed=deformed))[:, :, 2]
        return np.asarray(np.einsum("nij,nj->ni", self.surface.frames(q), m))

    def points(self, q: FloatArray, *, deformed: bool) -> FloatArray:
        """Return where the skin at the material coordinates `q` (n, 2) is, (n, 3) [m]."""
        return self.skin(q, deformed=deformed)[0]

    def skin(self, q: FloatArray, *, deformed: bool) -> tuple[FloatArray, FloatArray]:
        """Return the places of the skin (n, 3) [m] and its two tangents (n, 3, 2) [1].

        In the tangents the turning of the normal under the relief is left out: a part in a thousand of their slope.
        """
        F, jet = self.surface.frames(q), self.jet(q, deformed=deformed)
        T = local_tangents(jet)
        local, tangents = jet.value, T[:, :, :2]
        if self.relief is not None:
            height, slope = self.relief.with_gradient(q)
            local = local + height[:, None] * T[:, :, 2]
            tangents = tangents + T[:, :, 2:] * slope[:, None, :]
        return self.surface.points(q) + np.einsum("nij,nj->ni", F, local), np.einsum("nij,njk->nik", F, tangents)


def local_tangents(jet: Jet) -> FloatArray:
    """Return columns b1, b2 (moved tangents) and m (unit normal) in the undeformed local frame, (n, 3, 3)."""
    b1, b2 = jet.first[:, :, 0].copy(), jet.first[:, :, 1].copy()
    b1[:, 0] += 1.0
    b2[:, 1] += 1.0
    m = np.cross(b1, b2)
    m /= np.linalg.norm(m, axis=1, keepdims=True)
    return np.stack([b1, b2, m], axis=2)
