# SPDX-License-Identifier: MIT
"""What the registration stage hands on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.registration.targets import TargetFit

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class WeakDirection:
    """A rigid motion that the surfaces do not fix.

    Parameters
    ----------
    description : str
        The motion in words, for example "slide along the tunnel axis".
    vector : ndarray of shape (6,)
        Unit direction in (rotation [rad] x lever arm [m], translation [m]) about the pivot, rotation first.
    sd : float
        Standard error of that motion at the farthest used point [m].
    """

    description: str
    vector: FloatArray
    sd: float


@dataclass(frozen=True, slots=True)
class StableGround:
    """What the datum stands on, and what else could be true.

    Parameters
    ----------
    chosen_by : str
        "auto": the program found a group of patches that share one motion; "given" or "all": the user said so.
    share : float
        Part of the matched surface (of the given ground, where it was given) that shares the stable motion.
    second_share : float
        Part that shares the next best motion; 0 where there is none.
    second_shift : float
        Largest change of any displacement, were that second motion the stable one [m].
    by_strength : bool
        Whether a group was taken because it fixes the motion better, although another is larger.
    """

    chosen_by: str
    share: float
    second_share: float
    second_shift: float
    by_strength: bool


@dataclass(frozen=True, slots=True)
class StableBlocks:
    """Stable ground in cubes.

    Parameters
    ----------
    key : ndarray of shape (b,), int64
        Packed index of the cubes that hold reference points, ascending.
    width : float
        Of a cube [m].
    good : ndarray of shape (b,), bool
        Whether a cube is on stable ground.
    """

    key: NDArray[np.int64]
    width: float
    good: NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Registration:
    """The rigid motion from the current epoch into the reference frame, and how well it is known.

    Parameters
    ----------
    T_ref_cur : ndarray of shape (4, 4)
        Takes local current coordinates to local reference coordinates [m]: `x_ref = R x_cur + t`.
    origin : ndarray of shape (3,)
        Shared origin of the local frame in file coordinates [m].
    pivot : ndarray of shape (3,)
        Local point about which rotation and translation are least correlated [m].
    covariance : ndarray of shape (6, 6)
        Of (rotation vector [rad], translation at the pivot [m]), from patches, correlated errors included.
    rms : float
        Weighted root mean square of the normal residuals on stable ground [m].
    stable : ndarray of shape (n_reference,), bool
        Reference points on ground that was used as stable.
    ground : StableGround or None
        How that ground was chosen and what the next best choice would change.
    overlap : float
        Share of the reference surface that the current epoch also shows.
    scale_ppm, scale_ppm_sd : float
        Scale of current over reference minus one, a diagnostic in parts per million; never applied.
    weak_directions : tuple of WeakDirection
        Motions that are not fixed by the data; they were held at the start value.
    texture_directions : tuple of WeakDirection
        Motions that the surfaces leave open and returned intensity fixes, with the standard error that it reaches.
    start : str
        Where the fine fit began: "identity", "coarse", "file", "targets" or "given".
    targets : TargetFit or None
        The targets that the start comes from, in file coordinates.
    blocks : StableBlocks, optional
        The same ground for points that were not part of the registration.
    """

    T_ref_cur: FloatArray
    origin: FloatArray
    pivot: FloatArray
    covariance: FloatArray
    rms: float
    stable: NDArray[np.bool_]
    overlap: float
    scale_ppm: float
    scale_ppm_sd: float
    weak_directions: tuple[WeakDirection, ...]
    converged: bool
    iterations: int
    start: str
    ground: StableGround | None = None
    targets: TargetFit | None = None
    texture_directions: tuple[WeakDirection, ...] = ()
    warnings: tuple[str, ...] = ()
    blocks: StableBlocks | None = None

    @property
    def stable_fraction(self) -> float:
        """Share of the reference points that lie on stable ground."""
        return float(self.stable.mean()) if len(self.stable) else 0.0

    def file_matrix(self) -> FloatArray:
        """Return the 4x4 matrix current -> reference in file coordinates (float64, row-major)."""
        T = self.T_ref_cur.copy()
        T[:3, 3] += self.origin - T[:3, :3] @ self.origin
        return T

    def displacement_covariance(self, points: FloatArray) -> FloatArray:
        """Propagate the covariance of the rigid motion to places.

        A rotation vector w and a translation t at the pivot move a point by w x (x - pivot) + t, so
        J = [-[x - pivot]x, I] and the covariance there is J S J'.

        Parameters
        ----------
        points : ndarray of shape (n, 3)
            Local coordinates [m].

        Returns
        -------
        ndarray of shape (n, 3, 3)
            Covariance of the displacement caused by registration error [m^2].
        """
        arm = np.asarray(points, float) - self.pivot
        J = np.zeros((len(arm), 3, 6))
        J[:, 0, 1], J[:, 0, 2] = arm[:, 2], -arm[:, 1]
        J[:, 1, 0], J[:, 1, 2] = -arm[:, 2], arm[:, 0]
        J[:, 2, 0], J[:, 2, 1] = arm[:, 1], -arm[:, 0]
        J[:, [0, 1, 2], [3, 4, 5]] = 1.0
        return np.asarray(J @ self.covariance @ J.transpose(0, 2, 1))
