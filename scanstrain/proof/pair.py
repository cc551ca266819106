# SPDX-License-Identifier: MIT
"""The method held against the user's own scans: pairs without change, and a known change put into a copy.

A scan is split at random into two halves that see the same surface with noise of their own. Whatever the comparison of
the halves finds is false. Then a widening and a bulge of known size, fading out round one place, are put into the
second half, and what comes back is compared with what was put in. Halves share set-up, calibration and weather: two
scans that are known to show no change say more, and are used in the same way where the user names them.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch
from scanstrain.proof.change import WIDTH, Change, check_size, choose_change
from scanstrain.proof.judge import Alarms, Recovered, count_alarms, judge

if TYPE_CHECKING:  # the options and stages are slow to load
    from scanstrain.config import CompareConfig
    from scanstrain.result import Result

Progress = Callable[[str, float], None]


@dataclass(frozen=True, slots=True)
class Proof:
    """What the program makes of a scan whose truth is known.

    Parameters
    ----------
    name : str
        Of the epoch, or of the two that show no change.
    alarms : Alarms
        Without change.
    change : Change
        What was put into the copy.
    recovered : tuple of Recovered
        And how it came back.
    found : float
        Share of gauges found among those where a component was put in that is seen in 80 of 100 cases; NaN if none.
    false : float
        Share of discoveries at gauges where next to nothing was put in; NaN without discoveries.
    warnings : tuple of str
        Sentences for the user.
    """

    name: str
    alarms: Alarms
    change: Change
    recovered: tuple[Recovered, ...]
    found: float
    false: float
    warnings: tuple[str, ...] = ()


def halves(epoch: Epoch, *, seed: int = 0) -> tuple[Epoch, Epoch]:
    """Split an epoch at random into two with half of the points each.

    Parameters
    ----------
    epoch : Epoch
        One scan.
    seed : int
        Of the draw.

    Returns
    -------
    pair of Epoch
        Points of the same surface with noise of their own.
    """
    first = np.zeros(len(epoch), bool)
    first[np.random.default_rng(seed).permutation(len(epoch))[: len(epoch) // 2]] = True
    return _part(epoch, first, "first half"), _part(epoch, ~first, "second half")


def _part(epoch: Epoch, chosen: NDArray[np.bool_], label: str) -> Epoch:
    fields = ("intensity", "colour", "setup", "classification")
    kept: dict[str, Any] = {
        name: None if (values := getattr(epoch, name)) is None else values[chosen] for name in fields
    }
    return replace(epoch, points=epoch.points[chosen], label=f"{epoch.label}, {label}", **kept)


def prove_pair(
    reference: Epoch,
    current: Epoch,
    config: CompareConfig,
    *,
    name: str,
    strain: float | None = None,
    height: float | None = None,
    progress: Progress | None = None,
) -> Proof:
    """Compare two epochs that show no change, then put a change into the second and compare again.

    Parameters
    ----------
    reference, current : Epoch
        In one local frame.
    config : CompareConfig
        Options of all stages, as for a real comparison.
    name : str
        What to call the pair.
    strain, height : float, optional
        Size of the change [1] and [m]; by default five typical standard errors of the first comparison.
    progress : callable, optional
        Called with a phrase and the share done.

    Returns
    -------
    Proof

    Raises
    ------
    ScanstrainError
        As a comparison does.
    """
    from scanstrain.pipeline import compare_epochs

    check_size(strain=strain, height=height)
    say = progress or _silent
    still = compare_epochs(reference, current, config, progress=lambda step, share: say(step, share / 2))
    change = choose_change(still, strain=strain, height=height)
    # The change is meant in the frame of the reference, where the gauges are.
    T = still.registration.T_ref_cur
    there = current.moved(T)
    back = change.at(there.points) @ T[:3, :3]
    moved = replace(current, points=current.points + back)
    altered = compare_epochs(reference, moved, config, progress=lambda step, share: say(step, 0.5 + share / 2))
    recovered, found, false = judge(altered, change)
    return Proof(name, count_alarms(still), change, recovered, found, false, _doubts(change, still))


def _silent(_step: str, _share: float) -> None:
    """Report progress to nobody."""


def _doubts(change: Change, still: Result) -> tuple[str, ...]:
    said = []
    if change.width < WIDTH * still.field.gauge_length:
        said.append(
            f"The object is small for gauges of {still.field.gauge_length:g} m: the change put in is only "
            f"{change.width:.2f} m wide, so averaging takes more off it. Truth is averaged in the same way."
        )
    return (*said, *still.warnings)
