# SPDX-License-Identifier: MIT
"""Seconds for each stage of a comparison, and progress to whoever wants to hear it."""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

Progress = Callable[[str, float], None]
"""Called with the name of the step at work and the share of the whole that is done, from 0 to 1."""


@dataclass
class Clock:
    """Times stages; one that was taken from an earlier run took no time, and does not appear."""

    progress: Progress | None = None
    seconds: dict[str, float] = field(default_factory=dict)

    def say(self, phrase: str, share: float) -> None:
        """Report progress."""
        if self.progress:
            self.progress(phrase, share)

    @contextmanager
    def stage(self, name: str, share: float) -> Iterator[None]:
        """Time a stage."""
        self.say(name, share)
        start = time.perf_counter()
        yield
        self.seconds[name] = time.perf_counter() - start
