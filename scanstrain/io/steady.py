# SPDX-License-Identifier: MIT
"""Input files that must stay as they are: hashed before the work, looked at again after it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

from scanstrain.errors import InputFileError, explain
from scanstrain.io.files import file_size, sha256

State = tuple[int, int]
"""Size [byte] and time of the last change [ns]."""


def hash_files(files: Mapping[str, Path]) -> dict[str, str]:
    """Return the SHA-256 of every file that is read, under the same names.

    Raises
    ------
    InputFileError
        One is missing, empty or cannot be read.
    """
    found = {}
    for part, path in files.items():
        file_size(path)
        try:
            found[part] = sha256(path)
        except OSError as error:
            got, remedy = error.strerror or str(error), "check the path and the permissions"
            raise InputFileError(explain(str(path), "a file that can be read", got, remedy)) from error
    return found


@contextmanager
def unchanged(files: Sequence[Path]) -> Iterator[None]:
    """Refuse what was made of files that were replaced or taken away while they were at work.

    Raises
    ------
    InputFileError
        With the file; it takes the place of the error that its absence caused.
    """
    before = [_state(path) for path in files]
    try:
        yield
    except (OSError, InputFileError):
        _compare(files, before)
        raise
    _compare(files, before)


def _state(path: Path) -> State | None:
    try:
        found = path.stat()
    except OSError:
        return None
    return found.st_size, found.st_mtime_ns


def _compare(files: Sequence[Path], before: Sequence[State | None]) -> None:
    for path, state in zip(files, before, strict=True):
        now = _state(path)
        if now != state:
            got = "one that was changed meanwhile" if now else "one that is no longer there"
            raise InputFileError(explain(str(path), "a scan that stays as it is to the end", got, "run it again"))
