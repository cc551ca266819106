# SPDX-License-Identifier: MIT
"""Inks, sizes and text that all figures share, and the drawing state that makes them the same everywhere."""

from __future__ import annotations

import functools
import unicodedata
from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar

from scanstrain.outputs.colour import RGB8, colour_table
from scanstrain.outputs.key import shortened

P = ParamSpec("P")
R = TypeVar("R")

INK, FAINT, RULE, PAPER = "#1c2733", "#5b6773", "#ccd2d8", "#ffffff"
GROUND = (228, 232, 236)
"""Pale ground under arrows and crosses: surface that was measured."""

SET_ASIDE = (178, 183, 188)
"""Grey for surface that a figure leaves out of its judgement; darker than the middle of the signed colours."""

WIDTH = 7.2
"""Width of a figure [inch]: the text width of an A4 page."""
DPI = 200
"""Dots per inch: 1440 dots across, enough for a page 900 dots wide on a screen of twice the usual density."""

TITLE, TEXT, SMALL = 13.0, 9.0, 8.0
"""Sizes of letters [pt]; nothing is smaller than 8 pt in print."""

LINE = 0.165
"""Height of a line of small text [inch]."""
LETTERS, SMALL_LETTERS = 104, 116
"""Letters of text and of small text that fit between the margins."""

STYLE: dict[str, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": TEXT,
    "text.parse_math": False,
    "text.color": INK,
    "axes.edgecolor": FAINT,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.6,
    "axes.labelsize": SMALL,
    "axes.formatter.useoffset": False,
    "xtick.color": FAINT,
    "ytick.color": FAINT,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": SMALL,
    "ytick.labelsize": SMALL,
    "xtick.major.width": 0.6,
    "ytick.major.width": 0.6,
    "svg.hashsalt": "scanstrain",
}


def styled(draw: Callable[P, R]) -> Callable[P, R]:
    """Run a function under our drawing state, whatever the user's own settings of matplotlib are."""

    @functools.wraps(draw)
    def run(*args: P.args, **kwargs: P.kwargs) -> R:
        import matplotlib as mpl

        with mpl.rc_context():
            # past the checks of each of three hundred values, which the defaults have passed and ours pass below
            dict.update(mpl.rcParams, _drawing_state())
            return draw(*args, **kwargs)

    return run


@functools.lru_cache(maxsize=1)
def _drawing_state() -> dict[str, Any]:
    """Return the checked drawing state without settings that begin with "backend": setting them would load one."""
    import matplotlib as mpl

    defaults = {key: value for key, value in dict.items(mpl.rcParamsDefault) if not key.startswith("backend")}
    with mpl.rc_context({**defaults, **STYLE}):
        return {key: value for key, value in dict.items(mpl.rcParams) if not key.startswith("backend")}


def plain(text: str, most: int = 48) -> str:
    """Make foreign text fit to be drawn: one line, no control characters, only letters that the font has.

    >>> plain("north wall" + chr(10) + chr(0) + "1")
    'north wall 1'
    """
    known = _letters()
    words = " ".join("".join(" " if unicodedata.category(c)[0] in "CZ" else c for c in text).split())
    return shortened("".join(c if ord(c) in known else "□" for c in words), most)


def signed_inks() -> tuple[tuple[float, ...], tuple[float, ...]]:
    """Give the colours for negative and positive values that stand alone, from the table of signed values."""
    table: RGB8 = colour_table("vik")
    negative, positive = (tuple(float(part) / 255 for part in table[row]) for row in (36, 212))
    return negative, positive


@functools.lru_cache(maxsize=1)
def _letters() -> frozenset[int]:
    """Code points of the font that comes with matplotlib."""
    from matplotlib.font_manager import findfont, get_font

    return frozenset(get_font(findfont("DejaVu Sans")).get_charmap())
