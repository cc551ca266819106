# SPDX-License-Identifier: MIT
"""What this machine can carry at a time: cores, memory, room on a disk; and what a comparison needs of it."""

from __future__ import annotations

import os
import shutil
import sys
from collections.abc import Iterable, Sequence
from pathlib import Path

BASE_MEMORY = 600e6
"""Of a process with all libraries loaded and compiled [byte], measured."""
MEMORY_A_POINT = 700.0
"""Peak of a comparison for each point of both scans [byte]: 555 measured with two scans of a million, rounded up."""
GROUP = Path("/sys/fs/cgroup")
"""Where Linux tells the limits on a group of processes (control group v2)."""
USABLE = 0.8
"""Share of the free memory that may be planned with [1]; the rest is for the system and for estimates that are low."""

BASE_SPACE = 20e6
"""Report, tables, pictures and kept stages of a small comparison [byte]."""
SPACE_A_POINT = 300.0
"""Room that a result takes for each point of the reference scan [byte], measured and rounded up: all three clouds, kept
stages and the older result that stands until the new one is whole."""
STORE_A_POINT = 300.0
"""Room that work in tiles takes for each point of the larger scan [byte], measured and rounded up."""


def needed_memory(points: int) -> float:
    """Estimate the peak memory of a comparison [byte] from the points of both scans."""
    return BASE_MEMORY + MEMORY_A_POINT * points


def needed_space(points: int) -> float:
    """Estimate the room that a result takes [byte] from the points of the reference scan."""
    return BASE_SPACE + SPACE_A_POINT * points


def stored_space(points: int) -> float:
    """Estimate the room that work in tiles takes [byte] from the points of the larger scan."""
    return STORE_A_POINT * points


def usable_workers(points: Sequence[int]) -> int:
    """Choose how many comparisons run at a time: no more than cores, than there are, and than memory carries.

    Parameters
    ----------
    points : sequence of int
        Points of both scans, for each comparison.

    Returns
    -------
    int
        At least 1. The largest comparisons are assumed to meet.
    """
    most = min(cores(), len(points))
    free = free_memory()
    if free is None:
        return max(most, 1)
    fits, used = 0, 0.0
    for count in sorted(points, reverse=True)[:most]:
        used += needed_memory(count)
        if used > USABLE * free:
            break
        fits += 1
    return max(fits, 1)


def cores() -> int:
    """Count the cores that this process may use."""
    if sys.platform == "linux":
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def free_memory() -> float | None:
    """Return the memory that is free or can be freed at once [byte]; None where the system does not tell."""
    known = [amount for amount in (_free_on_machine(), _free_in_group()) if amount is not None]
    return min(known) if known else None


def _free_on_machine() -> float | None:
    try:
        lines = Path("/proc/meminfo").read_text(encoding="ascii").splitlines()
    except OSError:
        return None
    return next((1024.0 * int(line.split()[1]) for line in lines if line.startswith("MemAvailable:")), None)


def _free_in_group() -> float | None:
    """Return what a limit on this group of processes leaves, as containers and job schedulers set it."""
    try:
        limit = (GROUP / "memory.max").read_text(encoding="ascii").strip()
        used = int((GROUP / "memory.current").read_text(encoding="ascii"))
    except (OSError, ValueError):
        return None
    return None if limit == "max" else max(float(limit) - used, 0.0)


def free_space(folder: Path) -> float:
    """Return the room on the disk of a folder that may not exist yet [byte]."""
    place = next(each for each in (folder.absolute(), *folder.absolute().parents) if each.exists())
    return float(shutil.disk_usage(place).free)


def used_memory(processes: Iterable[int]) -> float | None:
    """Return the memory that some processes hold together [byte]; None where the system does not tell."""
    total = 0.0
    try:
        page = os.sysconf("SC_PAGE_SIZE")
        for number in processes:
            total += page * int(Path(f"/proc/{number}/statm").read_text(encoding="ascii").split()[1])
    except (OSError, ValueError, AttributeError):
        return total or None
    return total
