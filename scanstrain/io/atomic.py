# SPDX-License-Identifier: MIT
"""A file appears whole or not at all: written beside its place, then renamed."""

from __future__ import annotations

import errno
import os
import secrets
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from scanstrain.errors import OutputError, explain

REMEDIES = {
    errno.ENOSPC: "free some space or choose another folder",
    errno.EDQUOT: "free some space or choose another folder",
    errno.EFBIG: "free some space or choose another folder",
    errno.EACCES: "choose a folder that can be written to",
    errno.EPERM: "choose a folder that can be written to",
    errno.EROFS: "choose a folder that can be written to",
    errno.ENOENT: "create the folder first",
    errno.ENOTDIR: "name a folder and not a file",
    errno.EISDIR: "give the name of a file",
}


@contextmanager
def replacing(target: Path) -> Iterator[Path]:
    """Yield a temporary path in the folder of `target`; on success it becomes `target`, on any failure it goes.

    Raises
    ------
    OutputError
        The file could not be made, written or renamed: folder missing, no permission, disk full.
    """
    temporary = target.with_name(f".{target.name}.{secrets.token_hex(4)}.part")
    try:
        if target.is_dir():
            raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR))
        temporary.touch(exist_ok=False)
        yield temporary
        with temporary.open("rb") as stream:
            os.fsync(stream.fileno())
        temporary.replace(target)
        _sync_folder(target.parent)
    except OutputError:
        raise
    except OSError as error:
        raise failed(target, error) from error
    finally:
        temporary.unlink(missing_ok=True)


def failed(target: Path, error: OSError) -> OutputError:
    """Say why a file could not be written."""
    remedy = REMEDIES.get(error.errno or 0, "check the folder and the disk")
    return OutputError(explain(str(target), "a file that can be written", error.strerror or str(error), remedy))


def _sync_folder(folder: Path) -> None:
    """Make the new name durable; some systems cannot open a folder, and then the rename alone must do."""
    with suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
