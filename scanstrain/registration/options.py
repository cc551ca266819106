# SPDX-License-Identifier: MIT
"""Options of the registration stage, checked once at the door."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import MIN_POINTS, Epoch
from scanstrain.errors import OptionError, OverlapError, explain
from scanstrain.registration.disguise import far_words, refuse_other_unit
from scanstrain.registration.start import GivenStart, check_start
from scanstrain.registry import unknown_name

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

STARTS = ("auto", "identity", "coarse")
GROUNDS = ("auto", "all")
MAX_COORDINATE = 1e4
"""Local coordinates beyond this [m] lose digits in the normal equations: the origin is no local one."""


@dataclass(frozen=True, slots=True)
class Options:
    """What `register` was called with."""

    start: str | FloatArray | GivenStart
    stable: str | BoolArray
    excluded: BoolArray | None
    capture_range: float
    seed: int
    max_iterations: int
    progress: Callable[[float], None] | None
    use_intensity: bool = True

    @property
    def candidates(self) -> BoolArray | None:
        """Reference points that may serve as stable ground; None for all of them."""
        if not isinstance(self.stable, np.ndarray):
            return None if self.excluded is None else ~self.excluded
        return self.stable if self.excluded is None else self.stable & ~self.excluded

    def report(self, done: float) -> None:
        """Pass on the finished share."""
        if self.progress is not None:
            self.progress(done)


def check(reference: Epoch, current: Epoch, options: Options) -> None:
    """Refuse what the stage cannot work on.

    Raises
    ------
    OptionError
    """
    _check_frames(reference, current)
    _check_choice("start", options.start, STARTS)
    _check_choice("stable", options.stable, GROUNDS)
    if not isinstance(options.start, str):
        check_start(options.start)
    for name, mask in (("stable", options.stable), ("excluded", options.excluded)):
        if isinstance(mask, np.ndarray):
            _check_mask(name, mask, len(reference))
    if options.candidates is not None and options.candidates.sum() < MIN_POINTS:
        left = f"{int(options.candidates.sum())}"
        raise OptionError(explain("stable ground", f"at least {MIN_POINTS} points", left, "name a larger stable area"))
    if not (np.isfinite(options.capture_range) and options.capture_range > 0):
        raise OptionError(
            explain("capture_range", "a length in metres above 0", f"{options.capture_range}", "give 0.3")
        )
    if options.max_iterations < 1:
        raise OptionError(explain("max_iterations", "at least 1", f"{options.max_iterations}", "give for example 60"))


def _check_frames(reference: Epoch, current: Epoch) -> None:
    if not np.array_equal(reference.origin, current.origin):
        raise OptionError(
            explain(
                "registration",
                "two epochs in one local frame",
                f"origins {reference.origin.tolist()} and {current.origin.tolist()}",
                "shift one with Epoch.shifted",
            )
        )
    refuse_other_unit(reference, current)
    for epoch in (reference, current):
        largest = float(np.abs(epoch.points).max()) if len(epoch) else 0.0
        if not largest <= MAX_COORDINATE:
            raise OverlapError(
                explain(
                    f"registration: {epoch.label or 'epoch'}",
                    f"both scans within {MAX_COORDINATE:.0f} m of one place",
                    f"points {largest:.6g} m from the middle of the reference"
                    + (f": {words}" if (words := far_words(reference, current)) else ""),
                    "check that both are in the same coordinate system and unit",
                )
            )


def _check_choice(name: str, value: object, known: tuple[str, ...]) -> None:
    if isinstance(value, np.ndarray | GivenStart):
        return
    if value not in known:
        raise OptionError(unknown_name(name, str(value), list(known)))


def _check_mask(name: str, mask: BoolArray, points: int) -> None:
    if mask.shape != (points,) or mask.dtype != np.bool_:
        raise OptionError(
            explain(
                name,
                f"one bool a reference point, shape ({points},)",
                f"{mask.dtype} of shape {mask.shape}",
                "make a mask of the reference points",
            )
        )
