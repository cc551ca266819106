# SPDX-License-Identifier: MIT
"""Where the fine fit begins: the pose as it is where that serves, otherwise one found from surface features."""

from __future__ import annotations

from contextlib import suppress
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import BLOCK_WIDTH, make_cells
from scanstrain.errors import MissingDependencyError, OverlapError, explain
from scanstrain.registration.fit import align, biweight, level_metric, rough
from scanstrain.registration.match import Metric, observe, pair
from scanstrain.registration.rigid import inverse
from scanstrain.registration.surfaces import MIN_COUNT, UNUSABLE, Surface, judged

FloatArray = NDArray[np.float64]

SHARE_AT_ONCE = 0.5
"""Share of well matched surface above which the pose as given is believed and no other is looked for."""
BETTER = 1.3
"""How many times the share of the pose as given another pose must reach."""
FACING = 0.1
"""Part of the blocks that a facing must have to be counted."""
SHARE_NEEDED = 0.1
"""Share of well matched surface below which no start is believed."""
FEATURE_BLOCKS = (6000, 2500, 1000)
"""Blocks that the surface is cut into for features, from detailed to robust: three scales, the best one wins."""
CLOSE = 0.25
"""A match is close within this part of a block width (or three standard deviations)."""


def share_close(reference: Surface, current: Surface, T_ref_grid: FloatArray, *, close: float = CLOSE) -> float:
    """Robust share of the smaller surface that lies close to the other with like normals.

    The mean over the three facings that a surface may have, so that a wrong pose which keeps the floor on the floor
    does not score by the size of the floor.

    Parameters
    ----------
    reference, current : Surface
    T_ref_grid : ndarray of shape (4, 4)
        Takes the current surface's grid frame to the reference frame.
    close : float
        What is close, in block widths; three standard deviations always are.

    Returns
    -------
    float
        1 for surfaces that fit everywhere, 0 without any match.
    """
    pairs = pair(reference, current, T_ref_grid)
    flat = reference.state != UNUSABLE
    if not len(pairs) or not current.flat():
        return 0.0
    rows = observe(reference, current, pairs, T_ref_grid, Metric(np.zeros(3), 1.0))
    limit = np.maximum(close * reference.width, 3 * rows.sd)
    facing = np.abs(reference.cells.normal).argmax(axis=1)
    blocks = np.bincount(facing[flat], minlength=3).astype(float)
    met = np.bincount(facing[rows.block], biweight(rows.residual / limit), minlength=3)
    counts = blocks >= FACING * blocks.sum()
    smaller = min(1.0, current.flat() / blocks.sum())
    return float(min((met[counts] / blocks[counts]).mean() / smaller, 1.0))


def settle(reference: list[Surface], current: list[Surface], T_ref_grid: FloatArray) -> tuple[FloatArray, float]:
    """Improve a start roughly and say how well the surfaces then fit.

    Parameters
    ----------
    reference, current : list of Surface
        From wide to fine.
    T_ref_grid : ndarray of shape (4, 4)

    Returns
    -------
    T_ref_grid : ndarray of shape (4, 4)
    share : float
        `share_close` on the finest of the given levels.
    """
    T = T_ref_grid
    for mine, theirs in zip(reference, current, strict=True):
        try:
            T = align(mine, theirs, T, metric=level_metric(mine), **rough(mine, 20)).T_ref_grid
        except OverlapError:
            # Too few of the wide blocks meet: a narrower level may still serve.
            continue
    return T, share_close(reference[-1], current[-1], T)


def feature_starts(reference: Surface, current: Surface, seed: int) -> list[FloatArray]:
    """Propose poses from features of the two surfaces, at several scales.

    Fast point feature histograms (Rusu et al. 2009) matched by random sampling, through open3d with a fixed seed.
    Features need normals that point to one side: towards the middle of the cloud, and as a second try consistently
    from neighbour to neighbour.

    Parameters
    ----------
    reference, current : Surface
        Finest level.
    seed : int

    Returns
    -------
    list of ndarray of shape (4, 4)
        Each takes the current surface's grid frame to the reference frame.

    Raises
    ------
    MissingDependencyError
        open3d or a system library that it needs is not there.
    """
    o3d = _open3d()
    with o3d.utility.VerbosityContextManager(o3d.utility.VerbosityLevel.Error):
        return _propose(o3d, reference, current, seed)


def _propose(o3d: Any, reference: Surface, current: Surface, seed: int) -> list[FloatArray]:
    found = []
    area = reference.flat() * reference.width**2
    for wanted in FEATURE_BLOCKS:
        width = max(float(np.sqrt(area / wanted)), reference.width)
        for consistent in (False, True):
            clouds = [_feature_cloud(o3d, s, width, consistent) for s in (current, reference)]
            if min(len(cloud.points) for cloud, _ in clouds) < 10:
                continue
            o3d.utility.random.seed(seed)
            found.append(_ransac(o3d, clouds, width))
    return found


def _open3d() -> Any:
    try:
        import open3d
    except (ImportError, OSError) as reason:
        raise MissingDependencyError(
            explain(
                "coarse registration",
                "the package open3d and its system libraries",
                str(reason),
                "pip install open3d and, on a machine without X11/GL, apt install libx11-6 libgomp1 libgl1 "
                '(open3d 0.20 also: libegl1 libusb-1.0-0); or align the scans roughly first and use start="identity"',
            )
        ) from reason
    return open3d


