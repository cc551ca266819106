# SPDX-License-Identifier: MIT
"""Which program computes: its version, the very text of its modules, and the libraries that its numbers depend on."""

from __future__ import annotations

import hashlib
import platform
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

NUMERICAL = ("numpy", "scipy", "numba", "llvmlite", "laspy", "lazrs", "open3d")
"""Libraries that take part in a result: another version may round otherwise, search otherwise or pack otherwise."""

DRAWING = ("matplotlib", "pillow")
"""Libraries that take part in the pictures of a result."""


@cache
def identity() -> dict[str, str]:
    """Say which program this is: two that give the same answer here give the same bytes on the same machine.

    Returns
    -------
    dict of str to str
        Version of this program, SHA-256 over its modules, version of Python and of each library; "none" where a
        library is not installed.
    """
    found = {"scanstrain": _version("scanstrain"), "source": _digest(), "python": platform.python_version()}
    return found | {name: _version(name) for name in (*NUMERICAL, *DRAWING)}


def differences(other: dict[str, str]) -> list[str]:
    """Name what differs between this program and another one, for a person.

    >>> differences(identity() | {"numpy": "1.0"}) == [f"numpy 1.0 in place of {identity()['numpy']}"]
    True
    """
    mine = identity()
    names = [name for name in mine if other.get(name) != mine[name]]
    if "scanstrain" in names and "source" in names:
        names.remove("source")
    said = {name: f"{name} {other.get(name) or 'none'} in place of {mine[name]}" for name in names}
    if "source" in said:
        said["source"] = "scanstrain of the same version with other modules"
    return list(said.values())


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "none"


def _digest() -> str:
    """Hash the modules: while somebody works on them, the version stands still and the numbers change."""
    package = Path(__file__).parent
    total = hashlib.sha256()
    for path in sorted(package.rglob("*.py")):
        total.update(path.relative_to(package).as_posix().encode())
        total.update(path.read_bytes())
    return total.hexdigest()
