# SPDX-License-Identifier: MIT
"""Every attribute at the points of the reference epoch, in memory or piece by piece on disk."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from scanstrain.columns import Columns
from scanstrain.config import CompareConfig
from scanstrain.epoch import Epoch
from scanstrain.mapped import release, slices
from scanstrain.registration.result import Registration
from scanstrain.shape import Shape, places_on
from scanstrain.strain.result import StrainField
from scanstrain.zones import in_zone

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
Values = Mapping[str, NDArray[np.generic]]


def values_at(
    strain: StrainField,
    reference: Epoch,
    shape: Shape,
    registration: Registration,
    config: CompareConfig,
    folder: Path | None = None,
    progress: Callable[[float], None] | None = None,
) -> Values:
    """Give every point of the reference epoch its values.

    Parameters
    ----------
    strain : StrainField
    reference : Epoch
    shape : Shape
    registration : Registration
        Of this epoch, or of points drawn from it.
    config : CompareConfig
    folder : Path, optional
        Where the values go, a piece at a time; by default they stay in memory.
    progress : callable, optional
        Called with the share done.

    Returns
    -------
    mapping of str to ndarray of shape (n,)
    """
    if folder is None:
        known = registration.stable if len(registration.stable) == len(reference) else None
        return _values(strain, reference, shape, registration, config, known)
    columns = Columns(folder)
    for rows in slices(len(reference)):
        part = Epoch(
            points=np.array(reference.points[rows]),
            origin=reference.origin,
            classification=None if reference.classification is None else np.array(reference.classification[rows]),
        )
        columns.append(_values(strain, part, shape, registration, config, None))
        release(reference.points, reference.classification)
        if progress:
            progress(rows.stop / len(reference))
    return columns


def _values(
    strain: StrainField,
    part: Epoch,
    shape: Shape,
    registration: Registration,
    config: CompareConfig,
    stable: BoolArray | None,
) -> dict[str, NDArray[np.generic]]:
    from scanstrain.strain import blend_to_points

    points = blend_to_points(strain, part.points)
    stable = _stable(part, shape, registration, config) if stable is None else stable
    return points | {"stable": stable.astype(np.uint8), **places_on(shape.unroll(part.points))}


def _stable(part: Epoch, shape: Shape, registration: Registration, config: CompareConfig) -> BoolArray:
    """Ground of points that were not part of the registration: that of the blocks they lie in, within the zones."""
    from scanstrain.registration.report import on_stable_ground

    if registration.blocks is None:
        return np.zeros(len(part), bool)
    stable = on_stable_ground(registration.blocks, part.points)
    options = config.registration
    for names, wanted in ((options.stable_zones, True), (options.excluded_zones, False)):
        if names:
            unrolled, inside = shape.unroll(part.points), np.zeros(len(part), bool)
            for zone in config.zones(names):
                inside |= in_zone(
                    zone, part.points, origin=part.origin, classification=part.classification, unrolled=unrolled
                )  # fmt: skip
            stable &= inside == wanted
    return stable
