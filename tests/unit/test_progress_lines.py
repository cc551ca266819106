# SPDX-License-Identifier: MIT
"""Progress: plain lines in a log, a moving line on a terminal, silence on request; time left, rate and memory."""

import io
import os
import time
from pathlib import Path

import pytest

from scanstrain.progress import Meter, PlainLines, memory_in_use, shown_on


class Terminal(io.StringIO):
    def isatty(self):
        return True


def lines_at(*times, pause=30.0):
    stream, ticks = io.StringIO(), iter(times)
    return stream, PlainLines(stream, clock=lambda: float(next(ticks)), pause=pause)


def meter(*times, points=0, memory=None):
    ticks = iter(times)
    return Meter(points, clock=lambda: float(next(ticks)), memory=lambda: memory)


def bare(stream):
    return [line.partition(";")[0] for line in stream.getvalue().splitlines()]


def test_a_log_gets_one_line_for_each_step():
    stream, report = lines_at(*range(100))
    for step, share in (("read", 0.0), ("registration", 0.1), ("registration", 0.2), ("strain", 1.0)):
        report(step, share)
    assert bare(stream) == ["  0 %  read", " 10 %  registration", "100 %  strain"]


def test_a_long_step_shows_life_now_and_then():
    stream, report = lines_at(0.0, 10.0, 31.0, 40.0, 70.0)
    for share in (0.0, 0.1, 0.3, 0.4, 0.5):
        report("strain", share)
    assert bare(stream) == ["  0 %  strain", " 30 %  strain", " 50 %  strain"]


def test_a_step_that_reports_nothing_shows_life_too():
    stream, report = lines_at(0.0, 20.0, 31.0, 40.0)
    report("fit", 0.0)
    for _ in range(3):
        report.remind()
    assert bare(stream) == ["  0 %  fit", "  0 %  fit"]


def test_a_thread_does_so_by_itself():
    stream = io.StringIO()
    with shown_on(stream, pause=0.04) as report:
        report("fit", 0.0)
        end = time.monotonic() + 10.0
        while stream.getvalue().count("fit") < 3 and time.monotonic() < end:
            time.sleep(0.01)
    assert stream.getvalue().count("  0 %  fit\n") >= 3


def test_time_left_rate_and_memory_follow_from_the_share_that_is_done():
    # after 20 s a quarter of 4 million points is done: 60 s are left, at 50 000 points a second
    measured = meter(100.0, 120.0, points=4_000_000, memory=1.5e9)
    assert measured.words(0.0) == ""
    assert measured.words(0.25) == "; about 60 s left, 50 000 points/s, 1.5 GB"


def test_what_is_not_known_is_not_said():
    measured = meter(0.0, 1.0, 3.0, 9.0)
    assert [measured.words(share) for share in (0.0, 0.01, 0.5, 1.0)] == ["", "", "; about 3 s left", ""]


def test_memory_is_that_of_this_process():
    # Another reading of the same: resident pages as the kernel counts them.
    pages = Path("/proc/self/statm")
    if not pages.exists():
        assert memory_in_use() is None
        return
    held = int(pages.read_text().split()[1]) * os.sysconf("SC_PAGE_SIZE")
    assert memory_in_use() == pytest.approx(held, rel=0.05)


def test_what_is_no_terminal_gets_plain_lines_without_control_characters():
    stream = io.StringIO()
    with shown_on(stream) as report:
        report("reading", 0.0)
        report("reading", 1.0)
    assert stream.getvalue() == "  0 %  reading\n"
    assert "\x1b" not in stream.getvalue()


def test_a_terminal_gets_a_moving_line_that_is_gone_at_the_end():
    stream = Terminal()
    with shown_on(stream) as report:
        report("a_to_b: reading [1]", 0.25)
    text = stream.getvalue()
    assert " 25 %  a_to_b: reading [1]" in text
    assert text.rstrip("\r\n").endswith(("\x1b[2K", "\x1b[1A\x1b[2K", "\x1b[?25h"))


def test_quiet_is_silent():
    stream = Terminal()
    with shown_on(stream, quiet=True) as report:
        report("reading", 0.0)
        report("reading", 1.0)
    assert stream.getvalue() == ""
