# SPDX-License-Identifier: MIT
"""What can look like an even strain without being one of the structure: scale, temperature, map projection."""

from __future__ import annotations

import math
from dataclasses import dataclass

from scanstrain.errors import OptionError, explain

SCALE_NOTE = (
    "A difference in scale between the epochs, from instrument or atmosphere, looks exactly like an even strain. It is "
    "estimated on the stable ground and never applied."
)
SCALE_UNKNOWN = (
    "The surfaces do not fix the scale between the epochs: an even strain from instrument or atmosphere is not bounded "
    "by these scans."
)
TEMPERATURE_NOTE = (
    "Expansion of the object if nothing restrains it. It is part of the strain measured, not an error, and is not "
    "taken off."
)
SAME_PROJECTION_NOTE = (
    "Both epochs are in one coordinate system, so its scale cancels in a strain. Lengths and displacements are in grid "
    "units, {factor:.6f} times those on the ellipsoid."
)
OTHER_PROJECTION_NOTE = (
    "The epochs are in different coordinate systems, with scale factors {reference:.6f} and {current:.6f} here: the "
    "difference is a false even strain."
)


@dataclass(frozen=True, slots=True)
class BudgetLine:
    """One possible part of an even (isotropic) strain in the surface.

    Parameters
    ----------
    name : str
    value, sd : float
        Strain in every direction and its standard error [1]; NaN where it is not known.
    note : str
        What it is, in a sentence or two.
    """

    name: str
    value: float
    sd: float
    note: str

    @property
    def dilation(self) -> float:
        """Relative change of area that it makes, twice the strain [1]."""
        return 2.0 * self.value

    @property
    def dilation_sd(self) -> float:
        """Standard error of `dilation` [1]."""
        return 2.0 * self.sd


def scale_line(scale_ppm: float, sd_ppm: float) -> BudgetLine:
    """Strain from a scale of the current epoch over the reference epoch: 10 ppm make 10 microstrain.

    Parameters
    ----------
    scale_ppm, sd_ppm : float
        Scale less one and its standard error [ppm]; NaN where the surfaces do not fix it.

    Returns
    -------
    BudgetLine
    """
    known = math.isfinite(scale_ppm) and math.isfinite(sd_ppm)
    return BudgetLine("scale", scale_ppm * 1e-6, sd_ppm * 1e-6, SCALE_NOTE if known else SCALE_UNKNOWN)


def temperature_line(change: float, change_sd: float, coefficient: float, coefficient_sd: float) -> BudgetLine:
    """Strain `a dT` of a body that is free to expand, with the error of both factors.

    Parameters
    ----------
    change, change_sd : float
        Temperature of the object, current less reference, and its standard error [K].
    coefficient, coefficient_sd : float
        Coefficient of linear expansion and its standard error [1/K].

    Returns
    -------
    BudgetLine

    Raises
    ------
    OptionError
        A number that is not finite, or a standard error below 0.
    """
    given = (change, change_sd, coefficient, coefficient_sd)
    if not all(map(math.isfinite, given)) or min(change_sd, coefficient_sd) < 0:
        got = ", ".join(f"{number:g}" for number in given)
        required = "finite numbers, and standard errors of at least 0"
        raise OptionError(explain("temperature budget", required, got, "give kelvin and 1/K, with standard errors"))
    sd = math.hypot(coefficient * change_sd, change * coefficient_sd, change_sd * coefficient_sd)
    return BudgetLine("temperature", coefficient * change, sd, TEMPERATURE_NOTE)


def projection_line(factor_reference: float, factor_current: float, *, same_system: bool) -> BudgetLine:
    """Strain from the scale of map projections: none for one system, else the ratio of the factors less one.

    Parameters
    ----------
    factor_reference, factor_current : float
        Scale factor of each epoch's system at the place, see `point_factor` [1].
    same_system : bool
        Both epochs are in one coordinate system.

    Returns
    -------
    BudgetLine
    """
    if same_system:
        return BudgetLine("map projection", 0.0, 0.0, SAME_PROJECTION_NOTE.format(factor=factor_reference))
    note = OTHER_PROJECTION_NOTE.format(reference=factor_reference, current=factor_current)
    return BudgetLine("map projection", factor_current / factor_reference - 1.0, 0.0, note)


def point_factor(wkt: str, x: float, y: float) -> float:
    """Scale factor of a projected coordinate system at a place: length on the map over length on the ellipsoid.

    The root of the areal scale, which for a conformal projection is its one scale factor. Heights above the ellipsoid
    change lengths too (1 in 6.4 million for each metre), alike in both epochs.

    Parameters
    ----------
    wkt : str
        The coordinate system.
    x, y : float
        Easting and northing in that system [m].

    Returns
    -------
    float
        NaN where the system is not projected, or the place lies outside of it.
    """
    from pyproj import CRS, Proj

    system = CRS.from_wkt(wkt)
    flat = next((part for part in (system, *system.sub_crs_list) if part.is_projected and not part.sub_crs_list), None)
    if flat is None:
        return math.nan
    projection = Proj(flat)
    metres = float(flat.axis_info[0].unit_conversion_factor)
    longitude, latitude = projection(x / metres, y / metres, inverse=True)
    if not (math.isfinite(longitude) and math.isfinite(latitude)):
        return math.nan
    return math.sqrt(projection.get_factors(longitude, latitude).areal_scale)