def _feature_cloud(o3d: Any, surface: Surface, width: float, consistent: bool) -> tuple[Any, Any]:
    wide = judged(make_cells(surface.cells.position, width / BLOCK_WIDTH), surface.T_grid_epoch)
    keep = wide.cells.weight >= MIN_COUNT
    centre, normal = wide.cells.centre[keep], wide.cells.normal[keep].copy()
    inwards = np.einsum("ij,ij->i", normal, np.median(centre, axis=0) - centre)
    normal[inwards < 0] *= -1
    cloud = o3d.geometry.PointCloud(o3d.utility.Vector3dVector(centre))
    cloud.normals = o3d.utility.Vector3dVector(normal)
    if consistent and len(centre) > 20:
        # On exactly flat clouds its triangulation gives up; the first orientation then has to serve.
        with suppress(RuntimeError):
            cloud.orient_normals_consistent_tangent_plane(12)
        turned = np.asarray(cloud.normals)
        if np.einsum("ij,ij->i", turned, normal).sum() < 0:
            cloud.normals = o3d.utility.Vector3dVector(-turned)
    feature = o3d.pipelines.registration.compute_fpfh_feature(
        cloud, o3d.geometry.KDTreeSearchParamHybrid(radius=5 * width, max_nn=100)
    )
    return cloud, feature


def _ransac(o3d: Any, clouds: list[tuple[Any, Any]], width: float) -> FloatArray:
    registration = o3d.pipelines.registration
    (source, source_feature), (target, target_feature) = clouds
    result = registration.registration_ransac_based_on_feature_matching(
        source,
        target,
        source_feature,
        target_feature,
        True,
        1.5 * width,
        registration.TransformationEstimationPointToPoint(False),
        4,
        [
            registration.CorrespondenceCheckerBasedOnEdgeLength(0.9),
            registration.CorrespondenceCheckerBasedOnDistance(1.5 * width),
        ],
        registration.RANSACConvergenceCriteria(100_000, 0.999),
    )
    return np.array(result.transformation, dtype=np.float64)


def gap(reference: FloatArray, current: FloatArray) -> float:
    """Distance between the bounding boxes of two clouds [m], 0 where they touch."""
    low = np.maximum(reference.min(axis=0), current.min(axis=0))
    high = np.minimum(reference.max(axis=0), current.max(axis=0))
    return float(np.linalg.norm(np.maximum(low - high, 0.0)))


def refuse_apart(reference: FloatArray, current: FloatArray) -> None:
    """Refuse clouds that are farther apart than they are large: shapes alone would fit anything to anything."""
    distance = gap(reference, current)
    size = min(float(np.linalg.norm(np.ptp(cloud, axis=0))) for cloud in (reference, current))
    if distance > size:
        raise OverlapError(
            explain(
                "registration",
                "scans of one place",
                f"clouds {distance:.1f} m apart, the smaller {size:.1f} m in size",
                'check coordinate systems and files, or ask for start="coarse"',
            )
        )


def choose_start(
    reference: list[Surface], current: list[Surface], T_given: FloatArray, start: str, seed: int
) -> tuple[FloatArray, FloatArray, str]:
    """Choose where the fine fit begins, by how well the surfaces fit after a rough alignment.

    Parameters
    ----------
    reference, current : list of Surface
        From wide to fine.
    T_given : ndarray of shape (4, 4)
        The pose as given, grid frame to reference frame.
    start : str
        "auto" looks for another pose only where the given one does not serve; "identity" never; "coarse" always.
    seed : int

    Returns
    -------
    T_ref_grid : ndarray of shape (4, 4)
        The chosen start itself.
    settled : ndarray of shape (4, 4)
        The same after the rough alignment.
    used : str
        "identity" or "coarse".

    Raises
    ------
    OverlapError
        No start makes the surfaces meet.
    """
    settled, share = settle(reference, current, T_given)
    if start == "identity" or (start == "auto" and share >= SHARE_AT_ONCE):
        return T_given, settled, "identity"
    # Features of a plain wall fit in many ways: another pose must be clearly better than the one given.
    tried = [(share * BETTER, "identity", T_given, settled)] if start == "auto" and share >= SHARE_NEEDED else []
    for proposal in feature_starts(reference[-1], current[-1], seed):
        settled, share = settle(reference, current, proposal)
        tried.append((share, "coarse", proposal, settled))
    best = max(tried, key=lambda item: item[0], default=(0.0, "", T_given, T_given))
    if best[0] < SHARE_NEEDED:
        raise OverlapError(
            explain(
                "registration",
                f"at least {SHARE_NEEDED:.0%} of the surface matched after a rough alignment",
                f"{best[0]:.1%} at the best of {len(tried)} starts",
                "check that both scans show the same place",
            )
        )
    return best[2], best[3], best[1]


def to_grid(T_ref_cur: FloatArray, surface: Surface) -> FloatArray:
    """Return the motion of a surface's grid frame from that of its epoch."""
    return T_ref_cur @ inverse(surface.T_grid_epoch)
