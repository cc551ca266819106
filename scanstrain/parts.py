# SPDX-License-Identifier: MIT
"""Zones on the gauges of a comparison, and how each part moved as a body."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.config import CompareConfig
from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.registration.result import Registration
from scanstrain.result import WHOLE
from scanstrain.zones import Unrolled, mask_of

if TYPE_CHECKING:
    from scanstrain.strain.bodies import BodyMotion

BoolArray = NDArray[np.bool_]

MOSTLY = 0.5
"""A gauge belongs to a zone if at least this share of the points about it do."""


def gauges_of_zones(
    field: AffineField, reference: Epoch, config: CompareConfig, unrolled: Unrolled | None, *, thinning: int = 1
) -> dict[str, BoolArray]:
    """Say which gauges belong to each zone.

    Parameters
    ----------
    field : AffineField
    reference : Epoch
    config : CompareConfig
    unrolled : Unrolled, optional
        Reference points on the structure laid flat.
    thinning : int
        One in how many of all reference points `reference` holds.

    Returns
    -------
    dict of str to ndarray of shape (g,), bool

    Raises
    ------
    OptionError
        A zone without points, or one that cannot be judged.
    """
    from scanstrain.strain import share_around

    return {
        zone.name: share_around(field, reference.points, mask_of((zone,), reference, unrolled), thinning=thinning)
        >= MOSTLY
        for zone in config.zones()
    }


def bodies_of(field: AffineField, registration: Registration, zones: Mapping[str, BoolArray]) -> tuple[BodyMotion, ...]:
    """Estimate the rigid motion of the whole object and of every zone, after registration."""
    from scanstrain.strain.bodies import body_motion

    everything = {WHOLE: np.asarray(field.status == Status.FINE), **zones}
    return tuple(
        body_motion(field, name=name, gauges=gauges, registration=registration) for name, gauges in everything.items()
    )
