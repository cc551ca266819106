# SPDX-License-Identifier: MIT
"""Shows how far the work is: a moving line on a terminal, plain lines anywhere else, nothing if asked to be quiet.

Behind the step stand the time left, the points a second and the memory in use, as far as they are known.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from typing import TextIO

from scanstrain.capacity import used_memory
from scanstrain.clock import Progress

Clock = Callable[[], float]
Memory = Callable[[], float | None]

PAUSE = 30.0
"""Longest silence in a log while a step runs [s]: long enough to keep logs short, short enough to show life."""
TELLING = 0.05
"""Share of the whole from which on the time left can be told [1]: earlier, start-up is most of it."""
ENDED = 1.0


@dataclass
class Meter:
    """Time left, points a second and memory, from the share that is done.

    Parameters
    ----------
    points : int
        Points of everything that is to be done; 0 where it is not known.
    clock : callable
        Gives a time [s].
    memory : callable
        Gives the memory in use [byte].
    """

    points: int = 0
    clock: Clock = time.monotonic
    memory: Memory = field(default_factory=lambda: memory_in_use)
    _start: float | None = None

    def words(self, share: float) -> str:
        """Say what is known at a share of the whole; nothing at the very beginning and at the end."""
        now = self.clock()
        if self._start is None:
            self._start = now
        elapsed = now - self._start
        if elapsed <= 0 or not TELLING <= share < ENDED:
            return ""
        said = [f"about {_duration(elapsed * (1 - share) / share)} left"]
        if self.points:
            said.append(f"{_thousands(self.points * share / elapsed)} points/s")
        held = self.memory()
        if held:
            said.append(f"{held / 1e9:.1f} GB")
        return "; " + ", ".join(said)


def _duration(seconds: float) -> str:
    """Round a time to what can be known of it.

    >>> _duration(42.3), _duration(200.0), _duration(9000.0)
    ('42 s', '3 min', '2.5 h')
    """
    if seconds < 100:
        return f"{seconds:.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def _thousands(number: float) -> str:
    return f"{number:,.0f}".replace(",", " ")


def memory_in_use() -> float | None:
    """Return what this process and its workers hold [byte]; None where the system does not tell."""
    workers = [each.pid for each in multiprocessing.active_children() if each.pid is not None]
    return used_memory([os.getpid(), *workers])


@contextmanager
def shown_on(stream: TextIO, *, quiet: bool = False, points: int = 0, pause: float = PAUSE) -> Iterator[Progress]:
    """Give a function to report progress with, and tidy up at the end.

    Parameters
    ----------
    stream : text stream
        Where to write, usually standard error.
    quiet : bool
        Write nothing.
    points : int
        Points of everything that is to be done, for the rate; 0 where it is not known.
    pause : float
        Longest silence where the stream is no terminal [s].
    """
    meter = Meter(points)
    if quiet:
        yield _silent
    elif stream.isatty():
        with _moving_line(stream, meter) as report:
            yield report
    else:
        lines = PlainLines(stream, meter=meter, pause=pause)
        with _kept_alive(lines, pause):
            yield lines


def _silent(step: str, share: float) -> None:
    """Take the report and drop it."""


class PlainLines:
    """Writes a line when a step begins, and one now and then while it runs, also while it reports nothing.

    Parameters
    ----------
    stream : text stream
    meter : Meter
    clock : callable
        Gives a time [s].
    pause : float
        Longest silence [s].
    """

    def __init__(
        self, stream: TextIO, *, meter: Meter | None = None, clock: Clock = time.monotonic, pause: float = PAUSE
    ) -> None:
        self.stream = stream
        self.meter = meter or Meter()
        self.clock = clock
        self.pause = pause
        self._lock = threading.Lock()
        self._step, self._share, self._written = "", 0.0, -math.inf

    def __call__(self, step: str, share: float) -> None:
        """Take a report."""
        with self._lock:
            now = self.clock()
            due = step != self._step or now - self._written >= self.pause
            self._step, self._share = step, share
            said = self.meter.words(share)
            if due:
                self._write(now, said)

    def remind(self) -> None:
        """Write the latest step again if there was silence for long."""
        with self._lock:
            now = self.clock()
            if self._step and now - self._written >= self.pause:
                self._write(now, self.meter.words(self._share))

    def _write(self, now: float, said: str) -> None:
        self.stream.write(f"{100 * self._share:3.0f} %  {self._step}{said}\n")
        self.stream.flush()
        self._written = now


@contextmanager
def _kept_alive(lines: PlainLines, pause: float) -> Iterator[None]:
    """Remind of the step at work from a thread of its own, while compiled loops run and report nothing."""
    ended = threading.Event()

    def remind() -> None:
        while not ended.wait(pause / 4):
            lines.remind()

    thread = threading.Thread(target=remind, daemon=True)
    thread.start()
    try:
        yield
    finally:
        ended.set()
        thread.join()


@contextmanager
def _moving_line(stream: TextIO, meter: Meter) -> Iterator[Progress]:
    from rich.console import Console
    from rich.markup import escape
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    columns = (BarColumn(), TextColumn("{task.percentage:>3.0f} %  {task.description}"), TimeElapsedColumn())
    with Bars(*columns, console=Console(file=stream), transient=True) as bars:
        task = bars.add_task("", total=1.0)

        def report(step: str, share: float) -> None:
            bars.update(task, description=escape(step + meter.words(share)), completed=share)

        yield report
