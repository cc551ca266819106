# SPDX-License-Identifier: MIT
"""What the commands share: how loud they are, where their words go, and which exit code an error has."""

from __future__ import annotations

import json
import os
import sys
import traceback
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from scanstrain.errors import ScanstrainError

if TYPE_CHECKING:
    from scanstrain.batch import Outcome
    from scanstrain.comparison import Written

FAILED, WRONG_CALL, PARTLY_FAILED, INTERRUPTED = 1, 2, 3, 130


@dataclass
class Terminal:
    """One call of the program: results go to standard output, everything else to standard error."""

    quiet: bool = False
    verbose: bool = False
    json: bool = False

    def progress(self, points: int = 0) -> AbstractContextManager[Callable[[str, float], None]]:
        """Give a reporter of progress; `points` of everything that is to be done, if known, give a rate."""
        from scanstrain.progress import shown_on

        return shown_on(sys.stderr, quiet=self.quiet, points=points)

    def show(self, text: str, data: Any) -> None:
        """Write a result: `data` as JSON if that was asked for, otherwise `text` unless it shall be quiet."""
        if self.json:
            click.echo(json.dumps(data, indent=2, ensure_ascii=False))
        elif not self.quiet:
            click.echo(text)

    def show_files(self, paths: Sequence[Path]) -> None:
        """Write the names of files that were made, one a line."""
        names = [str(path) for path in paths]
        self.show("\n".join(names), names)

    def finished(self, outcome: Outcome) -> None:
        """Say at once how a comparison of a batch ended."""
        state = outcome.state if outcome.done else outcome.state.upper()
        self.remark(f"{outcome.name}: {state} after {outcome.seconds:.0f} s{resumed(outcome.computed, outcome.taken)}")
        for note in outcome.notes:
            self.remark(f"Note: {note}")

    def compared(self, written: Written) -> None:
        """Say what of a single comparison was there already."""
        if written.up_to_date:
            self.remark("Up to date: nothing had to be done (--fresh computes it again).")
        elif written.taken:
            self.remark(f"Done{resumed(written.computed, written.taken)}")
        for note in written.notes:
            self.remark(f"Note: {note}")

    def remark(self, text: str) -> None:
        """Write a line for a person beside the result."""
        if not self.quiet:
            click.echo(text, err=True)

    def complain(self, text: str, details: str = "") -> None:
        """Write an error, with its traceback only if asked for."""
        if details and self.verbose:
            click.echo(details.rstrip(), err=True)
        click.echo(f"Error: {text}", err=True)


def resumed(computed: Sequence[str], taken: Sequence[str]) -> str:
    """Say which stages did not have to run again, in brackets; nothing where all ran.

    >>> resumed(["strain"], ["registration", "field"]), resumed(["strain"], [])
    (' (kept: registration, field; computed: strain)', '')
    """
    if not taken:
        return ""
    return f" (kept: {', '.join(taken)}; computed: {', '.join(computed) or 'nothing'})"


def _switch(name: str, short: str, text: str) -> Callable[[Any], Any]:
    def turn_on(context: click.Context, _parameter: click.Parameter, value: bool) -> None:
        terminal = context.ensure_object(Terminal)
        setattr(terminal, name, value or getattr(terminal, name))

    flags = [f"--{name}"] + ([short] if short else [])
    return click.option(*flags, is_flag=True, expose_value=False, callback=turn_on, help=text)


quiet_option = _switch("quiet", "-q", "Errors only.")
verbose_option = _switch("verbose", "-v", "More about the result; the traceback where something fails.")
json_option = _switch("json", "", "The summary as JSON on standard output, and nothing else there.")


def guarded(command: click.Command, arguments: Sequence[str] | None) -> int:
    """Run a command and return its exit code; an error becomes one plain sentence on standard error."""
    for stream in (sys.stdout, sys.stderr):
        # A terminal that knows no µ or ± shall show a question mark and not stop the program.
        getattr(stream, "reconfigure", lambda **_: None)(errors="replace")
    terminal = Terminal()
    try:
        code = command.main(args=arguments, prog_name="scanstrain", obj=terminal, standalone_mode=False)
    except click.exceptions.NoArgsIsHelpError as error:
        error.show()
        return WRONG_CALL
    except click.ClickException as error:
        context = getattr(error, "ctx", None)
        terminal.complain(error.format_message())
        if context is not None and not terminal.quiet:
            click.echo(f"Try '{context.command_path} --help'.", err=True)
        return error.exit_code
    except ScanstrainError as error:
        terminal.complain(str(error), traceback.format_exc())
        return error.exit_code
    except (click.Abort, KeyboardInterrupt):
        terminal.complain("interrupted; nothing half-finished is left; the same command goes on where it was.")
        return INTERRUPTED
    except BrokenPipeError:
        # Whoever read our output has enough; a second complaint while Python flushes at the end helps nobody.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FAILED
    except Exception as error:  # the last place where it can be put in words
        from scanstrain.batch import in_words

        terminal.complain(in_words(error), traceback.format_exc())
        return FAILED
    return code if isinstance(code, int) else 0
