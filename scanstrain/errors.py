# SPDX-License-Identifier: MIT
"""Every exception that the library raises on purpose: one base, few children.

A message has four parts, in this order: where - what was required - what came - what to do.
"""

from __future__ import annotations


class ScanstrainError(Exception):
    """Base of all errors raised on purpose. `exit_code` is what the command line returns for it."""

    exit_code = 1


class InputFileError(ScanstrainError, ValueError):
    """A scan file is missing, damaged, of the wrong kind, or cannot serve."""


class OptionError(ScanstrainError, ValueError):
    """An option or a configuration is wrong: unknown, out of range or contradictory."""

    exit_code = 2


class OverlapError(ScanstrainError, ValueError):
    """The two epochs do not show the same surface."""


class RegistrationError(ScanstrainError, RuntimeError):
    """The alignment did not converge or is not determined well enough to serve."""


class FitError(ScanstrainError, RuntimeError):
    """No gauge could be fitted anywhere."""


class OutputError(ScanstrainError, OSError):
    """A result could not be written, or did not read back as it was written."""


class MissingDependencyError(ScanstrainError, ImportError):
    """An optional package, or a system library that one needs, is not there."""


def explain(where: str, required: str, got: str, remedy: str) -> str:
    """Put a message together in the one form that all messages have.

    >>> explain("gauge_length", "a length in metres above 0", "-1", "give for example 0.6")
    'gauge_length: required a length in metres above 0; got -1; give for example 0.6.'
    """
    return f"{where}: required {required}; got {got}; {remedy}."
