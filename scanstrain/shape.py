# SPDX-License-Identifier: MIT
"""The scanned object as a whole: found once on the reference epoch, used for gauges, zones and sections."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from scanstrain.config import CompareConfig
from scanstrain.epoch import Epoch
from scanstrain.errors import OptionError, explain
from scanstrain.neighbourhood.result import AffineField, Status
from scanstrain.registration.result import Registration
from scanstrain.zones import Unrolled

if TYPE_CHECKING:
    from scanstrain.structures import Axis, Section, Wall, WallResult

FloatArray = NDArray[np.float64]
Guide = Callable[[FloatArray], tuple[FloatArray, FloatArray]]

AUTO_SECTIONS = 1.0
"""Distance between sections by default, in radii of the lining, to a whole part or multiple of a metre."""


@dataclass(frozen=True, slots=True)
class Shape:
    """What is known of the object besides its surface.

    Parameters
    ----------
    structure : {"tunnel", "wall", "free"}
    axis : Axis or None
        Of a tunnel.
    wall : Wall or None
        The main face of a wall.
    warnings : tuple of str
    """

    structure: str
    axis: Axis | None = None
    wall: Wall | None = None
    warnings: tuple[str, ...] = ()

    def unroll(self, points: FloatArray) -> Unrolled | None:
        """Return places (n, 3) on the surface laid flat; None for an object of no known structure."""
        flat = self.axis or self.wall
        return None if flat is None else flat.unroll(points)

    def guide(self) -> Guide | None:
        """Return what gives, for places (n, 3), the nearest ones on the axis of a tunnel and its directions there."""
        axis = self.axis
        return None if axis is None else lambda places: axis.at(axis.project(places)[0])

    def directions(self, places: FloatArray) -> FloatArray | None:
        """Return the direction of the axis of a tunnel (n, 3) at the feet of places (n, 3)."""
        return None if self.axis is None else self.axis.directions(places)


def shape_of(reference: Epoch, config: CompareConfig) -> Shape:
    """Find or take the axis of a tunnel or the face of a wall.

    Raises
    ------
    OptionError
        The scan shows no tunnel, the axis that was given leaves it, or the thickness is none of a lining.
    """
    if config.strain.structure == "wall":
        return _wall(reference, config)
    if config.strain.structure == "free":
        return Shape("free")
    from scanstrain.structures import fit_axis, given_axis

    given = config.tunnel.axis
    if given is None:
        axis = fit_axis(reference.points)
    else:
        axis = given_axis(np.asarray(given) - reference.origin, reference.points)
    _check_thickness(config.strain.thickness, axis.radius)
    return Shape("tunnel", axis)


def _check_thickness(thickness: float | None, radius: float) -> None:
    if thickness is not None and thickness >= radius:
        raise OptionError(
            explain(
                "thickness", f"less than the radius of the tunnel, {radius:.2f} m", f"{thickness:g} m",
                "give the thickness of the lining in metres",
            )
        )  # fmt: skip


def _wall(reference: Epoch, config: CompareConfig) -> Shape:
    """Find the main face; a wall of several faces has strains all the same, but no lean of its own."""
    from scanstrain.structures import fit_wall

    given, free_side = config.wall.plane, config.strain.free_side
    try:
        wall = fit_wall(
            reference.points,
            given=None if given is None else np.asarray(given) - reference.origin,
            free_side=None if free_side is None else np.asarray(free_side) - reference.origin,
        )
    except OptionError as error:
        return Shape("wall", warnings=(f"No lean, profile or bulge of the wall: {error}",))
    return Shape("wall", wall=wall, warnings=wall.warnings)


def wall_movement(
    shape: Shape, field: AffineField, registration: Registration, config: CompareConfig
) -> WallResult | None:
    """Measure how the face of a wall moved; None for anything else, or where hardly any gauge lies on it.

    Parameters
    ----------
    shape : Shape
    field : AffineField
        Calibrated.
    registration : Registration
        Its error is part of that of movements, not of bulges.
    config : CompareConfig
    """
    if shape.wall is None:
        return None
    from scanstrain.structures import measure_wall

    fine = field.status == Status.FINE
    options = config.wall
    try:
        return measure_wall(
            shape.wall,
            field.position,
            np.where(fine, field.displacement[:, 2], np.nan),
            np.where(fine, np.sqrt(field.covariance[:, 2, 2]), np.nan),
            gauge_length=field.gauge_length,
            gauge_spacing=field.gauge_spacing,
            normals=field.frame[:, :, 2],
            panel=options.panel,
            bands=options.band,
            datum=registration.displacement_covariance,
        )
    except OptionError:
        if options.panel is not None or options.band is not None:
            raise
        return None


def places_on(unrolled: Unrolled | None) -> dict[str, NDArray[np.generic]]:
    """Return chainage [m] and clock angle [rad] as attributes; nothing where there is no axis."""
    if unrolled is None or np.isnan(unrolled.clock).all():
        return {}
    return {"chainage": unrolled.along.astype(np.float32), "clock": unrolled.clock.astype(np.float32)}


def sections_of(
    shape: Shape,
    points: tuple[FloatArray, FloatArray],
    registration: Registration,
    config: CompareConfig,
    thickness: float | None = None,
) -> tuple[Section, ...]:
    """Cut sections through both epochs of a tunnel; none through anything else.

    Parameters
    ----------
    shape : Shape
    points : pair of ndarray of shape (n, 3)
        Of both epochs, the current one registered [m].
    registration : Registration
        Its error is part of that of movements, not of lengths.
    config : CompareConfig
    thickness : float, optional
        Of a slice [m], where `points` are only those near sections.
    """
    if shape.axis is None:
        return ()
    from scanstrain.structures import cut_sections

    options = config.tunnel
    given = thickness if isinstance(options.section_thickness, str) else options.section_thickness
    return cut_sections(
        shape.axis,
        *points,
        spacing=_section_spacing(shape.axis, config),
        thickness=given,
        chords=options.chords,
        datum=registration.displacement_covariance,
    )


def near_sections(
    shape: Shape, config: CompareConfig, spacing: float
) -> tuple[Callable[[FloatArray], NDArray[np.int64]], float] | None:
    """Return what says which places (n, 3) are near a section, and the thickness of slices [m]; None without an axis.

    `spacing` is that of the points of the coarser epoch [m].
    """
    if shape.axis is None:
        return None
    from scanstrain.structures.sections import section_chainages, slice_thickness

    axis, asked = shape.axis, config.tunnel.section_thickness
    thickness = slice_thickness(spacing) if isinstance(asked, str) else asked
    chainages = section_chainages(axis, _section_spacing(axis, config), thickness)
    return lambda places: axis.near(places, chainages, thickness / 2), thickness


def _section_spacing(axis: Axis, config: CompareConfig) -> float:
    spacing = config.tunnel.section_spacing
    return auto_spacing(axis.radius) if isinstance(spacing, str) else spacing


def auto_spacing(radius: float) -> float:
    """Choose a distance between sections [m] near the radius of the lining: 1, 2 or 5 times a power of ten.

    Examples
    --------
    >>> auto_spacing(2.6), auto_spacing(0.9), auto_spacing(4.5)
    (2.0, 1.0, 5.0)
    """
    steps = np.array([1.0, 2.0, 5.0, 10.0]) * 10.0 ** np.floor(np.log10(AUTO_SECTIONS * radius))
    return float(steps[np.abs(np.log(steps / (AUTO_SECTIONS * radius))).argmin()])
