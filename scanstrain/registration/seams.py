# SPDX-License-Identifier: MIT
"""Seams inside an epoch: how far the set-ups of a scanner disagree where they show the same surface."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from scanstrain.cells import KEY_BITS, make_cells, median_spacing, voxel_keys
from scanstrain.epoch import Epoch
from scanstrain.errors import OverlapError, RegistrationError
from scanstrain.linalg import rotation_matrix, rotation_vector
from scanstrain.registration.align import register
from scanstrain.registration.match import Metric, Rows
from scanstrain.registration.result import Registration, WeakDirection
from scanstrain.registration.weak import complement, name_directions, reach, separate

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

CAPTURE = 0.1
"""How far set-ups of a registered project may lie apart [m]: beyond that the file is not registered at all."""
HELD = CAPTURE / 3
"""Standard error of motions that the overlap does not show, at the place moved most [m]: the capture range is the
three-sigma limit."""
MIN_RESPONSE = 0.05
"""Part of a motion that the normals of the overlap must see: those of blocks are noisy by some hundredths of a radian,
and in a small piece of a smooth tunnel this can pass for relief that fixes its roll (simulated: half of the pairs)."""
MOST_REMOVED = 2e-3
"""Motion along such directions [m] that the registration may have seen for all that: it is taken back, but its
direction is known to a few hundredths only, and what these leave must stay below a tenth of a millimetre."""
CLEARLY_FLAT = 0.1
"""Smallest over middle eigenvalue of a block's scatter beyond which its normal is not used."""
VOXEL_SPACINGS = 16.0
"""Width of the voxels that tell the overlap, in point spacings: wider than the blocks of the registration."""
MIN_COUNT = 20
"""Points of each set-up that a shared voxel holds: about a plane's worth."""
MIN_OVERLAP = 5_000
"""Points of each set-up in the overlap below which two are not compared: some thirty blocks."""
MOST_POINTS = 100_000
"""Points of each set-up in an overlap that are used: enough for a seam of a hundredth of the noise of a point."""
SIGNIFICANT = 0.01
"""Level of the test of a seam: epochs have many pairs of set-ups."""
SEED = 0
"""Of the draw of points where an overlap holds more than are used."""


@dataclass(frozen=True, slots=True)
class Seam:
    """How the second of two set-ups lies against the first.

    Parameters
    ----------
    first, second : int
        Numbers of the set-ups.
    points : int
        Points of the epoch in their overlap.
    note : str
        Why the pair was not compared; empty where it was. All numbers are NaN otherwise.
    rotation, translation : ndarray of shape (3,)
        Rotation vector [rad] and translation [m] at the pivot that take the second to the first.
    pivot : ndarray of shape (3,)
        Local coordinates [m].
    covariance : ndarray of shape (6, 6)
        Of (rotation, translation); along weak directions the third of the capture range.
    weak_directions : tuple of WeakDirection
        Motions that the overlap does not show; they were held at zero.
    offset : float
        Offset at the place of the overlap where it is largest [m].
    angle : float
        Angle of the rotation [rad].
    offset_n, offset_n_sd : float
        Root mean square over the overlap of the offset along the surface normal, and of its standard error [m]. Not a
        mean: a shift of a tunnel is inward on one side and outward on the other.
    scatter : float
        Root mean square of what is left along the normals once the seam is removed [m].
    p : float
        Probability of such a seam by noise alone, from the motions that the overlap shows.
    """

    first: int
    second: int
    points: int
    note: str
    rotation: FloatArray
    translation: FloatArray
    pivot: FloatArray
    covariance: FloatArray
    weak_directions: tuple[WeakDirection, ...]
    offset: float
    angle: float
    offset_n: float
    offset_n_sd: float
    scatter: float
    p: float

    @property
    def compared(self) -> bool:
        """Whether the two overlap enough to be compared."""
        return not self.note

    @property
    def significant(self) -> bool:
        """Whether the seam is more than noise at 1 %."""
        return self.p < SIGNIFICANT


