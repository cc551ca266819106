# SPDX-License-Identifier: MIT
"""Progress: plain lines in a log, a moving line on a terminal, silence on request."""

import io

from scanstrain.progress import plain_lines, shown_on


class Terminal(io.StringIO):
    def isatty(self):
        return True


def test_a_log_gets_one_line_for_each_step():
    stream, time = io.StringIO(), iter(range(100))
    report = plain_lines(stream, clock=lambda: float(next(time)))
    for step, share in (("read", 0.0), ("registration", 0.1), ("registration", 0.2), ("strain", 1.0)):
        report(step, share)
    assert stream.getvalue().splitlines() == ["  0 %  read", " 10 %  registration", "100 %  strain"]


def test_a_long_step_shows_life_now_and_then():
    stream, time = io.StringIO(), iter([0.0, 10.0, 31.0, 40.0, 70.0])
    report = plain_lines(stream, clock=lambda: next(time), pause=30.0)
    for share in (0.0, 0.1, 0.3, 0.4, 0.5):
        report("strain", share)
    assert stream.getvalue().splitlines() == ["  0 %  strain", " 30 %  strain", " 50 %  strain"]


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
