# SPDX-License-Identifier: MIT
"""Reads TOML and knows on which line each key stands, which the standard library does not tell."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

from scanstrain.config.faults import Location
from scanstrain.errors import OptionError, explain

_TABLE = re.compile(r"^\s*(\[\[?)\s*([^\]]+?)\s*\]")
_KEY = re.compile(r"""^\s*((?:[\w-]+|"[^"]*"|'[^']*')(?:\s*\.\s*(?:[\w-]+|"[^"]*"|'[^']*'))*)\s*=""")
_PART = re.compile(r"""[\w-]+|"[^"]*"|'[^']*'""")
_AT = re.compile(r"\s*\(at (?:line (\d+), column \d+|end of document)\)")

# What people write who are used to other formats, and how TOML wants it.
_HINTS = (
    (re.compile(r"""=\s*"[^"]*\\"""), "write a path with backslashes in single quotes, 'C:\\folder\\scan.laz'"),
    (re.compile(r"=\s*[+-]?\.\d"), "write a digit before the decimal point, 0.5"),
    (re.compile(r"=\s*[+-]?\d+,\d+\s*(#.*)?$"), "write a decimal point, not a comma, 1.5"),
    (re.compile(r"=\s*[+-]?\d+\.([^\d]|$)"), "write a digit after the decimal point, 1.0"),
    (re.compile(r"=\s*(True|False|yes|no|on|off)\b"), "write true or false, in small letters"),
    (re.compile(r"=\s*[A-Za-z/~]"), "put text in quotes"),
    (re.compile(r"^\s*[\w.-]+\s*:"), "write key = value, with an equals sign"),
)


def read_toml(path: Path) -> tuple[str, dict[str, Any]]:
    """Read a TOML file; a byte order mark, which some editors write, does no harm.

    Returns
    -------
    (str, dict)
        The text and what it says.

    Raises
    ------
    OptionError
        Not there, not text, or not TOML; with the line, and a hint where the slip is a usual one.
    """
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise OptionError(
            explain(str(path), "text in UTF-8", f"byte {error.start} is none", "save it as UTF-8")
        ) from None
    except OSError as error:
        got = "no such file" if isinstance(error, FileNotFoundError) else (error.strerror or str(error)).lower()
        raise OptionError(explain(str(path), "a configuration file", got, "check the name")) from None
    try:
        return text, tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise OptionError(_syntax_fault(path, text, str(error))) from None


def _syntax_fault(path: Path, text: str, message: str) -> str:
    lines = text.splitlines() or [""]
    found = _AT.search(message)
    number = int(found[1]) if found and found[1] else len(lines)
    reason = _AT.sub("", message)
    repeated = re.search(r"Cannot overwrite a value|Cannot declare .* twice", message)
    if repeated and not (found and found[1]):
        number = _second_time(lines) or number
    number = min(number, len(lines))
    line = lines[number - 1]
    remedy = "correct it"
    if repeated:
        remedy = "this key or table stands there twice, keep one of them"
    else:
        remedy = next((hint for pattern, hint in _HINTS if pattern.search(line)), remedy)
    return f"{path}:{number}: " + explain(
        line.strip() or "end of file", "valid TOML", reason[:1].lower() + reason[1:], remedy
    )


def _second_time(lines: list[str]) -> int | None:
    seen: set[Location] = set()
    for location, number in _keys("\n".join(lines)):
        if location in seen:
            return number
        seen.add(location)
    return None


def line_numbers(text: str) -> dict[Location, int]:
    r"""Map the path of every table and key to the line where it first stands.

    Keys inside an inline table are not listed; `line_of` then gives the line of that table.

    >>> line_numbers("[strain]\nmeasure = 'small'")
    {('strain',): 1, ('strain', 'measure'): 2}
    """
    numbers: dict[Location, int] = {}
    for location, number in _keys(text):
        numbers.setdefault(location, number)
    return numbers


def _keys(text: str) -> list[tuple[Location, int]]:
    found: list[tuple[Location, int]] = []
    table: Location = ()
    counts: dict[Location, int] = {}
    quoted = ""
    for number, line in enumerate(text.splitlines(), start=1):
        if quoted:  # inside a text of several lines
            quoted = "" if quoted in line else quoted
            continue
        if head := _TABLE.match(line):
            table = _parts(head[2])
            if head[1] == "[[":
                counts[table] = counts.get(table, -1) + 1
                found.append((table, number))
                table = (*table, counts[table])
            found.append((table, number))
        elif key := _KEY.match(line):
            found.append(((*table, *_parts(key[1])), number))
            quoted = next((mark for mark in ('"""', "'''") if line.count(mark) == 1), "")
    return found


def _parts(dotted_key: str) -> Location:
    return tuple(part.strip("\"'") for part in _PART.findall(dotted_key))


def line_of(numbers: dict[Location, int], location: Location) -> int:
    """Return the line of a key, or of the nearest table around it, or 1."""
    while location and location not in numbers:
        location = location[:-1]
    return numbers.get(location, 1)
