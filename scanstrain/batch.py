# SPDX-License-Identifier: MIT
"""Many comparisons: one after the other, in processes, or on a cluster; one that fails does not stop the others."""

from __future__ import annotations

import time
import traceback
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from scanstrain.capacity import usable_workers
from scanstrain.clock import Progress
from scanstrain.cluster import map_on_cluster
from scanstrain.comparison import check_result_folder, check_space, compare_to_folder
from scanstrain.errors import OptionError, ScanstrainError, explain
from scanstrain.jobs import Job, plan_jobs
from scanstrain.lock import check_free, locked
from scanstrain.program import differences
from scanstrain.workers import keep_to_one_thread, map_in_processes

if TYPE_CHECKING:  # the options load NumPy, which must not happen before a worker has set its threads
    from scanstrain.config import BatchConfig


@dataclass(frozen=True, slots=True)
class Outcome:
    """How one comparison of a batch ended.

    Parameters
    ----------
    name : str
        REFERENCE_to_CURRENT, behind PLACE/ where there are places.
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
    up_to_date : bool
        Whether the result was there already.
    computed, taken : tuple of str
        Stages that ran, and those that an earlier run had left.
    notes : tuple of str
        What a user may want to know besides.
    """

    name: str
    folder: Path
    summary: dict[str, Any] | None = None
    error: str = ""
    details: str = ""
    seconds: float = 0.0
    up_to_date: bool = False
    computed: tuple[str, ...] = ()
    taken: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()

    @property
    def done(self) -> bool:
        """Whether there is a result."""
        return self.summary is not None

    @property
    def state(self) -> str:
        """What became of it, in a word or two."""
        return "failed" if not self.done else "up to date" if self.up_to_date else "done"


def run_batch(
    config: BatchConfig,
    *,
    workers: int | None = 1,
    scheduler: str | None = None,
    only: Sequence[str] = (),
    fresh: bool = False,
    progress: Progress | None = None,
    finished: Callable[[Outcome], None] | None = None,
) -> list[Outcome]:
    """Run the comparisons of a batch file.

    Parameters
    ----------
    config : BatchConfig
        With absolute paths, as `load_config` returns it.
    workers : int, optional
        Comparisons at a time; more than one run in processes of one thread each. None: as many as cores and memory
        carry.
    scheduler : str, optional
        Address of a Dask scheduler, whose workers then do everything.
    only : sequence of str
        Labels of epochs, places, or names REFERENCE_to_CURRENT: only comparisons with one of them run. All if empty.
    fresh : bool
        Forget results and kept stages, and compute everything.
    progress : callable
        Told of the steps of each comparison if they run one at a time, else of how many are done.
    finished : callable
        Told of every outcome as it arrives.

    Returns
    -------
    list of Outcome
        In the order of the file, failed ones included.

    Raises
    ------
    OptionError
        `workers`, `scheduler` or `only` is wrong, a pattern finds nothing, or a result folder cannot serve; nothing
        has run then.
    OutputError
        Another run is at work on the output folder; or the overview of all comparisons, `index.html`, could not be
        written, while their results are complete.
    """
    if workers is not None and workers < 1:
        raise OptionError(f"workers: required a whole number from 1; got {workers}; give for example 2.")
    jobs = plan_jobs(config, only, fresh=fresh)
    for job in jobs:
        check_result_folder(job.folder, [entry.file for entry in config.epoch] + [job.reference, job.current])
    with locked(config.output.folder):
        for job in jobs:
            check_free(job.folder)
        missing = [job.points[0] for job in jobs if not (job.folder / "summary.json").exists()]
        check_space(config.output.folder, missing)
        outcomes = _run_all(jobs, config.output.folder, workers, scheduler, progress, finished)
        _write_overview(outcomes, config)
    return outcomes


def batch_points(config: BatchConfig, only: Sequence[str] = ()) -> int:
    """Count the points of both scans of all comparisons, for the rate and the time left that are shown."""
    return sum(job.size for job in plan_jobs(config, only))


def _run_all(
    jobs: Sequence[Job],
    folder: Path,
    workers: int | None,
    scheduler: str | None,
    progress: Progress | None,
    finished: Callable[[Outcome], None] | None,
) -> list[Outcome]:
    """Run the jobs in whichever way; report as they finish, return them in their order."""
    at_once = min(usable_workers([job.size for job in jobs]) if workers is None else workers, len(jobs))
    total = sum(job.size for job in jobs) or 1
    outcomes: dict[int, Outcome] = {}
    behind = 0
    answers: Iterator[tuple[int, Outcome]]
    if scheduler is not None:
        answers = _on_cluster(jobs, scheduler, folder)
    elif at_once == 1:
        answers = _one_by_one(jobs, total, progress)
    else:
        answers = map_in_processes(_run, jobs, workers=at_once, lost=_lost)
    together = progress if scheduler is not None or at_once > 1 else None
    if together:
        together(_count(0, len(jobs)), 0.0)
    for position, outcome in answers:
        outcomes[position] = outcome
        behind += jobs[position].size
        if finished:
            finished(outcome)
        if together:
            together(_count(len(outcomes), len(jobs)), behind / total)
    return [outcomes[position] for position in range(len(jobs))]