def find_seams(epoch: Epoch, *, progress: Callable[[float], None] | None = None) -> tuple[Seam, ...]:
    """Compare all pairs of set-ups of an epoch where they overlap.

    Each pair is registered on the voxels that both fill, from the poses as given and with all of the ground, since
    within one epoch nothing moved. Motions that the overlap does not show, such as a slide in the plane of a wall,
    stay zero.

    Parameters
    ----------
    epoch : Epoch
        With `setup` numbers; without them, or with one number only, there is nothing to compare.
    progress : callable, optional
        Called with the finished share, 0 to 1.

    Returns
    -------
    tuple of Seam
        One for each pair, in the order of their numbers, with a `note` where they overlap too little.
    """
    numbers = np.unique(epoch.setup) if epoch.setup is not None else np.empty(0, np.uint16)
    if len(numbers) < 2:
        return ()
    width = VOXEL_SPACINGS * max(median_spacing(epoch.points[epoch.setup == number]) for number in numbers)
    if not width > 0:
        return ()
    rows = [np.flatnonzero(epoch.setup == number) for number in numbers]
    keys = [voxel_keys(epoch.points[mine], width) for mine in rows]
    filled = [_filled(each) for each in keys]
    found = []
    pairs = list(combinations(range(len(numbers)), 2))
    for count, (a, b) in enumerate(pairs):
        shared = np.intersect1d(filled[a], filled[b], assume_unique=True)
        # The second with a margin: were both cut off at the same places, the ends would pass for relief that both show.
        parts = [rows[each][np.isin(keys[each], voxels)] for each, voxels in ((a, shared), (b, _widened(shared)))]
        found.append(_seam(epoch, int(numbers[a]), int(numbers[b]), parts))
        if progress is not None:
            progress((count + 1) / len(pairs))
    return tuple(found)


def _filled(keys: IntArray) -> IntArray:
    """Voxels that hold enough points of a set-up."""
    unique, count = np.unique(keys, return_counts=True)
    return np.asarray(unique[count >= MIN_COUNT])


def _widened(keys: IntArray) -> IntArray:
    """Voxels and their 26 neighbours."""
    steps = np.array([-1, 0, 1])
    around = (steps[:, None, None] << 2 * KEY_BITS) + (steps[:, None] << KEY_BITS) + steps
    return np.unique(keys[:, None] + around.reshape(-1))


def _seam(epoch: Epoch, first: int, second: int, parts: list[IntArray]) -> Seam:
    """Compare two set-ups by their points (row numbers) in the overlap."""
    points = sum(len(rows) for rows in parts)
    if min(len(rows) for rows in parts) < MIN_OVERLAP:
        return _not_compared(first, second, points, "they overlap too little")
    mine, theirs = (_drawn(epoch, rows) for rows in parts)
    try:
        result = register(mine, theirs, start="identity", stable="all", capture_range=CAPTURE)
    except (OverlapError, RegistrationError):
        return _not_compared(first, second, points, "their overlap is too small or too rough to be registered")
    return _measured(first, second, points, result, mine)


def _drawn(epoch: Epoch, rows: IntArray) -> Epoch:
    """Points of an overlap, at most as many as are used."""
    if len(rows) > MOST_POINTS:
        rows = np.sort(np.random.default_rng(SEED).choice(rows, MOST_POINTS, replace=False))
    return Epoch(points=np.ascontiguousarray(epoch.points[rows]), origin=epoch.origin, label=epoch.label)


def _measured(first: int, second: int, points: int, result: Registration, mine: Epoch) -> Seam:
    """Turn a registration into a seam."""
    from scipy.special import chdtrc

    R, pivot = result.T_ref_cur[:3, :3], result.pivot
    cells = make_cells(mine.points, 3 * median_spacing(mine.points))
    flat = cells.planarity < CLEARLY_FLAT
    place, normal = cells.centre[flat], cells.normal[flat]
    found = np.r_[rotation_vector(R), R @ pivot + result.T_ref_cur[:3, 3] - pivot]
    metric = Metric(pivot, float(np.linalg.norm(place - pivot, axis=1).max()))
    scale = np.r_[np.full(3, 1 / metric.arm), np.ones(3)]
    rows = np.concatenate([np.cross(place - pivot, normal), normal], axis=1) * scale
    shown, value, variance = _shown(found / scale, result.covariance / np.outer(scale, scale), rows, place, metric)
    motion = shown @ value * scale
    removed = (found - motion) / scale
    if float(reach(removed[:, None], place, metric)[0]) > MOST_REMOVED:
        return _not_compared(first, second, points, "their overlap is too small or too smooth to be compared")
    weak = separate(complement(shown))
    loose = HELD / reach(weak, place, metric)
    covariance = (shown * variance) @ shown.T + (weak * loose**2) @ weak.T
    offset = (place - pivot) @ (rotation_matrix(motion[:3]) - np.eye(3)).T + motion[3:]
    return Seam(
        first=first,
        second=second,
        points=points,
        note="",
        rotation=motion[:3],
        translation=motion[3:],
        pivot=pivot,
        covariance=covariance * np.outer(scale, scale),
        weak_directions=_named(weak, place, normal),
        offset=float(np.linalg.norm(offset, axis=1).max()),
        angle=float(np.linalg.norm(motion[:3])),
        offset_n=float(np.sqrt((np.einsum("bi,bi->b", offset, normal) ** 2).mean())),
        offset_n_sd=float(np.sqrt(((rows @ shown) ** 2 @ variance).mean())),
        scatter=result.rms,
        p=float(chdtrc(len(value), (value**2 / variance).sum())) if len(value) else np.nan,
    )


