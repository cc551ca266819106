# SPDX-License-Identifier: MIT
"""Work in processes: answers arrive, one process that dies takes only its own item with it."""

import functools
import math
import multiprocessing
import operator
import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from scanstrain.workers import THREAD_VARIABLES, map_in_processes

# operator.call and functools.partial can be found by name in a new process, which functions of this file cannot.
ASK = [functools.partial(os.getenv, name) for name in THREAD_VARIABLES]


def answers(items, *, workers=2):
    return dict(map_in_processes(operator.call, items, workers=workers, lost=lambda item: "lost"))


def test_answers_come_with_their_positions():
    assert answers([functools.partial(math.sqrt, value) for value in (4.0, 9.0, 16.0)]) == {0: 2.0, 1: 3.0, 2: 4.0}


def test_a_process_that_dies_takes_only_its_own_item_with_it():
    die = functools.partial(os._exit, 1)
    work = functools.partial(math.sqrt, 4.0)
    assert answers([work, die, work, work]) == {0: 2.0, 1: "lost", 2: 2.0, 3: 2.0}


def test_workers_keep_to_one_thread_and_the_caller_is_left_alone():
    before = dict(os.environ)
    assert set(answers(ASK).values()) == {"1"}
    assert dict(os.environ) == before


def test_an_interruption_ends_the_running_processes():
    work = [functools.partial(math.sqrt, 4.0), functools.partial(time.sleep, 60)]
    begun = time.monotonic()
    arriving = map_in_processes(operator.call, work, workers=2, lost=lambda item: "lost")
    assert next(arriving) == (0, 2.0)
    with pytest.raises(KeyboardInterrupt):
        arriving.throw(KeyboardInterrupt())
    assert time.monotonic() - begun < 45  # of the 60 s that one of them would have slept; 30 s are its grace
    # The pool's own thread collects the ended processes too; whichever comes second learns of it a moment later.
    while multiprocessing.active_children() and time.monotonic() - begun < 50:
        time.sleep(0.05)
    assert multiprocessing.active_children() == []


def test_workers_end_with_a_parent_that_is_killed(tmp_path):
    """They would otherwise wait for work for ever, and hold their memory."""
    code = (
        "import functools, operator, os, time\nfrom scanstrain.workers import map_in_processes\n"
        "if __name__ == '__main__':\n"
        "    work = [os.getpid, functools.partial(time.sleep, 600)]\n"
        "    for _, answer in map_in_processes(operator.call, work, workers=2, lost=lambda item: None):\n"
        "        print(answer, flush=True)\n"
    )
    script = tmp_path / "parent.py"
    script.write_text(code, encoding="utf-8")
    environment = {**os.environ, "PYTHONPATH": str(Path(__file__).parents[2])}
    parent = subprocess.Popen([sys.executable, script], stdout=subprocess.PIPE, text=True, env=environment)
    worker = int(parent.stdout.readline())
    parent.kill()
    parent.wait()
    end = time.monotonic() + 30
    while time.monotonic() < end and _runs(worker):
        time.sleep(0.05)
    assert not _runs(worker)
    parent.stdout.close()


def _runs(number):
    try:
        os.kill(number, 0)
        state = Path(f"/proc/{number}/stat")
        return not state.exists() or state.read_text().rpartition(")")[2].split()[0] != "Z"
    except ProcessLookupError:
        return False
