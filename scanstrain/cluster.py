# SPDX-License-Identifier: MIT
"""Work on other machines: the executor of a Dask cluster, whose workers are looked at before they get any.

Every worker must hold the same program and see the same files, since work is sent as paths and results are written
where the work is done. The cluster repeats what a dying worker left, and all work can be repeated.
"""

from __future__ import annotations

import contextlib
import logging
import secrets
import warnings
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import FIRST_COMPLETED, Executor, Future, wait
from contextlib import contextmanager
from pathlib import Path
from typing import Any, TypeVar

from scanstrain.errors import MissingDependencyError, OptionError, explain
from scanstrain.program import differences, identity

Item = TypeVar("Item")
Answer = TypeVar("Answer")

CONNECT = 10.0
"""Time in which a scheduler must answer and show a worker [s]."""
LOOK = 2.0
"""Time between two looks at whether the scheduler is still there [s]."""


def map_on_cluster(
    function: Callable[[Item], Answer],
    items: Sequence[Item],
    *,
    scheduler: str,
    lost: Callable[[Item], Answer],
    folder: Path,
    inputs: Sequence[Path],
) -> Iterator[tuple[int, Answer]]:
    """Yield `(position, function(item))` as the answers arrive, from the workers of a Dask scheduler.

    Parameters
    ----------
    function : callable
        Importable by name on the workers; it must answer rather than raise, and may run more than once for an item.
    items : sequence
        What to work on; must pickle.
    scheduler : str
        Address, such as tcp://host:8786.
    lost : callable
        Gives the answer for an item that no worker lived to finish.
    folder : Path
        An existing folder into which every worker must be able to write.
    inputs : sequence of Path
        Files that every worker must see.

    Raises
    ------
    OptionError
        The scheduler does not answer or has no workers, or they hold another program, run several threads, or do not
        see the files.
    MissingDependencyError
        `distributed` is not installed.
    """
    with _connected(scheduler) as client:
        _check_workers(client, scheduler, folder, inputs)
        with client.get_executor(pure=False) as executor:
            yield from _answers(client, executor, function, items, lost)


def _answers(
    client: Any,
    executor: Executor,
    function: Callable[[Item], Answer],
    items: Sequence[Item],
    lost: Callable[[Item], Answer],
) -> Iterator[tuple[int, Answer]]:
    futures: dict[Future[Answer], int] = {executor.submit(function, item): n for n, item in enumerate(items)}
    try:
        while futures:
            done, _ = wait(futures, timeout=LOOK, return_when=FIRST_COMPLETED)
            if not done and client.status != "running":
                done = set(futures)  # the scheduler is gone, and with it what it had to say
            for future in done:
                position = futures.pop(future)
                try:
                    answer = future.result(timeout=0)
                except Exception:  # the function does not raise: every worker that had it died, or nobody is there
                    answer = lost(items[position])
                yield position, answer
    finally:
        for future in futures:
            future.cancel()


@contextmanager
def _connected(scheduler: str) -> Iterator[Any]:
    try:
        from distributed import Client
    except ImportError:
        raise MissingDependencyError(
            explain("--scheduler", "the package distributed", "none", 'install it with: pip install "scanstrain[dask]"')
        ) from None
    # What the library logs about lost connections and versions is said here in one sentence each.
    logging.getLogger("distributed").setLevel(logging.CRITICAL)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            client = Client(scheduler, timeout=CONNECT, set_as_default=False)
        except Exception as error:  # of many kinds, by what is wrong with the address
            got = f"no answer within {CONNECT:.0f} s" if isinstance(error, OSError) else str(error).splitlines()[0]
            remedy = "start one with `dask scheduler`, or check the address"
            raise _refusal(scheduler, "a Dask scheduler that answers", got, remedy) from None
    try:
        yield client
    finally:
        with contextlib.suppress(Exception):
            client.close(timeout=CONNECT)


def _check_workers(client: Any, scheduler: str, folder: Path, inputs: Sequence[Path]) -> None:
    """Refuse workers on which the work would fail, or would give other numbers."""
    try:
        client.wait_for_workers(1, timeout=CONNECT)
    except Exception:
        remedy = f"start some with `dask worker {scheduler} --nthreads 1`"
        raise _refusal(scheduler, "at least one worker", f"none within {CONNECT:.0f} s", remedy) from None
    token = folder / f".{secrets.token_hex(8)}.token"
    text = secrets.token_hex(16)
    token.write_text(text, encoding="ascii")
    try:
        facts = client.run(facts_of_worker, str(token), [str(path) for path in inputs])
    except Exception as error:
        got = f"workers that cannot load it ({(str(error).splitlines() or ['no reason'])[0]})"
        raise _refusal(
            scheduler, f"workers with scanstrain {identity()['scanstrain']}", got, "install it there"
        ) from None
    finally:
        token.unlink(missing_ok=True)
    threads = client.nthreads()
    for worker, found in facts.items():
        _check_worker(scheduler, worker, found, text, folder, threads.get(worker, 1))


def _check_worker(scheduler: str, worker: str, found: dict[str, Any], token: str, folder: Path, threads: int) -> None:
    if other := differences(found["program"]):
        raise _refusal(scheduler, "workers with the same program", f"{'; '.join(other)} on {worker}",
                       "install the same versions there")  # fmt: skip
    if found["token"] != token:
        raise _refusal(scheduler, f"workers that see the output folder {folder}", f"{worker}, which does not",
                       "use a folder that all machines share under one path")  # fmt: skip
    if found["missing"]:
        raise _refusal(scheduler, "workers that see the scans", f"{worker}, which does not see {found['missing'][0]}",
                       "use a folder that all machines share under one path")  # fmt: skip
    if threads != 1:
        raise _refusal(scheduler, "workers of one thread", f"{threads} threads on {worker}",
                       "start more workers with --nthreads 1")  # fmt: skip


def facts_of_worker(token: str, inputs: list[str]) -> dict[str, Any]:
    """Say what a worker is and sees; runs on the worker.

    Parameters
    ----------
    token : str
        Path of a file that was just written.
    inputs : list of str
        Paths of the scans.

    Returns
    -------
    dict
        `program`, the content of the token and the scans that are `missing`.
    """
    try:
        text = Path(token).read_text(encoding="ascii")
    except OSError:
        text = ""
    return {"program": identity(), "token": text, "missing": [path for path in inputs if not Path(path).exists()]}


def _refusal(scheduler: str, required: str, got: str, remedy: str) -> OptionError:
    return OptionError(explain(f"--scheduler {scheduler}", required, got, remedy))
