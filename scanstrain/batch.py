# SPDX-License-Identifier: MIT
"""Many comparisons: one after the other or in worker processes; one that fails does not stop the others."""

from __future__ import annotations

import json
import time
import traceback
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from scanstrain.errors import OptionError, OutputError, ScanstrainError, explain
from scanstrain.registry import unknown_name
from scanstrain.workers import map_in_processes

if TYPE_CHECKING:  # the options load NumPy, which must not happen before a worker has set its threads
    from scanstrain.config import BatchConfig, CompareConfig, EpochEntry

Progress = Callable[[str, float], None]
"""Called with the name of the step at work and the share of the whole that is done, from 0 to 1."""


EpochLabel = tuple[str, str | None]
"""What the user calls an epoch, and its date in ISO form."""


@dataclass(frozen=True, slots=True)
class Outcome:
    """How one comparison of a batch ended.

    Parameters
    ----------
    name : str
        REFERENCE_to_CURRENT.
    folder : Path
        Where the result is, if it was done.
    summary : dict, optional
        The content of `summary.json`; None where the comparison failed.
    error : str
        Why it failed, in a sentence; empty where it was done.
    details : str
        The traceback behind the error.
    seconds : float
        Time that it took [s].
    """

    name: str
    folder: Path
    summary: dict[str, Any] | None = None
    error: str = ""
    details: str = ""
    seconds: float = 0.0

    @property
    def done(self) -> bool:
        """Whether there is a result."""
        return self.summary is not None


@dataclass(frozen=True, slots=True)
class _Job:
    name: str
    reference: Path
    current: Path
    folder: Path
    config: CompareConfig
    assume_same_crs: bool
    labels: tuple[EpochLabel, EpochLabel]


def compare_to_folder(
    reference: Path,
    current: Path,
    config: CompareConfig,
    folder: Path,
    *,
    assume_same_crs: bool = False,
    labels: tuple[EpochLabel, EpochLabel] | None = None,
    progress: Progress | None = None,
) -> dict[str, Any]:
    """Compare two scans and write everything into a folder.

    `labels` are what the user calls the two epochs, each with its date; by default the files name them.

    Returns
    -------
    dict
        The content of `summary.json`.

    Raises
    ------
    OptionError
        The folder cannot serve: a file, an input, or a place that cannot be written to.
    ScanstrainError
        Whatever stopped the comparison; the folder is then as it was before.
    """
    check_result_folder(folder, [reference, current])
    from scanstrain.outputs import write_result
    from scanstrain.pipeline import compare_files

    result = compare_files(
        reference, current, config, assume_same_crs=assume_same_crs, labels=labels, progress=progress
    )
    options = config.output
    write_result(
        result,
        folder,
        colour_by=options.colour_by,
        colour_limits=options.colour_limits,
        no_data=options.no_data_number,
        only_significant=options.only_significant,
        report=options.report,
        ply=options.ply,
        colour_map=options.colour_map,
    )
    summary: dict[str, Any] = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    return summary


def check_result_folder(folder: Path, inputs: Sequence[Path]) -> None:
    """Refuse, before anything is computed, a folder into which the result cannot go."""
    from scanstrain.outputs.folder import check_folder

    try:
        check_folder(folder, inputs=inputs)
    except OutputError as error:
        raise OptionError(str(error)) from None


def run_batch(
    config: BatchConfig,
    *,
    workers: int = 1,
    only: Sequence[str] = (),
    progress: Progress | None = None,
    finished: Callable[[Outcome], None] | None = None,
) -> list[Outcome]:
    """Run the comparisons of a batch file.

    Parameters
    ----------
    config : BatchConfig
        With absolute paths, as `load_config` returns it.
    workers : int
        Comparisons at a time; more than one run in processes of one thread each.
    only : sequence of str
        Labels of epochs, or names REFERENCE_to_CURRENT: only comparisons with one of them run. All if empty.
    progress : callable
        Told of the steps of each comparison if they run one at a time.
    finished : callable
        Told of every outcome as it arrives.

    Returns
    -------
    list of Outcome
        In the order of the file, failed ones included.

    Raises
    ------
    OptionError
        `workers` or `only` is wrong, or a result folder cannot serve; nothing has run then.
    OutputError
        The overview of all comparisons, `index.html`, could not be written; their results are complete.
    """
    if workers < 1:
        raise OptionError(f"workers: required a whole number from 1; got {workers}; give for example 2.")
    jobs = _jobs(config, only)
    for job in jobs:
        check_result_folder(job.folder, [entry.file for entry in config.epoch])
    outcomes: dict[int, Outcome] = {}
    answers: Iterator[tuple[int, Outcome]]
    if workers == 1 or len(jobs) == 1:
        answers = ((position, _run(job, progress)) for position, job in enumerate(jobs))
    else:
        answers = map_in_processes(_run, jobs, workers=min(workers, len(jobs)), lost=_lost)
    for position, outcome in answers:
        outcomes[position] = outcome
        if finished:
            finished(outcome)
    ordered = [outcomes[position] for position in range(len(jobs))]
    if any(outcome.done for outcome in ordered):
        _share_limits(config)
        from scanstrain.outputs.report import write_index

        write_index(ordered, config.output.folder)
    return ordered


