# SPDX-License-Identifier: MIT
"""Shows how far the work is: a moving line on a terminal, plain lines anywhere else, nothing if asked to be quiet."""

from __future__ import annotations

import math
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TextIO

Progress = Callable[[str, float], None]
"""Called with the name of the step at work and the share of the whole that is done, from 0 to 1."""

PAUSE = 30.0
"""Longest silence in a log while a step runs [s]: long enough to keep logs short, short enough to show life."""


@contextmanager
def shown_on(stream: TextIO, *, quiet: bool = False) -> Iterator[Progress]:
    """Give a function to report progress with, and tidy up at the end.

    Parameters
    ----------
    stream : text stream
        Where to write, usually standard error.
    quiet : bool
        Write nothing.
    """
    if quiet:
        yield _silent
    elif stream.isatty():
        with _moving_line(stream) as report:
            yield report
    else:
        yield plain_lines(stream)


def _silent(step: str, share: float) -> None:
    """Take the report and drop it."""


def plain_lines(stream: TextIO, *, clock: Callable[[], float] = time.monotonic, pause: float = PAUSE) -> Progress:
    """Return a reporter that writes a line when a step begins, and one now and then while it runs."""
    latest: list[tuple[str, float]] = [("", -math.inf)]

    def report(step: str, share: float) -> None:
        before, then = latest[0]
        now = clock()
        if step != before or now - then >= pause:
            stream.write(f"{100 * share:3.0f} %  {step}\n")
            stream.flush()
            latest[0] = (step, now)

    return report


@contextmanager
def _moving_line(stream: TextIO) -> Iterator[Progress]:
    from rich.console import Console
    from rich.markup import escape
    from rich.progress import BarColumn, TextColumn, TimeElapsedColumn
    from rich.progress import Progress as Bars

    columns = (BarColumn(), TextColumn("{task.percentage:>3.0f} %  {task.description}"), TimeElapsedColumn())
    with Bars(*columns, console=Console(file=stream), transient=True) as bars:
        task = bars.add_task("", total=1.0)

        def report(step: str, share: float) -> None:
            bars.update(task, description=escape(step), completed=share)

        yield report
