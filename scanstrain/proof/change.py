# SPDX-License-Identifier: MIT
"""A change of known size to put into a copy of a scan, and what an exact local fit makes of it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain

if TYPE_CHECKING:  # the stages compile when they are loaded
    from scanstrain.neighbourhood.result import AffineField
    from scanstrain.result import Result

FloatArray = NDArray[np.float64]

CLEAR = 5.0
"""Size of the change in typical standard errors: large enough to be found, small enough to be a test."""
STRAIN_RANGE = (2e-4, 1e-2)
"""Smallest and largest strain that is chosen for it [1]."""
MOST_STRAIN = 0.05
"""Largest strain that a user may choose [1]: beyond it, a fade over some gauges turns the surface too far."""
WIDTH = 2.0
"""Standard width of the change in gauge lengths: averaging over the gauge then takes some 2 % off its peak."""
WIDEST = 0.12
"""The same never exceeds this share of the object's extent, so that stable ground remains."""
RINGS, SPOKES = 6, 24
"""Places of a gauge over which the change is averaged as the fit does it."""


@dataclass(frozen=True, slots=True)
class Change:
    """A smooth change of known size: the surface widens and bulges round a place, and rests far from it.

    Parameters
    ----------
    centre, normal : ndarray of shape (3,)
        The place [m] and the direction of the bulge.
    width : float
        Standard width of the fading [m].
    strain : float
        Strain at the centre, the same in all directions [1].
    height : float
        Bulge at the centre [m].
    """

    centre: FloatArray
    normal: FloatArray
    width: float
    strain: float
    height: float

    def at(self, points: FloatArray) -> FloatArray:
        """Return the displacement of `points` (n, 3), shape (n, 3) [m]."""
        arm = points - self.centre
        fade = np.exp(-0.5 * np.einsum("ni,ni->n", arm, arm) / self.width**2)[:, None]
        return np.asarray(fade * (self.strain * arm + self.height * self.normal))


def check_size(*, strain: float | None, height: float | None) -> None:
    """Refuse a size of the change that cannot be.

    Parameters
    ----------
    strain, height : float, optional
        Size [1] and [m] where the user has chosen it.

    Raises
    ------
    OptionError
        A size that is not above zero, or a strain above 5 %.
    """
    for name, value, most in (("strain", strain, MOST_STRAIN), ("height", height, np.inf)):
        if value is not None and not 0 < value <= most:
            got = f"{value}"
            raise OptionError(
                explain(name, "a size above 0, a strain up to 0.05", got, "give it in metres or as 0.001")
            )


def choose_change(still: Result, *, strain: float | None, height: float | None) -> Change:
    """Choose place, width and size of the change from a comparison without one.

    Parameters
    ----------
    still : Result
        That comparison.
    strain, height : float, optional
        Size [1] and [m] where the user has chosen it.

    Returns
    -------
    Change
    """
    field = still.field
    fine = np.flatnonzero(field.status == 0)
    seen = fine[field.observable[fine][:, 3:7].all(axis=1)]
    places = field.position[seen if len(seen) else fine]
    rows = seen if len(seen) else fine
    middle = rows[np.argmin(np.linalg.norm(places - np.median(places, axis=0), axis=1))]
    width = min(WIDTH * field.gauge_length, WIDEST * float(np.ptp(still.reference.points, axis=0).max()))
    sds = np.sqrt(np.einsum("gii->gi", field.covariance))
    typical = float(np.median(sds[seen][:, [3, 6]])) if len(seen) else 0.0
    chosen = float(np.clip(CLEAR * typical, *STRAIN_RANGE)) if strain is None else strain
    rise = CLEAR * float(np.median(sds[fine][:, 2])) if height is None else height
    return Change(field.position[middle], field.frame[middle][:, 2], width, chosen, rise)


def expected(field: AffineField, change: Change) -> FloatArray:
    """Return what an exact local fit makes of a change: the unknowns of each gauge over its disc.

    Parameters
    ----------
    field : AffineField
        Places, frames and surface shapes of the gauges.
    change : Change
        What was put in.

    Returns
    -------
    ndarray of shape (g, 12)
        In the order of `neighbourhood.result.PARAMETERS`.
    """
    # Rings of equal area: the places stand for points spread evenly over the disc.
    r = field.gauge_length / 2 * np.sqrt((np.arange(RINGS) + 0.5) / RINGS)
    t = 2 * np.pi * np.arange(SPOKES) / SPOKES
    x, y = (r[:, None] * np.cos(t)).ravel(), (r[:, None] * np.sin(t)).ravel()
    s11, s12, s22 = field.shape.T[:, :, None]
    local = np.stack(np.broadcast_arrays(x, y, 0.5 * s11 * x * x + s12 * x * y + 0.5 * s22 * y * y), axis=-1)
    places = field.position[:, None] + np.einsum("gik,gpk->gpi", field.frame, local)
    moved = change.at(places.reshape(-1, 3)).reshape(places.shape)
    u = np.einsum("gik,gpi->gpk", field.frame, moved)
    plane = np.stack([np.ones_like(x), x, y], axis=1)
    bowl = np.concatenate([plane, np.stack([x * x / 2, x * y, y * y / 2], axis=1)], axis=1)
    flat = np.einsum("kp,gpc->gck", np.linalg.pinv(plane), u[:, :, :2])
    normal = np.einsum("kp,gp->gk", np.linalg.pinv(bowl), u[:, :, 2])
    return np.concatenate(
        [flat[:, :, 0], normal[:, :1], flat[:, 0, 1:], flat[:, 1, 1:], normal[:, 1:3], normal[:, 3:]], axis=1
    )
