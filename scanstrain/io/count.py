# SPDX-License-Identifier: MIT
"""How many points a scan holds, at a glance: from the header, or from the size of the file."""

from __future__ import annotations

from pathlib import Path

from scanstrain.errors import InputFileError

BYTES_A_POINT = 24
"""Of formats whose header does not tell at once: three binary doubles, or a short line of text. More bytes a point
make the guess too high, which errs on the safe side for memory and space."""


def expected_points(path: Path) -> int:
    """Estimate the number of points of a scan without reading them; 0 where the file cannot serve at all.

    What is wrong with a file is said when it is read.
    """
    from scanstrain.io.las_header import read_header

    try:
        if path.suffix.lower() in (".las", ".laz"):
            return read_header(path).count
        return path.stat().st_size // BYTES_A_POINT
    except (InputFileError, OSError):
        return 0
