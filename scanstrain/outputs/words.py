# SPDX-License-Identifier: MIT
"""Titles and numbers as a person reads them; files for machines keep SI units and names."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence

from scanstrain.attributes import BY_NAME, Attribute
from scanstrain.errors import OptionError
from scanstrain.neighbourhood.result import STATUS_WORDS, Status
from scanstrain.registry import unknown_name

NORMAL_95 = 1.96
"""Half width of a 95 % interval in standard errors of a normal distribution."""

TITLES: dict[str, tuple[str, str]] = {
    "disp_x": ("Displacement along x", "file axis, after registration"),
    "disp_y": ("Displacement along y", "file axis, after registration"),
    "disp_z": ("Displacement along z", "file axis, after registration"),
    "disp_n": ("Normal displacement", "positive: the surface moved towards its free side"),
    "disp_n_sd": ("Standard error of the normal displacement", "registration included"),
    "strain_xx": ("Surface strain xx", "file axes; positive: elongation"),
    "strain_yy": ("Surface strain yy", "file axes; positive: elongation"),
    "strain_zz": ("Surface strain zz", "file axes; positive: elongation"),
    "strain_xy": ("Surface shear strain xy", "file axes; tensor shear"),
    "strain_xz": ("Surface shear strain xz", "file axes; tensor shear"),
    "strain_yz": ("Surface shear strain yz", "file axes; tensor shear"),
    "strain_1": ("Larger principal strain", "in the surface; positive: elongation; noise drives it upwards"),
    "strain_2": ("Smaller principal strain", "in the surface; positive: elongation; noise drives it downwards"),
    "strain_1_sd": ("Standard error of the larger principal strain", "from observations only"),
    "strain_2_sd": ("Standard error of the smaller principal strain", "from observations only"),
    "shear_max": ("Largest shear strain", "in the surface; engineering shear; noise drives it upwards"),
    "dilation": ("Relative change of area", "positive: the surface grew"),
    "strain_u": ("Strain along u", "hoop in a tunnel, horizontal on a wall; positive: elongation"),
    "strain_v": ("Strain along v", "axial in a tunnel, upward on a wall; positive: elongation"),
    "shear_uv": ("Shear strain between u and v", "structure's own axes; tensor shear"),
    "rot_x": ("Rotation about x", "component of the rotation vector, after registration"),
    "rot_y": ("Rotation about y", "component of the rotation vector, after registration"),
    "rot_z": ("Rotation about z", "component of the rotation vector, after registration"),
    "tilt": ("Tilt", "rotation of the surface normal, after registration; noise drives it upwards"),
    "tilt_sd": ("Standard error of the tilt", "registration included"),
    "spin": ("Spin", "rotation about the surface normal, after registration"),
    "spin_sd": ("Standard error of the spin", "registration included"),
    "curv_1": ("Larger change of curvature", "positive: more convex towards the free side"),
    "curv_2": ("Smaller change of curvature", "positive: more convex towards the free side"),
    "curv_sd": ("Standard error of the change of curvature", "from observations only"),
    "bend_1": ("Larger bending strain at the face", "from the change of curvature and the thickness given"),
    "bend_2": ("Smaller bending strain at the face", "from the change of curvature and the thickness given"),
    "significance": ("p-value of “nothing changed here”", "small: the observable components changed"),
    "discovery": ("Places that changed", "false-discovery control over the whole map"),
    "observed": ("Observed components", "of normal and two in-plane displacements, tilt, curvature, strain, spin"),
    "status": ("Status", "why a place has no number"),
    "stable": ("Stable ground", "places that the registration stands on"),
    "gauge_points": ("Points behind each gauge", "reference points used by the local fit"),
    "chainage": ("Chainage", "along the axis of the tunnel"),
    "clock": ("Clock angle", "from the crown, clockwise for somebody who looks along the axis"),
}
"""Title in words and what the number means, for every attribute."""

STANDARD_ERROR = {
    "disp_n": "disp_n_sd",
    "strain_1": "strain_1_sd",
    "strain_2": "strain_2_sd",
    "tilt": "tilt_sd",
    "spin": "spin_sd",
    "curv_1": "curv_sd",
    "curv_2": "curv_sd",
}
"""The attribute that holds the standard error of another one."""

OBSERVED_WORDS = (
    "normal displacement",
    "tilt",
    "change of curvature",
    "displacement along u",
    "displacement along v",
    "in-plane strain",
    "spin",
)
"""Meaning of the bits of `observed`, lowest bit first."""

_LIMIT_FAMILIES = {
    "strain": "strain_1 strain_2 strain_u strain_v shear_uv "
    "strain_xx strain_yy strain_zz strain_xy strain_xz strain_yz",
    "curvature": "curv_1 curv_2",
}


def attribute_of(name: str) -> Attribute:
    """Look an attribute up; a name that does not exist raises `OptionError` with the nearest one that does."""
    if name not in BY_NAME:
        raise OptionError(unknown_name("attribute", name, list(BY_NAME)))
    return BY_NAME[name]


def status_word(code: int) -> str:
    """Say what a status code means; a code of a later version keeps its number."""
    return STATUS_WORDS[Status(code)] if code in set(Status) else f"code {code}"


def limit_key(name: str, known: Iterable[str]) -> str | None:
    """Name the detection limit that applies to an attribute, or None where none is stated."""
    limits = set(known)
    if name in limits:
        return name
    return next((key for key, names in _LIMIT_FAMILIES.items() if name in names.split() and key in limits), None)


def digits(value: float, significant: int = 2) -> int:
    """Count the decimals that show `significant` figures of a value.

    >>> digits(0.0312), digits(6.2), digits(480.0)
    (3, 1, 0)
    """
    if not math.isfinite(value) or value == 0:
        return 0
    return max(0, significant - 1 - math.floor(math.log10(abs(value))))


def number(value: float, decimals: int, *, sign: bool = False) -> str:
    """Write a number with a thin grouping of thousands, and never as minus zero.

    >>> number(12345.6, 0), number(-0.0001, 2), number(6.2, 1, sign=True)
    ('12 346', '0.00', '+6.2')
    """
    rounded = round(value, decimals) + 0.0
    return f"{rounded:{'+' if sign and rounded else ''},.{decimals}f}".replace(",", " ")


def amount(value: float, attribute: Attribute) -> str:
    """Write a stored value in the unit for a person, with two figures.

    >>> amount(0.000412, BY_NAME["disp_n"])
    '0.41 mm'
    """
    person = value * attribute.factor
    return f"{number(person, digits(person))} {attribute.person}".rstrip()


def interval(value: float, sd: float, attribute: Attribute) -> str:
    """Write a stored value with the half width of its 95 % interval, to two figures of that width.

    >>> interval(0.0062, 0.00015, BY_NAME["disp_n"])
    '+6.20 ± 0.29 mm'
    """
    half = NORMAL_95 * sd * attribute.factor
    decimals = digits(half)
    signed = attribute.kind == "signed"
    return f"{number(value * attribute.factor, decimals, sign=signed)} ± {number(half, decimals)} {attribute.person}"


def listed(words: Sequence[str]) -> str:
    """Join words as a sentence does.

    >>> listed(["tilt"]), listed(["tilt", "spin", "strain"])
    ('tilt', 'tilt, spin and strain')
    """
    return words[0] if len(words) == 1 else f"{', '.join(words[:-1])} and {words[-1]}"


def percent(share: float) -> str:
    """Write a share so that neither 0 % nor 100 % stands for something else.

    >>> percent(0.0004), percent(0.123), percent(0.9999), percent(1.0)
    ('under 0.1 %', '12 %', 'over 99.9 %', '100 %')
    """
    if 0 < share < 0.001:
        return "under 0.1 %"
    if 0.999 < share < 1:
        return "over 99.9 %"
    return f"{100 * share:.1f} %" if 0 < share < 0.01 or 0.99 < share < 1 else f"{100 * share:.0f} %"
