# SPDX-License-Identifier: MIT
"""What a user must know about a registration, in sentences."""

from __future__ import annotations

from scanstrain.registration.result import StableGround, WeakDirection
from scanstrain.registration.stable import CLEAR_SHARE, RIVAL

CLEAR_NAMED = 0.85
"""Below this share of agreeing patches, ground that the user named is doubtful."""
LOW_OVERLAP = 0.3
"""Share of the reference surface below which the overlap is worth a warning."""


def doubts(ground: StableGround | None, weak: tuple[WeakDirection, ...], overlap: float) -> list[str]:
    """List the warnings of a finished registration.

    Parameters
    ----------
    ground : StableGround or None
    weak : tuple of WeakDirection
        Motions that were held.
    overlap : float
        Share of the reference surface that the current epoch also shows.
    """
    doubt = _about_ground(ground) if ground else None
    said = [doubt] if doubt else []
    if weak:
        names = "; ".join(direction.description for direction in weak)
        said.append(f"the surfaces do not fix these motions, which were held at the start value: {names}")
    if overlap < LOW_OVERLAP:
        said.append(f"the current epoch shows only {overlap:.0%} of the reference surface")
    return said


def _about_ground(ground: StableGround) -> str | None:
    """Say what is doubtful about the stable ground."""
    share, effect = f"{ground.share:.0%}", f"displacements would change by up to {ground.second_shift * 1e3:.1f} mm"
    other = f"{ground.second_share:.0%} shares another; if that were the stable part, {effect}"
    if ground.chosen_by != "auto":
        if ground.share >= CLEAR_NAMED:
            return None
        rest = f" and {other}" if ground.second_share else ""
        return f"only {share} of the ground taken as stable shares one motion{rest}: check that it stood still"
    remedy = "name stable ground to be sure"
    if ground.by_strength:
        return (
            f"stable ground is ambiguous: {share} of the matched surface shares the motion that was taken, because "
            f"this part fixes a motion better, and {other}: {remedy}"
        )
    if ground.second_share > RIVAL * ground.share:
        return f"stable ground is ambiguous: {share} of the matched surface shares one motion and {other}: {remedy}"
    if ground.share < CLEAR_SHARE:
        return (
            f"only {share} of the matched surface shares one rigid motion; with about half of it moved "
            "nothing but named stable ground can tell which half: check the stable area"
        )
    return None
