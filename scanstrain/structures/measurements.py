# SPDX-License-Identifier: MIT
"""What is measured at a section: diameters, chords, ovality, movement of crown, invert and springlines."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.structures.ellipse import Ellipse, ovality_gradient
from scanstrain.structures.harmonics import ORDERS, Harmonics, moved_along, terms
from scanstrain.structures.outline import Local, Outline, local_parabola, unit_variance

FloatArray = NDArray[np.float64]
Pair = tuple[float, float]
Measured = Iterator[tuple[str, float, float]]

CONVERGENCE_DEFINITION = (
    "The change of a chord is positive where it became longer; convergence, the shortening, is its negative. Chords "
    "join the outlines at fixed clock angles about the frozen axis, in the plane of the section."
)
OVALITY_DEFINITION = (
    "Ovality is the longest minus the shortest diameter of the fitted ellipse, over the mean of the two. With small "
    "noise it is never below 0."
)
INEXTENSIBLE_DEFINITION = (
    "Change of the chord between two marked points of the lining if its mid-line keeps its length: the movement along "
    "the arc then follows from the radial change. It rests on the Fourier series, and on that assumption."
)

QUANTITIES: Mapping[str, tuple[str, str]] = {
    "horizontal_diameter_ref": ("m", "chord from 9 to 3 o'clock, reference epoch"),
    "horizontal_diameter_cur": ("m", "the same, current epoch"),
    "horizontal_diameter_change": ("m", "its change, longer is positive"),
    "vertical_diameter_ref": ("m", "chord from 12 to 6 o'clock, reference epoch"),
    "vertical_diameter_cur": ("m", "the same, current epoch"),
    "vertical_diameter_change": ("m", "its change, longer is positive"),
    "mean_diameter_ref": ("m", "mean diameter of the fitted ellipse, reference epoch"),
    "mean_diameter_cur": ("m", "the same, current epoch"),
    "mean_diameter_change": ("m", "its change, longer is positive"),
    "ovality_ref": ("1", "longest minus shortest diameter of the ellipse over their mean, reference epoch"),
    "ovality_cur": ("1", "the same, current epoch"),
    "ovality_change": ("1", "its change"),
    "longest_diameter_hour_ref": ("h", "clock hour of the longest diameter, 0 to 6, reference epoch"),
    "longest_diameter_hour_cur": ("h", "the same, current epoch"),
    "crown_up": ("m", "movement of the crown, upwards positive"),
    "invert_up": ("m", "movement of the invert, upwards (heave) positive"),
    "springline_left_out": ("m", "movement of the lining at 9 o'clock, outwards positive"),
    "springline_right_out": ("m", "movement of the lining at 3 o'clock, outwards positive"),
    "mean_radial_change": ("m", "Fourier order 0: the ring grew evenly, outwards positive"),
    "shift_up": ("m", "Fourier order 1: the ring moved upwards"),
    "shift_right": ("m", "Fourier order 1: the ring moved towards 3 o'clock"),
    "ovalisation_upright": ("m", "Fourier order 2, cosine: crown and invert moved outwards"),
    "ovalisation_diagonal": ("m", "Fourier order 2, sine: half past 1 and half past 7 moved outwards"),
    "wave_3_cos": ("m", "Fourier order 3, cosine of three times the clock angle"),
    "wave_3_sin": ("m", "Fourier order 3, sine"),
    "wave_4_cos": ("m", "Fourier order 4, cosine of four times the clock angle"),
    "wave_4_sin": ("m", "Fourier order 4, sine"),
}
"""Unit and meaning of every quantity that each section has; chords asked for come on top, see `chord_name`."""

_FOURIER = list(QUANTITIES)[-(2 * ORDERS + 1) :]

DIAMETERS: Mapping[str, Pair] = {"horizontal_diameter": (9.0, 3.0), "vertical_diameter": (12.0, 6.0)}

CLEAR = 2.0
"""An ellipse shows a longest diameter where its half-difference of axes passes this many standard errors."""


@dataclass(frozen=True, slots=True)
class Pairing:
    """Both epochs of a section on the pieces of arc that both show.

    Parameters
    ----------
    reference, current : Outline
    change : Outline
        Current minus reference radius; weights are inverse variances in points of equal noise.
    frame : ndarray of shape (3, 3)
        Columns right, up, forward.
    centre : ndarray of shape (3,)
        The axis at the section, local coordinates [m].
    datum : callable or None
        From places (n, 3) to the covariance (n, 3, 3) of a displacement there from the registration [m^2].
    """

    reference: Outline
    current: Outline
    change: Outline
    frame: FloatArray
    centre: FloatArray
    datum: Callable[[FloatArray], FloatArray] | None


def chord_name(pair: Pair) -> str:
    """Name a chord by its clock hours.

    >>> chord_name((10.5, 1.5))
    'chord_10.5_1.5'
    """
    return "chord_" + "_".join(f"{hour:g}" for hour in pair)


def chord_units(pair: Pair) -> dict[str, tuple[str, str]]:
    """Return unit and meaning of the quantities of one chord."""
    between = "chord from {:g} to {:g} o'clock".format(*pair)
    name = chord_name(pair)
    return {
        f"{name}_ref": ("m", f"{between}, reference epoch"),
        f"{name}_cur": ("m", "the same, current epoch"),
        f"{name}_change": ("m", "its change, longer is positive"),
        f"{name}_change_inextensible": ("m", "its change between marked points if the mid-line keeps its length"),
    }


def chords_of(pairing: Pairing, chords: Mapping[str, Pair], waves: Harmonics | None) -> Measured:
    """Yield lengths and changes of chords with their standard errors; a rigid motion does not change a chord."""
    ends = np.array(list(chords.values())).reshape(-1, 2) * (np.pi / 6)
    before, before_sd = _at(pairing.reference, ends.ravel())
    after_sd = _at(pairing.current, ends.ravel())[1]
    moved, moved_sd = _at(pairing.change, ends.ravel())
    for k, name in enumerate(chords):
        here = slice(2 * k, 2 * k + 2)
        length, gradient = _chord(ends[k], before[here])
        longer = _chord(ends[k], before[here] + moved[here])[0]
        # the current length is that of the reference outline plus the change, so that the three agree
        yield f"{name}_ref", length, _rss(gradient * before_sd[here])
        yield f"{name}_cur", longer, _rss(gradient * after_sd[here])
        yield f"{name}_change", longer - length, _rss(gradient * moved_sd[here])
        if name not in DIAMETERS:
            yield f"{name}_change_inextensible", *_marked_points(ends[k], before[here], waves)


def movements_of(pairing: Pairing) -> Measured:
    """Yield the radial movement at 12, 6, 9 and 3 o'clock, registration error included where it is known."""
    right, up = pairing.frame[:, 0], pairing.frame[:, 1]
    places = {
        "crown_up": (0.0, up, 1.0),
        "invert_up": (np.pi, -up, -1.0),
        "springline_left_out": (-np.pi / 2, -right, 1.0),
        "springline_right_out": (np.pi / 2, right, 1.0),
    }
    angles = np.array([angle for angle, _, _ in places.values()])
    moved, sd = _at(pairing.change, angles)
    radius = _at(pairing.reference, angles)[0]
    for k, (name, (_, outwards, sign)) in enumerate(places.items()):
        extra = _datum_sd(pairing, pairing.centre + radius[k] * outwards, outwards)
        yield name, sign * moved[k], float(np.hypot(sd[k], extra))


