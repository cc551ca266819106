# SPDX-License-Identifier: MIT
"""How a wall moved: lean, verticality, bulge, panels, from the normal displacements of gauges on its face."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.errors import OptionError, explain
from scanstrain.structures.bulge import Bulge, find_bulges, remainder
from scanstrain.structures.gauge_errors import Datum, datum_on, gauge_errors
from scanstrain.structures.wall import Wall
from scanstrain.structures.wall_parts import WHOLE, Division, FaceGauges, Part, cut, edges_of, measure_part

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

FEWEST = 6
"""Gauges on the face that a plane and a spread about it take."""

DOUBTFUL = 5.0
"""Gauges whose standard error is more than this many times the median are left out: every gauge has the same weight."""


@dataclass(frozen=True, slots=True)
class WallResult:
    """What became of a wall between two epochs.

    Parameters
    ----------
    wall : Wall
        Of the reference epoch.
    parts : tuple of Part
        The whole wall first, then bands of height, from the foot, over the full width and, where there are panels,
        for every column of them; then panels, column by column.
    bulge, hollow : Bulge or None
        Where most remains to the free side and away from it when the best plane is taken off.
    gauge_length, gauge_spacing : float
        Of the gauges [m].
    warnings : tuple of str
        Sentences for the user.
    """

    wall: Wall
    parts: tuple[Part, ...]
    bulge: Bulge | None
    hollow: Bulge | None
    gauge_length: float
    gauge_spacing: float
    warnings: tuple[str, ...] = ()

    @property
    def whole(self) -> Part:
        """The wall as one part."""
        return self.parts[0]

    def of_kind(self, kind: str) -> tuple[Part, ...]:
        """Return the parts of a kind: wall, band or panel."""
        return tuple(part for part in self.parts if part.kind == kind)


def measure_wall(
    wall: Wall,
    positions: FloatArray,
    disp_n: FloatArray,
    disp_n_sd: FloatArray,
    *,
    gauge_length: float,
    gauge_spacing: float,
    normals: FloatArray | None = None,
    panel: tuple[Division, Division] | None = None,
    bands: Division = None,
    datum: Datum | None = None,
) -> WallResult:
    """Measure the movement of a wall and of its parts.

    Standard errors count what overlapping gauges share, and registration error as one rigid motion of all gauges. It is
    no part of what remains without the best plane.

    Parameters
    ----------
    wall : Wall
        Of the reference epoch.
    positions : ndarray of shape (g, 3)
        Gauges on the reference surface, local coordinates [m]; those off the face are left out.
    disp_n, disp_n_sd : ndarray of shape (g,)
        Normal displacement and its standard error without registration error [m]; NaN where there is none.
    gauge_length, gauge_spacing : float
        Patch diameter and distance of gauges [m].
    normals : ndarray of shape (g, 3), optional
        Unit normals that `disp_n` is along; gauges that face elsewhere than the wall are left out. The normal of the
        wall where not given.
    panel : (along, up), optional
        Size of panels [m] or their edges from the lower left corner [m]; None for one that reaches over all.
    bands : float or sequence of float, optional
        Height of bands or their edges [m]; bands one gauge length high where not given.
    datum : callable, optional
        From places (n, 3) to the covariance (n, 3, 3) of the displacement that registration error causes there [m^2].

    Returns
    -------
    WallResult

    Raises
    ------
    OptionError
        Sizes or edges that are none, or hardly any gauges on the face.
    """
    columns, rows = panel if panel is not None else (None, None)
    along, up = edges_of(columns, wall.length, "wall_panels"), edges_of(rows, wall.height, "wall_panels")
    heights = edges_of(min(gauge_length, wall.height) if bands is None else bands, wall.height, "wall_bands")
    on = wall.members(positions, normals) & np.isfinite(disp_n) & np.isfinite(disp_n_sd)
    moved = disp_n if normals is None else disp_n * np.sign(normals @ wall.normal)
    serve, warnings = _serving(on, disp_n_sd)
    flat = wall.unroll(positions[serve])
    # noise puts gauges at the edge a little beyond it
    places = np.clip(flat.along, 0.0, wall.length), np.clip(flat.across, 0.0, wall.height)
    sd = disp_n_sd[serve]
    errors = gauge_errors(*places, sd, gauge_length=gauge_length, datum=datum_on(wall, datum))
    face = FaceGauges(moved[serve], sd, wall.offsets(positions[serve]), errors, wall.lean, gauge_length, gauge_spacing)
    everywhere, extent = np.ones(len(face.moved), bool), (0.0, wall.length, 0.0, wall.height)
    parts = [measure_part(face, everywhere, "wall", (WHOLE, WHOLE), extent)]
    parts += cut(face, "band", np.array([0.0, wall.length]), heights, one_column=True)
    if panel is not None:
        parts += cut(face, "band", along, heights) if len(along) > 2 else ()
        parts += cut(face, "panel", along, up)
    rest = remainder(face.moved, face.errors)
    bulge, hollow = find_bulges(rest, face.errors, gauge_length=gauge_length, gauge_spacing=gauge_spacing)
    said = (*wall.warnings, *warnings)
    return WallResult(wall, tuple(parts), bulge, hollow, gauge_length, gauge_spacing, said)


def _serving(on: BoolArray, sd: FloatArray) -> tuple[BoolArray, tuple[str, ...]]:
    """Which gauges on the face serve, and a sentence on those that do not."""
    count = int(on.sum())
    if count < FEWEST:
        raise OptionError(
            explain(
                "wall",
                f"{FEWEST} or more gauges with a result on its face",
                f"{count}",
                "check the plane of the wall, or use shorter gauges",
            )
        )
    serve = on & (sd <= DOUBTFUL * np.median(sd[on]))
    left_out = count - int(serve.sum())
    warning = (
        f"{left_out} of {count} gauges on the wall are left out: they are {DOUBTFUL:g} times less certain than most."
    )
    return serve, (warning,) if left_out else ()