def _share_limits(config: BatchConfig) -> None:
    """Colour all comparisons that the batch file names by one scale, those of earlier runs included."""
    from scanstrain.outputs.options import OutputOptions
    from scanstrain.outputs.shared_limits import harmonise

    out = config.output
    chosen = OutputOptions(
        out.colour_by,
        out.colour_limits,
        out.no_data_number,
        out.only_significant,
        ply=out.ply,
        colour_map=out.colour_map,
    )
    harmonise([job.folder for job in _jobs(config, ())], chosen)


def outcomes_data(outcomes: Sequence[Outcome]) -> dict[str, Any]:
    """Return the outcomes of a batch in a form that JSON can hold."""
    return {
        "comparisons": [
            {
                "name": outcome.name,
                "folder": str(outcome.folder),
                "done": outcome.done,
                "error": outcome.error or None,
                "seconds": round(outcome.seconds, 3),
                "summary": outcome.summary,
            }
            for outcome in outcomes
        ]
    }


def _jobs(config: BatchConfig, only: Sequence[str]) -> list[_Job]:
    compare = config.compare_config()
    jobs: list[_Job] = []
    names: dict[str, set[str]] = {}
    for reference, current in config.pairs():
        name = f"{reference.label}_to_{current.label}"
        names[name] = {name, reference.label, current.label}
        folder = config.output.folder / name
        labels = _label(reference), _label(current)
        jobs.append(_Job(name, reference.file, current.file, folder, compare, config.assume_same_crs, labels))
    known = sorted(set().union(*names.values()))
    for label in only:
        if label not in known:
            raise OptionError(unknown_name("only", label, known))
    return [job for job in jobs if not only or names[job.name] & set(only)]


def _label(entry: EpochEntry) -> EpochLabel:
    return entry.label, entry.date.isoformat() if entry.date else None


def _run(job: _Job, progress: Progress | None = None) -> Outcome:
    start = time.perf_counter()

    def step(name: str, share: float) -> None:
        if progress:
            progress(f"{job.name}: {name}", share)

    try:
        summary = compare_to_folder(
            job.reference,
            job.current,
            job.config,
            job.folder,
            assume_same_crs=job.assume_same_crs,
            labels=job.labels,
            progress=step,
        )
    except Exception as error:  # whatever it was, the other comparisons go on
        seconds = time.perf_counter() - start
        return Outcome(job.name, job.folder, error=in_words(error), details=traceback.format_exc(), seconds=seconds)
    return Outcome(job.name, job.folder, summary=summary, seconds=time.perf_counter() - start)


def _lost(job: _Job) -> Outcome:
    error = (
        f"{job.name}: required a worker process that lives to the end; got one that was ended from outside, "
        "most likely for want of memory; use fewer --workers."
    )
    return Outcome(job.name, job.folder, error=error)


def in_words(error: BaseException) -> str:
    """Say in a sentence what stopped the work; unforeseen errors are named as such."""
    if isinstance(error, ScanstrainError):
        return str(error)
    if isinstance(error, MemoryError):
        return "memory: required more than there is; got no more from the system; use smaller scans or fewer --workers."
    # Some libraries put a whole page into a message; its first line says what it is about.
    got = f"{type(error).__name__}: {(str(error).strip().splitlines() or ['no text'])[0]}"
    return explain("the program", "no fault of its own", got, "please report it with its traceback, from --verbose")
