# SPDX-License-Identifier: MIT
"""What a user can choose about the outputs."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from scanstrain.outputs.colour import Limits


@dataclass(frozen=True, slots=True)
class OutputOptions:
    """Choices that the writers share.

    Parameters
    ----------
    colour_by : str
        Attribute of the coloured cloud and its key.
    colour_limits : float or (float, float), optional
        Ends of the colour scale in stored units, see `outputs.colour.choose_scale`.
    no_data : float, optional
        Finite value written for no-data, for readers that cannot take NaN.
    only_significant : bool
        Grey out places without a change beyond the false-discovery control.
    report : bool
        Write `report.html`.
    ply : bool
        Write the coloured cloud as binary PLY too.
    colour_map : str, optional
        Table of colours for `colour_by`, see `outputs.colour_maps`.
    request : mapping, optional
        What was asked for, as plain JSON; goes into the manifest, by which a second run knows it again.
    """

    colour_by: str = "disp_n"
    colour_limits: Limits | None = None
    no_data: float | None = None
    only_significant: bool = False
    report: bool = True
    ply: bool = True
    colour_map: str | None = None
    request: Mapping[str, Any] | None = None
