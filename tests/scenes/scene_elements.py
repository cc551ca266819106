# SPDX-License-Identifier: MIT
"""Displacements of linear-elastic bodies by finite elements (scikit-fem), as motions that the synthetic scanner takes.

What a gauge should show is an average: the strain over its patch with the weights of an affine fit, see `patch_strain`.
"""

from __future__ import annotations

from functools import cached_property

import numpy as np
from scipy.interpolate import CubicSpline, RectBivariateSpline
from skfem import Basis, ElementQuad2, ElementVector, FacetBasis, LinearForm, MeshQuad, condense, enforce, solve
from skfem.models.elasticity import lame_parameters, linear_elasticity

from scanstrain.synthetic import truth_at
from scanstrain.synthetic.deformation import Jet, from_components, zeros

YOUNG, POISSON = 30e9, 0.2
"""Of concrete [Pa], [1]; displacements are prescribed or scaled, so that only the ratio counts."""


def _stiffness(basis, *, plane_stress):
    """Stiffness of a plane body; plane stress has 2 l m / (l + 2 m) for the first Lame constant (any textbook)."""
    first, second = lame_parameters(YOUNG, POISSON)
    if plane_stress:
        first = 2 * first * second / (first + 2 * second)
    return linear_elasticity(first, second).assemble(basis)


def _components(basis, u):
    """Displacement of every node (nodes, 2) and where the nodes are (nodes, 2)."""
    parts = [np.concatenate([d[k] for d in (basis.nodal_dofs, basis.facet_dofs, basis.interior_dofs)]) for k in (0, 1)]
    return np.stack([u[part] for part in parts], axis=1), basis.doflocs[:, parts[0]].T


class SettledPanel:
    """A wall panel in plane stress whose foot settles on one side: in-plane motion, q1 along the foot and q2 upwards.

    Parameters
    ----------
    length, height : float
        Of the panel [m].
    settlement : float
        Of the right end of the foot [m]; the left end stays, between them a smooth step.
    cells : int
        Elements (biquadratic) along the foot.
    """

    def __init__(self, length, height, settlement, cells=48):
        self.length, self.height, self.settlement, self.cells = length, height, settlement, cells

    @cached_property
    def splines(self):
        """Displacements of the nodes, joined by bicubic splines: two functions of (q1, q2)."""
        rows = round(self.cells * self.height / self.length)
        mesh = MeshQuad.init_tensor(np.linspace(0, self.length, self.cells + 1), np.linspace(0, self.height, rows + 1))
        basis = Basis(mesh, ElementVector(ElementQuad2()))
        u, foot = basis.zeros(), basis.get_dofs(lambda x: np.isclose(x[1], 0.0)).all()
        share = np.clip(basis.doflocs[0, foot] / self.length, 0, 1)
        upright = np.isin(foot, np.concatenate([basis.nodal_dofs[1], basis.facet_dofs[1]]))
        u[foot] = np.where(upright, -self.settlement * share**3 * (10 - 15 * share + 6 * share**2), 0.0)
        u = solve(*condense(_stiffness(basis, plane_stress=True), x=u, D=foot))
        moved, place = _components(basis, u)
        order = np.lexsort((place[:, 1], place[:, 0]))
        x, y = np.linspace(0, self.length, 2 * self.cells + 1), np.linspace(0, self.height, 2 * rows + 1)
        grid = moved[order].reshape(len(x), len(y), 2)
        return [RectBivariateSpline(x, y, grid[:, :, k], s=0) for k in (0, 1)]

    def jet(self, surface, q):
        """Return the motion in the plane of the wall."""
        jet = zeros(len(q))
        for k, spline in enumerate(self.splines):
            jet.value[:, k] = spline.ev(*q.T)
            jet.first[:, k, 0], jet.first[:, k, 1] = spline.ev(*q.T, dx=1), spline.ev(*q.T, dy=1)
            for column, (dx, dy) in enumerate(((2, 0), (1, 1), (0, 2))):
                jet.second[:, k, column] = spline.ev(*q.T, dx=dx, dy=dy)
        return from_components(surface, jet)


