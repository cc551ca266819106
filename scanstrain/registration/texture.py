# SPDX-License-Identifier: MIT
"""Where the surfaces leave a motion open, returned intensity may fix it: capture, fit, acceptance."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import voxel_keys
from scanstrain.epoch import Epoch
from scanstrain.registration.fit import align, motion, step_of
from scanstrain.registration.options import Options
from scanstrain.registration.rigid import inverse
from scanstrain.registration.start import held_covariance
from scanstrain.registration.surfaces import UNUSABLE, USABLE, Surface
from scanstrain.registration.texture_fit import Nodes, Texture, TextureFit, covariance_along, fit_texture
from scanstrain.registration.texture_image import Image, blocks_of, level_width, make_image, view
from scanstrain.registration.texture_search import search
from scanstrain.registration.weak import reach, separate
from scanstrain.registration.work import Work

FloatArray = NDArray[np.float64]

MOST_NODES, SEARCH_NODES = 8000, 1000
"""Places that are fitted and that are searched with: precision is ample with either."""
STRIKING = 0.5
"""Correlation of images that surely show one pattern. A pattern that repeats agrees everywhere, so that its peak does
not stand out: it is not used, but named."""
ROUNDS = 2
"""Surfaces and intensity are fitted in turn so often: a long slide along an imperfect axis moves the surface."""


def use_texture(work: Work, reference: Epoch, current: Epoch, options: Options) -> None:
    """Move along open motions to where the intensities agree, and take those that they fix out of `work.weak`.

    Accepted are motions along which the agreement stands out and does not repeat within the capture range, and whose
    standard error at the place moved most is within `work.budget`. The others stay where they were.

    Parameters
    ----------
    work : Work
        With weak motions at their start value.
    reference, current : Epoch
    options : Options
    """
    made = _images(work, reference, current)
    if made is None:
        return
    nodes, mine, theirs = made
    before, U = work.T, separate(work.weak)
    far = reach(U, work.fit.rows.place[work.fit.weight > 0], work.metric)
    places = np.ascontiguousarray(nodes.place[:: max(1, len(nodes.place) // SEARCH_NODES)])
    peak = search(mine, theirs, places, work.T, U / far, work.metric, options.capture_range)
    striking = peak.significant or peak.height > STRIKING
    found = _refine(work, nodes, theirs, U, U @ (peak.at / far)) if striking else None
    if found is None:
        return
    start = U @ held_covariance(options.start, U, far, work.metric, options.capture_range) @ U.T
    sd = np.sqrt(np.diag(covariance_along(U, found, start))) * far
    good = sd <= work.budget
    fixed = good & ~peak.repeats & peak.significant
    offset = U.T @ motion(found.T @ inverse(before), work.metric)
    aside = U[:, ~fixed] @ offset[~fixed]
    work.T = step_of(-aside, work.metric) @ found.T if fixed.any() else before
    work.weak = np.ascontiguousarray(U[:, ~fixed])
    work.texture = Texture(nodes, theirs, U[:, fixed], U[:, good & peak.repeats], U, aside, start, found)


def settle_texture(work: Work) -> None:
    """Fit the fixed motions once more under the finished fit of the surfaces."""
    texture = work.texture
    if texture is None or not texture.fixed.shape[1]:
        return
    nodes = texture.nodes if work.keep is None else texture.nodes.among(work.keep)
    shift = step_of(texture.aside, work.metric)
    fit = fit_texture(nodes, texture.theirs, shift @ work.T, texture.searched, work.metric)
    if fit is None:
        return
    step = texture.fixed.T @ motion(fit.T @ inverse(shift @ work.T), work.metric)
    work.T = step_of(texture.fixed @ step, work.metric) @ work.T
    texture.fit = fit


def _spacing(surface: Surface) -> float:
    """Point spacing from the points in whole blocks [m]."""
    whole = surface.state == USABLE
    return surface.width / float(np.sqrt(np.median(surface.cells.weight[whole]))) if whole.any() else surface.width


def _images(work: Work, reference: Epoch, current: Epoch) -> tuple[Nodes, Image, Image] | None:
    """Make both images and the places to compare at, None without usable intensity."""
    spacing = max(_spacing(work.reference), _spacing(work.current))
    mine = make_image(reference.points, reference.intensity, spacing)
    theirs = make_image(current.points, current.intensity, spacing) if mine is not None else None
    if mine is None or theirs is None:
        return None
    surface = work.reference
    block = blocks_of(mine.cells.position, surface.cells.key, surface.width)
    usable = (block >= 0) & (surface.state[block] != UNUSABLE)
    if work.keep is not None:
        usable &= work.keep[block]
    chosen = np.flatnonzero(usable)
    chosen = chosen[:: max(1, len(chosen) // MOST_NODES)]
    if not len(chosen):
        return None
    block = block[chosen]
    normal = surface.cells.normal[block]
    place = mine.cells.position[chosen] + _aside(normal, mine.cells.resolution)
    _, window = np.unique(voxel_keys(place, level_width(mine.cells.resolution)), return_inverse=True)
    seen = view(mine, place, normal)
    return Nodes(place, normal, block, work.patch[block], work.patches, window.ravel(), seen), mine, theirs


def _aside(normal: FloatArray, width: float) -> FloatArray:
    """Steps within a cell along the surface, evenly spread (plastic-number sequence, Roberts 2018, from memory).

    At its own cells an image is a little sharper than elsewhere, which the other image is not: that would look like
    motion wherever the texture ends.
    """
    turn = np.arange(1, len(normal) + 1)[:, None] * np.array([0.7548776662466927, 0.5698402909980532])
    step = (turn % 1.0 - 0.5) * width
    first = np.cross(normal, np.eye(3)[np.abs(normal).argmin(axis=1)])
    first /= np.linalg.norm(first, axis=1, keepdims=True)
    return np.asarray(first * step[:, :1] + np.cross(normal, first) * step[:, 1:])


def _refine(work: Work, nodes: Nodes, theirs: Image, U: FloatArray, start: FloatArray) -> TextureFit | None:
    """Fit surfaces and intensity in turn from a captured motion."""
    T, fit = step_of(start, work.metric) @ work.T, None
    for _ in range(ROUNDS):
        surfaces = align(
            work.reference,
            work.current,
            T @ inverse(work.current.T_grid_epoch),
            metric=work.metric,
            budget=np.inf,
            tolerance=1e-4 * work.reference.width,
            limit=20,
            strong=(work.strong, work.weak),
            keep=work.keep,
        )
        fit = fit_texture(nodes, theirs, surfaces.T_ref_grid @ work.current.T_grid_epoch, U, work.metric)
        if fit is None:
            return None
        T = fit.T
    return fit
