# SPDX-License-Identifier: MIT
"""Pairs of named targets, refused where they cannot fix a motion: too few, on a line, mirrored, in other units."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanstrain.errors import OptionError, RegistrationError, explain
from scanstrain.registration.mixups import axes_words, unit_words
from scanstrain.registration.rigid import rigid_fit

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

LEAST = 3
"""Targets that fix a rigid motion."""
LARGEST_TURN_SD = 0.02
"""Standard error of the turn about the line that targets nearly lie on [rad] beyond which they do not fix it: 20 mm
at a metre off the line, where the capture range ends soon."""
SAME_UNIT, NEAR_UNIT = 2.0, 1.02
"""Factor between distances in both epochs that no target blunder explains; how near a unit's factor is named."""
MIRROR_GAIN = 10.0
"""How many times smaller the residuals of a mirrored fit must be before the lists are called mirrored."""
CONTRADICTION = 10.0
"""Residuals this many times their standard deviations, with no blunder left to name, are no fit."""


@dataclass(frozen=True, slots=True)
class Pairs:
    """Checked input: coordinates (n, 3) [m] and variances (n, 3) [m^2]."""

    names: tuple[str, ...]
    reference: FloatArray
    current: FloatArray
    reference_variance: FloatArray
    current_variance: FloatArray

    def noise(self) -> FloatArray:
        """Standard deviation of a coordinate difference, one a target [m]."""
        return np.asarray(np.sqrt((self.reference_variance + self.current_variance).mean(axis=1)))


def check_pairs(
    names: Sequence[str], reference: ArrayLike, current: ArrayLike, reference_sd: ArrayLike, current_sd: ArrayLike
) -> Pairs:
    """Check target pairs and refuse what fixes no motion.

    Parameters
    ----------
    names, reference, current, reference_sd, current_sd
        As of `targets.fit_targets`.

    Returns
    -------
    Pairs

    Raises
    ------
    OptionError
        Shapes, values or names that are wrong.
    RegistrationError
        Too few targets, all on one line, mirrored, or in different units.
    """
    p, q = np.asarray(reference, np.float64), np.asarray(current, np.float64)
    n = len(names)
    if p.shape != (n, 3) or q.shape != (n, 3):
        got = f"{n} names, shapes {p.shape} and {q.shape}"
        required = "one name and three coordinates a target in both epochs"
        raise OptionError(explain("targets", required, got, "pair them"))
    known = [str(name) for name in names]
    twice = sorted({name for name in known if known.count(name) > 1})
    if twice or not all(name.strip() for name in known):
        got = f"{twice[0]!r} more than once" if twice else "an empty name"
        raise OptionError(explain("targets", "names that each stand for one target", got, "name every target once"))
    if not (np.isfinite(p).all() and np.isfinite(q).all()):
        bad = known[int((~np.isfinite(p) | ~np.isfinite(q)).any(axis=1).argmax())]
        raise OptionError(explain(f"target {bad}", "finite coordinates", "NaN or infinity", "remove or mend it"))
    if n < LEAST:
        raise RegistrationError(
            explain("targets", f"at least {LEAST} targets, four to find a blunder", f"{n}", "add targets")
        )
    pairs = Pairs(tuple(known), p, q, _variance(reference_sd, n), _variance(current_sd, n))
    _refuse_units(pairs)
    _refuse_line(pairs)
    _refuse_mirror(pairs)
    return pairs


def _variance(sd: ArrayLike, n: int) -> FloatArray:
    s = np.asarray(sd, np.float64)
    if s.shape not in ((), (n,), (n, 3)) or not np.isfinite(s).all() or (s <= 0).any():
        required = f"standard deviations in metres above 0, one for all, ({n},) or ({n}, 3)"
        got = f"shape {s.shape}, smallest {s.min() if s.size else np.nan:.6g}"
        raise OptionError(explain("targets", required, got, "give for example 0.002"))
    return np.asarray(np.broadcast_to(s[:, None] if s.ndim == 1 else s, (n, 3)) ** 2)


def _refuse_units(pairs: Pairs) -> None:
    from scipy.spatial.distance import pdist

    mine, theirs = pdist(pairs.reference), pdist(pairs.current)
    apart = (mine > 0) & (theirs > 0)
    # The median over all pairs of targets, so that a few blunders do not pass for a unit.
    ratio = float(np.median(theirs[apart] / mine[apart])) if apart.any() else 1.0
    if 1 / SAME_UNIT < ratio < SAME_UNIT:
        return
    words = unit_words(ratio, NEAR_UNIT, "the list of current targets", "the list of reference targets")
    got = f"distances that are {ratio:.5g} times as long in the current epoch" + (f": {words}" if words else "")
    raise RegistrationError(explain("targets", "both lists in metres", got, "convert one list or pair the names anew"))


def _off_line(pairs: Pairs, used: BoolArray) -> tuple[float, float]:
    """Rms distance of targets from their best line [m], and the standard error of the turn about it [rad]."""
    values = [
        np.linalg.svd(x[used] - x[used].mean(axis=0), compute_uv=False)[1] for x in (pairs.reference, pairs.current)
    ]
    spread = float(min(values))
    noise = float(np.sqrt((pairs.noise()[used] ** 2).mean()))
    return spread / np.sqrt(used.sum()), noise / spread if spread > 0 else np.inf


def fixed(pairs: Pairs, used: BoolArray) -> bool:
    """Whether targets fix a motion."""
    return bool(used.sum() >= LEAST and _off_line(pairs, used)[1] <= LARGEST_TURN_SD)


def _refuse_line(pairs: Pairs) -> None:
    off, turn = _off_line(pairs, np.ones(len(pairs.names), bool))
    if turn > LARGEST_TURN_SD:
        got = f"targets within {off * 1e3:.3g} mm (rms) of one line: a turn about it, in effect, would be free"
        raise RegistrationError(explain("targets", "targets off a common line", got, "add a target off the line"))


def _refuse_mirror(pairs: Pairs) -> None:
    """Refuse lists of opposite hands: targets in one plane have none, and pass."""
    weight = 1 / pairs.noise() ** 2
    mirror = np.diag([-1.0, 1.0, 1.0])
    # About the middles, where survey coordinates lose no digits.
    p, q = (x - x.mean(axis=0) for x in (pairs.reference, pairs.current))
    _, turned = rigid_fit(q, p, weight)
    T, mirrored = rigid_fit(q @ mirror, p, weight)
    rms = [float(np.sqrt((e**2).sum(axis=1).mean())) for e in (turned, mirrored)]
    if rms[0] < CONTRADICTION * float(pairs.noise().mean()) or rms[0] < MIRROR_GAIN * rms[1]:
        return
    words = axes_words(T[:3, :3] @ mirror)
    got = (
        f"lists that fit mirrored (rms {rms[1] * 1e3:.3g} mm) and not turned (rms {rms[0] * 1e3:.3g} mm): "
        f"{words or 'axes are swapped or one is negated'} in one of them"
    )
    raise RegistrationError(explain("targets", "two lists of one hand", got, "put the axes in one order and sense"))