def waves_of(pairing: Pairing, waves: Harmonics | None) -> Measured:
    """Yield the Fourier coefficients of the radial change; the shift carries the registration error too."""
    for k, name in enumerate(_FOURIER):
        if waves is None or k >= len(waves.coefficients):
            yield name, np.nan, np.nan
            continue
        sd = np.sqrt(waves.covariance[k, k])
        if k in (1, 2):
            sd = np.hypot(sd, _datum_sd(pairing, pairing.centre, pairing.frame[:, 2 - k]))
        yield name, float(waves.coefficients[k]), float(sd)


def ellipses_of(before: Ellipse | None, after: Ellipse | None, change_covariance: FloatArray) -> Measured:
    """Yield mean diameter, ovality and direction of both ellipses, and the changes.

    What both epochs have alike, such as a shape that is no ellipse, cancels in the changes: their covariance (5, 5)
    comes from the scatter of differences.
    """
    for epoch, ellipse in (("ref", before), ("cur", after)):
        if ellipse is None:
            for name in ("mean_diameter", "ovality", "longest_diameter_hour"):
                yield f"{name}_{epoch}", np.nan, np.nan
            continue
        C = ellipse.covariance
        g = ovality_gradient(ellipse.parameters)
        yield f"mean_diameter_{epoch}", ellipse.mean_diameter, float(2 * np.sqrt(C[2, 2]))
        yield f"ovality_{epoch}", ellipse.ovality, float(np.sqrt(g @ C @ g))
        yield f"longest_diameter_hour_{epoch}", *_longest(ellipse)
    if before is None or after is None:
        yield "mean_diameter_change", np.nan, np.nan
        yield "ovality_change", np.nan, np.nan
        return
    change = after.mean_diameter - before.mean_diameter
    yield "mean_diameter_change", change, float(2 * np.sqrt(change_covariance[2, 2]))
    g, turned = ovality_gradient(after.parameters), ovality_gradient(before.parameters)
    turned = g - turned
    variance = g @ change_covariance @ g + turned @ before.covariance @ turned
    yield "ovality_change", after.ovality - before.ovality, float(np.sqrt(variance))