class LoadedRing:
    """The inside of a thick ring in plane strain under an outer pressure p cos 2t: all lengths of axis move alike.

    Parameters
    ----------
    inner, thickness : float
        Radius of the inside and thickness of the ring [m].
    movement : float
        Outward movement of the inside at t = 0 [m]; the load follows from it.
    cells : int
        Elements (biquadratic, straight edges) round the ring.
    """

    def __init__(self, inner, thickness, movement, cells=240):
        self.inner, self.thickness, self.movement, self.cells = inner, thickness, movement, cells

    @cached_property
    def solution(self):
        """Angles of the inner nodes, and their displacements outwards and along the arc, both (cells + 1,)."""
        layers, n = 4, self.cells
        angle, radius = np.arange(n) * 2 * np.pi / n, np.linspace(self.inner, self.inner + self.thickness, layers + 1)
        p = np.stack([np.outer(radius, np.cos(angle)).ravel(), np.outer(radius, np.sin(angle)).ravel()])
        k, j = (each.ravel() for each in np.meshgrid(np.arange(layers), np.arange(n), indexing="ij"))
        onward = (j + 1) % n
        t = np.stack([k * n + j, (k + 1) * n + j, (k + 1) * n + onward, k * n + onward])
        mesh = MeshQuad(p, t)
        element = ElementVector(ElementQuad2())
        basis = Basis(mesh, element)
        outside = mesh.facets_satisfying(
            lambda x: np.hypot(*x) > self.inner + 0.99 * self.thickness, boundaries_only=True
        )

        @LinearForm
        def pressure(v, w):
            return (v[0] * w.n[0] + v[1] * w.n[1]) * np.cos(2 * np.arctan2(w.x[1], w.x[0]))

        # three nodes on the axes of symmetry hold the ring without any force
        held = [basis.nodal_dofs[1, 0], basis.nodal_dofs[1, n // 2], basis.nodal_dofs[0, n // 4]]
        load = pressure.assemble(FacetBasis(mesh, element, facets=outside))
        u = solve(*enforce(_stiffness(basis, plane_stress=False), load, D=np.array(held)))
        moved = u[basis.nodal_dofs[:, :n]]
        out = moved[0] * np.cos(angle) + moved[1] * np.sin(angle)
        along = moved[1] * np.cos(angle) - moved[0] * np.sin(angle)
        closed = [np.append(each, each[0]) * (self.movement / out[0]) for each in (out, along)]
        return np.append(angle, 2 * np.pi), *closed

    def jet(self, surface, q):
        """Return the motion of the inside, along the arc and towards the axis."""
        angle, out, along = self.solution
        k, jet = surface.curvature, zeros(len(q))
        t = (k * q[:, 0]) % (2 * np.pi)
        for row, values in ((0, along), (2, -out)):
            spline = CubicSpline(angle, values, bc_type="periodic")
            jet.value[:, row], jet.first[:, row, 0], jet.second[:, row, 0] = (
                spline(t), k * spline(t, 1), k**2 * spline(t, 2),
            )  # fmt: skip
        return from_components(surface, Jet(jet.value, jet.first, jet.second))


STEPS = 24
"""Places across a patch in the average of `patch_strain`."""


def patch_strain(scene, places, radius):
    """Exact strain averaged over discs of the surface with the weights of an affine fit.

    The slope of a least-squares plane through u over a disc is the mean of the derivative of u with weights
    `radius^2 - distance^2` (integration by parts), so these are the weights with which a gauge averages.

    Parameters
    ----------
    scene : Scene
    places : ndarray of shape (n, 2)
        Material coordinates of the gauges [m].
    radius : float
        Half of the gauge length [m].

    Returns
    -------
    ndarray of shape (n, 3)
        Stretch less one (Biot) along u and v and tensor shear [1].
    """
    step = ((np.arange(STEPS) + 0.5) / STEPS * 2 - 1) * radius
    offset = np.stack(np.meshgrid(step, step), axis=-1).reshape(-1, 2)
    weight = np.clip(radius**2 - (offset**2).sum(axis=1), 0, None)
    offset, weight = offset[weight > 0], weight[weight > 0] / weight.sum()
    exact = truth_at(scene, (places[:, None] + offset).reshape(-1, 2), measure="biot")
    parts = [exact[name].reshape(len(places), -1) @ weight for name in ("strain_u", "strain_v", "shear_uv")]
    return np.stack(parts, axis=1)
