# SPDX-License-Identifier: MIT
"""A finished figure with the words that belong to it."""

from __future__ import annotations

import io
from dataclasses import dataclass
from typing import Any

from scanstrain.outputs.figures.style import DPI, styled


@dataclass(frozen=True, slots=True)
class Picture:
    """A drawn figure and its words.

    Parameters
    ----------
    figure : matplotlib.figure.Figure
        The drawing.
    title : str
        What is shown, in a few words.
    alt : str
        One or two sentences with the main numbers, for those who do not see the drawing.
    caption : str
        How to read it.
    """

    figure: Any
    title: str
    alt: str
    caption: str

    def png(self) -> bytes:
        """Render as PNG; the same drawing gives the same bytes."""
        return self._bytes("png", {"Software": None})

    def svg(self) -> bytes:
        """Render as SVG with letters as outlines, so that it looks the same without our font."""
        return self._bytes("svg", {"Date": None, "Creator": None, "Title": self.title})

    @styled
    def _bytes(self, form: str, metadata: dict[str, str | None]) -> bytes:
        target = io.BytesIO()
        self.figure.savefig(target, format=form, dpi=DPI, metadata=metadata)
        return target.getvalue()
