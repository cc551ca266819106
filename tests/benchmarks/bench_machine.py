# SPDX-License-Identifier: MIT
"""What a benchmark ran on, and its table; shared by the scripts beside it. Run by hand it prints the machine alone."""

from __future__ import annotations

import os
import platform
import sys
from importlib.metadata import version

PACKAGES = ("scanstrain", "numpy", "scipy", "numba", "laspy", "lazrs")


def machine():
    """One line each: cores, load, versions."""
    load = ", ".join(f"{value:.1f}" for value in os.getloadavg())
    cores = len(os.sched_getaffinity(0))
    versions = ", ".join(f"{name} {version(name)}" for name in PACKAGES)
    return f"{cores} cores of {platform.machine()}, load {load}\nPython {platform.python_version()}, {versions}"


def table(head, rows):
    """Print rows under a head, every column as wide as it needs."""
    cells = [[str(cell) for cell in row] for row in (head, *rows)]
    widths = [max(len(row[k]) for row in cells) for k in range(len(head))]
    for number, row in enumerate(cells):
        rest = [cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True)]
        print("  ".join([row[0].ljust(widths[0]), *rest]))
        if number == 0:
            print("  ".join("-" * width for width in widths))
    sys.stdout.flush()


if __name__ == "__main__":
    print(machine())
