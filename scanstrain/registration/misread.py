# SPDX-License-Identifier: MIT
"""Whether a given start was meant otherwise: the other way round, transposed, or with millimetres in it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OverlapError, explain
from scanstrain.registration.coarse import settle, to_grid
from scanstrain.registration.disguise import BETTER, SHARE_NEEDED, loose, tight_share
from scanstrain.registration.rigid import inverse, rigid
from scanstrain.registration.surfaces import Surface

FloatArray = NDArray[np.float64]


def refuse_misread(
    mine: list[Surface], theirs: list[Surface], T_ref_cur: FloatArray, settled: FloatArray, origin: FloatArray
) -> None:
    """Refuse a matrix that brings the surfaces together only if it is read in another way.

    Parameters
    ----------
    mine, theirs : list of Surface
        From wide to fine.
    T_ref_cur : ndarray of shape (4, 4)
        The given start in local coordinates [m].
    settled : ndarray of shape (4, 4)
        Pose of the current grid frame after a rough alignment from there.
    origin : ndarray of shape (3,)
        Shared origin of the local frame in file coordinates [m].

    Raises
    ------
    OverlapError
        Names the other way.
    """
    if not loose(mine[-1], theirs[-1], settled):
        return
    needed = max(SHARE_NEEDED, BETTER * tight_share(mine[-1], theirs[-1], settled))
    R, t = T_ref_cur[:3, :3], T_ref_cur[:3, 3] + origin - T_ref_cur[:3, :3] @ origin
    for words, T in (
        ("the other way round: it takes reference to current coordinates", inverse(T_ref_cur)),
        ("with its rotation transposed, column by column", rigid(R.T, t + R.T @ origin - origin)),
        ("with its translation in millimetres", rigid(R, t / 1000 + R @ origin - origin)),
    ):
        pose = settle(mine, theirs, to_grid(T, theirs[-1]))[0]
        if tight_share(mine[-1], theirs[-1], pose) > needed:
            raise OverlapError(
                explain(
                    "start",
                    "a matrix that takes current to reference coordinates in metres, row by row",
                    f"one that fits {words}",
                    "write it that way",
                )
            )