def _count(done: int, total: int) -> str:
    return f"{done} of {total} comparisons done"


def _one_by_one(jobs: Sequence[Job], total: int, progress: Progress | None) -> Iterator[tuple[int, Outcome]]:
    behind = 0
    for position, job in enumerate(jobs):
        yield position, _run(job, _part(progress, job, behind / total, (job.size or 1) / total, len(jobs)))
        behind += job.size


def _part(progress: Progress | None, job: Job, start: float, share: float, jobs: int) -> Progress | None:
    """Give a reporter for one comparison, whose whole is a part of that of the batch."""
    if progress is None:
        return None
    inside = 1.0 if jobs == 1 else share

    def report(step: str, done: float) -> None:
        progress(f"{job.name}: {step}", min(start + inside * done, 1.0))

    return report


def _on_cluster(jobs: Sequence[Job], scheduler: str, folder: Path) -> Iterator[tuple[int, Outcome]]:
    made = [each for each in (folder, *folder.parents) if not each.exists()]
    folder.mkdir(parents=True, exist_ok=True)
    inputs = sorted({path for job in jobs for path in (job.reference, job.current) if path.exists()})
    try:
        yield from map_on_cluster(_run_far, jobs, scheduler=scheduler, lost=_lost, folder=folder, inputs=inputs)
    finally:
        for each in made:
            if each.is_dir() and not any(each.iterdir()):
                each.rmdir()


def _write_overview(outcomes: Sequence[Outcome], config: BatchConfig) -> None:
    """Write `index.html`, unless nothing is new."""
    from scanstrain.outputs.report import write_index

    folder = config.output.folder
    old = all(outcome.up_to_date for outcome in outcomes) and (folder / "index.html").is_file()
    if any(outcome.done for outcome in outcomes) and not old:
        _share_limits(config)
        write_index(outcomes, folder)


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
    harmonise([job.folder for job in plan_jobs(config, ())], chosen)


def outcomes_data(outcomes: Sequence[Outcome]) -> dict[str, Any]:
    """Return the outcomes of a batch in a form that JSON can hold."""
    return {
        "comparisons": [
            {
                "name": outcome.name,
                "folder": str(outcome.folder),
                "done": outcome.done,
                "state": outcome.state,
                "error": outcome.error or None,
                "seconds": round(outcome.seconds, 3),
                "stages": {"computed": list(outcome.computed), "taken": list(outcome.taken)},
                "notes": list(outcome.notes),
                "summary": outcome.summary,
            }
            for outcome in outcomes
        ]
    }


def _run(job: Job, progress: Progress | None = None) -> Outcome:
    start = time.perf_counter()
    try:
        written = compare_to_folder(
            job.reference,
            job.current,
            job.config,
            job.folder,
            assume_same_crs=job.assume_same_crs,
            labels=job.labels,
            fresh=job.fresh,
            progress=progress,
        )
    except Exception as error:  # whatever it was, the other comparisons go on
        seconds = time.perf_counter() - start
        return Outcome(job.name, job.folder, error=in_words(error), details=traceback.format_exc(), seconds=seconds)
    return Outcome(
        job.name,
        job.folder,
        summary=written.summary,
        seconds=time.perf_counter() - start,
        up_to_date=written.up_to_date,
        computed=written.computed,
        taken=written.taken,
        notes=written.notes,
    )


def _run_far(job: Job) -> Outcome:
    """Run a job on a worker of a cluster, which may have joined after all others were looked at."""
    if other := differences(job.program):
        got = f"a worker that has not: the others have {'; '.join(other)}"
        return Outcome(job.name, job.folder, error=explain(job.name, "one program everywhere", got, "install it there"))
    keep_to_one_thread()
    return _run(job)


def _lost(job: Job) -> Outcome:
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
    if isinstance(error, OSError) and error.filename:
        return explain(
            str(error.filename), "a file that can be used", str(error.strerror), "check disk and permissions"
        )
    # Some libraries put a whole page into a message; its first line says what it is about.
    got = f"{type(error).__name__}: {(str(error).strip().splitlines() or ['no text'])[0]}"
    return explain("the program", "no fault of its own", got, "please report it with its traceback, from --verbose")