def _at(outline: Outline, angles: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Value and standard error of an outline at clock angles; NaN where they are not supported."""
    fit: Local = local_parabola(outline.angle, outline.radius, outline.weight, angles)
    sd = np.sqrt(fit.factor * unit_variance(outline.angle, outline.radius, outline.weight))
    return np.where(np.isfinite(sd), fit.value, np.nan), sd


def _chord(ends: FloatArray, radius: FloatArray) -> tuple[float, FloatArray]:
    """Length of the chord between two places of a ring, and its derivative with respect to their radii."""
    out = _out(ends)
    along = out[1] * radius[1] - out[0] * radius[0]
    length = float(np.hypot(*along))
    return length, np.array([-along @ out[0], along @ out[1]]) / length


def _out(angles: FloatArray) -> FloatArray:
    """Outward directions (n, 2), right and up, at clock angles."""
    return np.stack([np.sin(angles), np.cos(angles)], axis=1)


def _marked_points(ends: FloatArray, radius: FloatArray, waves: Harmonics | None) -> tuple[float, float]:
    """Change of a chord between material points of an inextensible ring, and its standard error."""
    if waves is None or waves.order < 2:
        return np.nan, np.nan
    along_arc, radial = moved_along(ends, waves.order), terms(ends, waves.order)
    # a point that moved along its arc lies on the current outline at the angle that it moved to
    turned = ends + along_arc @ waves.coefficients / radius
    moved = _out(turned) * (radius + terms(turned, waves.order) @ waves.coefficients)[:, None]
    length, gradient = _chord(ends, radius)
    along = (_out(ends)[1] * radius[1] - _out(ends)[0] * radius[0]) / length
    onward = np.stack([np.cos(ends), -np.sin(ends)], axis=1) @ along
    g = gradient @ radial + onward[1] * along_arc[1] - onward[0] * along_arc[0]
    return float(np.hypot(*(moved[1] - moved[0])) - length), float(np.sqrt(g @ waves.covariance @ g))


def _longest(ellipse: Ellipse) -> tuple[float, float]:
    """Clock hour of the longest diameter; NaN where the ellipse does not differ from a circle."""
    p, q = ellipse.parameters[3:]
    half = np.hypot(p, q)
    across = np.array([-q, p]) / max(half, np.finfo(float).tiny)
    C = ellipse.covariance[3:, 3:]
    if not half > CLEAR * np.sqrt(np.linalg.eigvalsh(C)[-1]):
        return np.nan, np.nan
    clock = (np.pi / 2 - np.arctan2(q, p) / 2) % np.pi
    return float(clock * 6 / np.pi), float(np.sqrt(across @ C @ across) / (2 * half) * 6 / np.pi)


def _datum_sd(pairing: Pairing, place: FloatArray, direction: FloatArray) -> float:
    if pairing.datum is None or not np.isfinite(place).all():
        return 0.0
    return float(np.sqrt(direction @ pairing.datum(place[None])[0] @ direction))


def _rss(parts: FloatArray) -> float:
    return float(np.sqrt((parts**2).sum()))
