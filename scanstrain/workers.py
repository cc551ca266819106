# SPDX-License-Identifier: MIT
"""Runs one function over many items in worker processes; a worker that dies takes only its own item with it.

Workers are spawned, because a forked process aborts once OpenMP has run in its parent, and each keeps to one thread,
because the processes already fill the cores. Nothing heavy is imported here: the number of threads must be set
before the numerical libraries are loaded.
"""

from __future__ import annotations

import multiprocessing
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import BrokenExecutor, ProcessPoolExecutor, as_completed
from contextlib import contextmanager
from multiprocessing.process import BaseProcess
from typing import TypeVar

Item = TypeVar("Item")
Answer = TypeVar("Answer")

THREAD_VARIABLES = (
    "NUMBA_NUM_THREADS",
    "OMP_NUM_THREADS",
    "OPENBLAS_NUM_THREADS",
    "MKL_NUM_THREADS",
)

CLEAN_UP = 3.0
"""Time to remove half-written files [s]."""
GRACE = 30.0
"""Time that an interrupted process gets to clean up [s]: longer than any compiled loop runs between two looks."""


def map_in_processes(
    function: Callable[[Item], Answer],
    items: Sequence[Item],
    *,
    workers: int,
    lost: Callable[[Item], Answer],
) -> Iterator[tuple[int, Answer]]:
    """Yield `(position, function(item))` as the answers arrive, from processes of this machine.

    Parameters
    ----------
    function : callable
        Importable by name; it must answer rather than raise, since not every exception can cross a process boundary.
    items : sequence
        What to work on; must pickle.
    workers : int
        Processes at a time.
    lost : callable
        Gives the answer for an item whose process ended without one, for example killed for want of memory.
    """
    suspects: list[int] = []
    with _pool(workers) as pool:
        futures = {pool.submit(function, item): position for position, item in enumerate(items)}
        for future in as_completed(futures):
            try:
                answer = future.result()
            except BrokenExecutor:
                # The whole pool is gone; which item did it shows when each has a process to itself.
                suspects.append(futures[future])
            else:
                yield futures[future], answer
    for position in sorted(suspects):
        with _pool(1) as pool:
            try:
                answer = pool.submit(function, items[position]).result()
            except BrokenExecutor:
                answer = lost(items[position])
        yield position, answer


@contextmanager
def _pool(workers: int) -> Iterator[ProcessPoolExecutor]:
    """Give a pool that ends its running processes at once when the caller is interrupted."""
    before = set(multiprocessing.active_children())
    context = multiprocessing.get_context("spawn")
    pool = ProcessPoolExecutor(workers, mp_context=context, initializer=_begin)
    try:
        yield pool
    except BaseException:
        pool.shutdown(wait=False, cancel_futures=True)
        _end(set(multiprocessing.active_children()) - before)
        raise
    finally:
        pool.shutdown()


def _end(processes: set[BaseProcess]) -> None:
    """Ask processes to clean up and end, and wait for that; a compiled loop only hears it when it comes back."""
    for process in processes:
        process.terminate()
    for process in processes:
        process.join(GRACE)
        process.kill()
        process.join()


def _begin() -> None:
    """Set a worker up: one thread, Ctrl-C left to the parent, and a stop that still cleans up half-written files."""
    keep_to_one_thread()
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    signal.signal(signal.SIGTERM, _stop)
    threading.Thread(target=_end_with_parent, daemon=True).start()


def keep_to_one_thread() -> None:
    """Let the numerical libraries use one thread in this process, whether they are loaded yet or not."""
    os.environ.update(dict.fromkeys(THREAD_VARIABLES, "1"))
    if "numba" in sys.modules:
        sys.modules["numba"].set_num_threads(1)


def _end_with_parent() -> None:
    """Stop when the parent is killed; a worker would otherwise wait for work for ever, and hold its memory."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        parent.join()
        os.kill(os.getpid(), signal.SIGTERM)


def _stop(number: int, _frame: object) -> None:
    """Unwind what runs, so that it cleans up, and end soon even if the pool's loop takes that for a failed task."""
    end = threading.Timer(CLEAN_UP, os._exit, [128 + number])
    end.daemon = True
    end.start()
    sys.exit(128 + number)