def _named(weak: FloatArray, place: FloatArray, normal: FloatArray) -> tuple[WeakDirection, ...]:
    """Words for the motions (6, k) that were held."""
    m, none = len(place), np.zeros(len(place))
    rows = Rows(np.zeros((m, 7)), np.zeros((m, 7)), none, none, place, normal, np.arange(m))
    return name_directions(weak, rows, np.ones(m, bool), np.full(weak.shape[1], HELD))


def _shown(
    found: FloatArray, covariance: FloatArray, rows: FloatArray, place: FloatArray, metric: Metric
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Reduce a motion to what the overlap shows for certain, all in metric units.

    Narrow overlaps let the noise of normals pass for relief, so motions that normals hardly see are held at zero and
    the others estimated anew; as are those that the registration held, told by their standard error.

    Returns
    -------
    directions : ndarray of shape (6, r)
        Orthonormal.
    value, variance : ndarray of shape (r,)
        The motion along each, with independent errors [m], [m^2].
    """
    size, vectors = np.linalg.eigh(rows.T @ rows / len(rows))
    firm = vectors[:, np.sqrt(np.maximum(size, 0.0)) > MIN_RESPONSE * reach(vectors, place, metric)]
    information = np.linalg.inv(covariance)
    among = np.linalg.inv(firm.T @ information @ firm)
    variance, turn = np.linalg.eigh(among)
    directions = firm @ turn
    value = turn.T @ (among @ (firm.T @ information @ found))
    fitted = np.sqrt(variance) * reach(directions, place, metric) < HELD / 3
    return np.ascontiguousarray(directions[:, fitted]), value[fitted], variance[fitted]


def _not_compared(first: int, second: int, points: int, note: str) -> Seam:
    """A pair of which nothing is known."""
    nothing = np.full(3, np.nan)
    numbers = ("offset", "angle", "offset_n", "offset_n_sd", "scatter", "p")
    return Seam(
        first=first,
        second=second,
        points=points,
        note=note,
        rotation=nothing,
        translation=nothing,
        pivot=nothing,
        covariance=np.full((6, 6), np.nan),
        weak_directions=(),
        **dict.fromkeys(numbers, np.nan),
    )


def seam_warnings(seams: tuple[Seam, ...], label: str) -> tuple[str, ...]:
    """Say which seams matter, and which set-ups could not be checked.

    A seam matters where it is more than noise and its offset along the normals exceeds the scatter of the surface
    blocks about the fitted motion: a smaller one is hidden in what every later fit takes for noise, a larger one looks
    like a step or a shear inside the gauges that it crosses.

    Parameters
    ----------
    seams : tuple of Seam
        All pairs of one epoch.
    label : str
        Name of the epoch.

    Returns
    -------
    tuple of str
    """
    said = []
    for seam in seams:
        if seam.significant and seam.offset_n > seam.scatter:
            said.append(
                f"{label}: set-ups {seam.first} and {seam.second} disagree by {seam.offset_n * 1e3:.1f} mm along the "
                f"surface normal (standard error {seam.offset_n_sd * 1e3:.2f} mm; up to {seam.offset * 1e3:.1f} mm and "
                f"{seam.angle * 1e3:.2f} mrad): where both show the surface, the seam can pass for strain and tilt; "
                "register the set-ups again, or set align_setups = true"
            )
    checked = {number for seam in seams if seam.compared for number in (seam.first, seam.second)}
    alone = sorted({number for seam in seams for number in (seam.first, seam.second)} - checked)
    if alone:
        names = ", ".join(map(str, alone))
        plural, they = ("s", "they share") if len(alone) > 1 else ("", "it shares")
        said.append(
            f"{label}: set-up{plural} {names} could not be checked: {they} too little of the surface with any other"
        )
    return tuple(said)
