# SPDX-License-Identifier: MIT
"""One run at a time on an output folder: a small file beside it says who is at work there."""

from __future__ import annotations

import datetime as dt
import json
import os
import secrets
import socket
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import Any

from scanstrain.errors import OutputError, explain

DEPTH = 2
"""Folders above whose runs also hold a folder: a batch has a folder a place, and in it one a comparison."""
ATTEMPTS = 5
"""Times that a lock is tried for, since others may take over a dead one at the same moment."""


@contextmanager
def locked(folder: Path) -> Iterator[None]:
    """Hold the lock of an output folder; that of a process of this machine that no longer runs is taken over.

    Parameters
    ----------
    folder : Path
        Need not exist.

    Raises
    ------
    OutputError
        Another run is at work there, or on the folder that it lies in; or a lock of another machine lies there, whose
        processes cannot be seen from here; or the lock cannot be written.
    """
    folder = folder.absolute()
    path = lock_path(folder)
    mine = _owner()
    made = [each for each in path.parents if not each.exists()]
    _take(path, folder, mine)
    try:
        for above in list(folder.parents)[:DEPTH]:
            check_free(above)
        yield
    finally:
        if _read(path) == mine:
            path.unlink(missing_ok=True)
        for each in made:
            with suppress(OSError):  # it holds a result by now
                each.rmdir()


def check_free(folder: Path) -> None:
    """Refuse a folder that another run is at work on.

    Raises
    ------
    OutputError
        There is a lock of a process that runs, or of another machine.
    """
    path = lock_path(folder.absolute())
    if (holder := _read(path)) is not None and not _is_dead(holder):
        raise _refusal(folder, path, holder)


def lock_path(folder: Path) -> Path:
    """Return where the lock of a folder lies: beside it, or inside where nothing can be written beside it."""
    parent = folder.parent
    if folder.is_dir() and not os.access(parent, os.W_OK | os.X_OK):
        return folder / ".lock"
    return parent / f".{folder.name}.lock"


def _take(path: Path, folder: Path, mine: dict[str, Any]) -> None:
    """Put the lock in place in one step, or say who holds it."""
    for _ in range(ATTEMPTS):
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            _create(path, json.dumps(mine))
            return
        except FileExistsError:
            holder = _read(path)
            if holder is None:
                continue
            if not _is_dead(holder):
                raise _refusal(folder, path, holder) from None
            _remove(path, holder)
        except OSError as error:
            got = error.strerror or str(error)
            raise OutputError(explain(str(folder), "a place that can be written to", got, "choose another")) from None
    raise OutputError(explain(str(path), "a lock that can be taken", "one that others keep taking", "run it again"))


def _create(path: Path, text: str) -> None:
    """Make a file with its content at once, so that nobody sees an empty one."""
    temporary = path.with_name(f"{path.name}.{secrets.token_hex(4)}")
    try:
        temporary.write_text(text, encoding="utf-8")
        try:
            os.link(temporary, path)
        except FileExistsError:
            raise
        except OSError:  # a disk without hard links
            with path.open("x", encoding="utf-8") as stream:
                stream.write(text)
    finally:
        temporary.unlink(missing_ok=True)


def _remove(path: Path, holder: dict[str, Any]) -> None:
    """Take a dead lock away, unless somebody else was quicker and put a new one there.

    Whoever removes it holds the file itself locked between the last look and the removal, so that two cannot take
    away one after the other a dead lock and the new one in its place.
    """
    with suppress(FileNotFoundError), path.open("rb") as stream:
        with suppress(ImportError):  # not on Windows, where an open file cannot be removed anyway
            import fcntl

            fcntl.flock(stream, fcntl.LOCK_EX)
        same = os.path.samestat(os.fstat(stream.fileno()), path.stat())
        if same and _read(path) == holder:
            path.unlink()


def _read(path: Path) -> dict[str, Any] | None:
    """Return what a lock says, None where there is none; one that says nothing belongs to nobody known."""
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except (FileNotFoundError, NotADirectoryError):
        return None
    except (OSError, ValueError):
        content = None
    return content if isinstance(content, dict) else {"host": "an unknown machine", "process": "?", "since": "?"}


def _owner() -> dict[str, Any]:
    now = dt.datetime.now(dt.UTC).isoformat(timespec="seconds")
    number = os.getpid()
    token = secrets.token_hex(4)
    return {"token": token, "process": number, "began": _beginning(number), "host": socket.gethostname(), "since": now}


def _is_dead(holder: dict[str, Any]) -> bool:
    """Whether a holder was a process of this machine and is gone; nothing is known of other machines."""
    number = holder.get("process")
    if holder.get("host") != socket.gethostname() or not isinstance(number, int):
        return False
    return not _runs(number) or _beginning(number) != holder.get("began")


def _runs(number: int) -> bool:
    """Tell whether a process is there."""
    if sys.platform == "win32":
        import ctypes

        handle = ctypes.windll.kernel32.OpenProcess(0x1000, False, number)  # 0x1000: only to ask about it
        ctypes.windll.kernel32.CloseHandle(handle)
        return bool(handle)
    try:
        os.kill(number, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _beginning(number: int) -> str | None:
    """Return when a process began, in the system's own count, since numbers are used again; None if it is not told."""
    try:
        text = Path(f"/proc/{number}/stat").read_text(encoding="ascii", errors="replace")
        boot = Path("/proc/sys/kernel/random/boot_id").read_text(encoding="ascii").strip()
    except OSError:
        return None
    return f"{boot} {text.rpartition(')')[2].split()[19]}"  # field 22 of proc(5), starttime


def _refusal(folder: Path, path: Path, holder: dict[str, Any]) -> OutputError:
    here = holder.get("host") == socket.gethostname()
    since = f"since {holder.get('since')}"
    if here:
        got, remedy = f"process {holder.get('process')} at work there {since}", "wait for it or choose another folder"
    else:
        got = f"a lock of process {holder.get('process')} on {holder.get('host')} {since}"
        remedy = f"wait for it, or remove {path} if nothing runs there any more"
    return OutputError(explain(str(folder), "an output folder that no other run is at work on", got, remedy))
