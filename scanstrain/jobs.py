# SPDX-License-Identifier: MIT
"""From a batch file to its comparisons, each with all that it takes to run it, here or on another machine."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

from scanstrain.comparison import EpochLabel
from scanstrain.errors import OptionError
from scanstrain.program import identity
from scanstrain.registry import unknown_name

if TYPE_CHECKING:  # the options load NumPy, which must not happen before a worker has set its threads
    from scanstrain.config import BatchConfig, CompareConfig, EpochEntry


@dataclass(frozen=True, slots=True)
class Job:
    """One comparison of a batch.

    Parameters
    ----------
    name : str
        REFERENCE_to_CURRENT, behind PLACE/ where there are places.
    called : frozenset of str
        Everything by which it can be chosen: its names, its labels, its place.
    reference, current, folder : Path
        Scans, and where the result goes.
    config : CompareConfig
    assume_same_crs, fresh : bool
    labels : pair of (str, str or None)
        Of the epochs, each with its date.
    points : tuple of int
        Points of the reference and of the current scan, 0 where they cannot be told.
    program : dict of str to str
        Of the process that planned it; workers elsewhere must be the same.
    """

    name: str
    called: frozenset[str]
    reference: Path
    current: Path
    folder: Path
    config: CompareConfig
    assume_same_crs: bool
    fresh: bool
    labels: tuple[EpochLabel, EpochLabel]
    points: tuple[int, int]
    program: dict[str, str] = field(default_factory=identity)

    @property
    def size(self) -> int:
        """Points of both scans."""
        return sum(self.points)


def plan_jobs(config: BatchConfig, only: Sequence[str] = (), *, fresh: bool = False) -> list[Job]:
    """List the comparisons of a batch in the order of its file, place by place.

    Parameters
    ----------
    config : BatchConfig
        With absolute paths.
    only : sequence of str
        Labels, places or names; all comparisons if empty.
    fresh : bool
        Passed on.

    Raises
    ------
    OptionError
        Something in `only` is unknown, with the nearest name; or a pattern finds nothing.
    """
    jobs = list(_all_jobs(config, fresh=fresh))
    known = sorted(set[str]().union(*(job.called for job in jobs)))
    for label in only:
        if label not in known:
            raise OptionError(unknown_name("only", label, known))
    return [job for job in jobs if not only or job.called & set(only)]


def _all_jobs(config: BatchConfig, *, fresh: bool) -> Iterator[Job]:
    from scanstrain.config import sites_of
    from scanstrain.io.count import expected_points

    for site in sites_of(config):
        options = site.batch.compare_config()
        points = {entry.file: expected_points(entry.file) for entry in site.batch.epoch}
        for reference, current in site.batch.pairs():
            pair = f"{reference.label}_to_{current.label}"
            name = f"{site.name}/{pair}" if site.name else pair
            yield Job(
                name=name,
                called=frozenset({name, pair, reference.label, current.label, site.name} - {""}),
                reference=reference.file,
                current=current.file,
                folder=site.batch.output.folder / pair,
                config=options,
                assume_same_crs=config.assume_same_crs,
                fresh=fresh,
                labels=(_label(reference), _label(current)),
                points=(points[reference.file], points[current.file]),
            )


def _label(entry: EpochEntry) -> EpochLabel:
    return entry.label, entry.date.isoformat() if entry.date else None
