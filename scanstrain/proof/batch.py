# SPDX-License-Identifier: MIT
"""The epochs of a batch file held against themselves."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from scanstrain.errors import OptionError, explain
from scanstrain.proof.pair import Proof, halves, prove_pair
from scanstrain.registry import unknown_name

if TYPE_CHECKING:  # the options are slow to load
    from scanstrain.config import BatchConfig, CompareConfig
    from scanstrain.epoch import Epoch

Progress = Callable[[str, float], None]


def prove_batch(
    config: BatchConfig,
    *,
    only: Sequence[str] = (),
    still: tuple[str, str] | None = None,
    strain: float | None = None,
    height: float | None = None,
    seed: int = 0,
    progress: Progress | None = None,
) -> list[Proof]:
    """Hold the method against scans of a batch file; nothing is written.

    Parameters
    ----------
    config : BatchConfig
        With absolute paths, as `load_config` returns it.
    only : sequence of str
        Labels of the epochs that are split into halves, PLACE/LABEL where the batch has places; the first epoch by
        default, none where `still` is given.
    still : pair of str, optional
        Labels of two epochs that show no change.
    strain, height : float, optional
        Size of the change that is put in [1] and [m]; five typical standard errors by default.
    seed : int
        Of the split.
    progress : callable, optional
        Called with a phrase and the share done.

    Returns
    -------
    list of Proof
        One for each epoch, and one for the pair.

    Raises
    ------
    OptionError
        A label that is not in the batch, or a size that cannot be.
    ScanstrainError
        As a comparison does.
    """
    from scanstrain.io import check_same_frame, read_scan

    files = scans_of(config)
    pair = None if still is None else still_pair(still, list(files))
    for label in only:
        if label not in files:
            raise OptionError(unknown_name("only", label, list(files)))
    labels = list(dict.fromkeys(only)) or ([] if pair else [next(iter(files))])
    options = config.compare_config()
    steps = len(labels) + (pair is not None)
    proofs: list[Proof] = []

    def tell(step: str, share: float) -> None:
        if progress:
            progress(step, (len(proofs) + share) / steps)

    for label in labels:
        epoch = read_scan(files[label])
        parts = halves(epoch, seed=seed)
        proofs.append(
            prove_pair(*parts, _of_one_scan(options, epoch), name=label, strain=strain, height=height, progress=tell)
        )
    if pair:
        first = read_scan(files[pair[0]])
        second = read_scan(files[pair[1]], origin=first.origin)
        check_same_frame(first, second, assume_same_crs=config.assume_same_crs)
        name = f"{pair[0]} and {pair[1]}"
        proofs.append(prove_pair(first, second, options, name=name, strain=strain, height=height, progress=tell))
    return proofs


def scans_of(config: BatchConfig) -> dict[str, Path]:
    """Return the scans of a batch by the labels of their epochs, with places by PLACE/LABEL.

    Raises
    ------
    OptionError
        A pattern leads to no file, or to several.
    """
    from scanstrain.config import sites_of

    return {
        f"{site.name}/{entry.label}" if site.name else entry.label: entry.file
        for site in sites_of(config)
        for entry in site.batch.epoch
    }


def _of_one_scan(options: CompareConfig, epoch: Epoch) -> CompareConfig:
    """Take out what belongs to a pair of scans, and choose gauges as for the whole scan."""
    from scanstrain.neighbourhood.gauge_length import choose_gauge_length
    from scanstrain.neighbourhood.piece import InMemory

    datum = options.registration.model_copy(update={"start": "identity", "start_file": None})
    gauges = options.neighbourhood
    if isinstance(gauges.gauge_length, str):
        gauges = gauges.model_copy(update={"gauge_length": choose_gauge_length(InMemory(epoch, epoch)).length})
    return options.model_copy(update={"registration": datum, "neighbourhood": gauges})


def still_pair(labels: Sequence[str], known: Sequence[str]) -> tuple[str, str]:
    """Check the labels of two epochs that show no change.

    Parameters
    ----------
    labels : sequence of str
        As the user gave them.
    known : sequence of str
        Labels of the batch.

    Returns
    -------
    pair of str

    Raises
    ------
    OptionError
        Not two different labels of the batch; the nearest one is named.
    """
    for label in labels:
        if label not in known:
            raise OptionError(unknown_name("still", label, list(known)))
    first, second = labels
    if first == second:
        raise OptionError(explain("still", "two different epochs", f"{first!r} twice", "name the second one"))
    return first, second
