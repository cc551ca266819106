# SPDX-License-Identifier: MIT
"""The options of what is written."""

from __future__ import annotations

import difflib
import math
from typing import Annotated, Literal

import numpy as np
from pydantic import BeforeValidator, Field, ValidationInfo, field_validator

from scanstrain.attributes import BY_NAME
from scanstrain.config.base import Finite, Limits, Options
from scanstrain.config.faults import Fault, refuse, refuse_all
from scanstrain.errors import OptionError

SMALLEST_NO_DATA = 1000.0
"""A no-data number nearer to zero than this could be taken for a displacement [m], a strain [1] or an angle [rad]."""

LARGEST_NO_DATA = 1e30
"""Beyond this the 32 bits of an attribute are near their end."""


def _named_nan(value: object) -> object:
    """Take TOML's own `nan` for the word, so that the resolved options stay valid JSON."""
    return "nan" if isinstance(value, float) and math.isnan(value) else value


class OutputOptions(Options):
    """What is written beside the numbers, and how a missing value looks."""

    colour_by: str = Field(
        default="disp_n",
        description="Attribute that colours the points. Default disp_n, the quantity that every surface shows.",
    )
    colour_limits: Limits | None = Field(
        default=None,
        examples=[[-0.01, 0.01]],
        description="Ends [low, high] of the colour scale in the unit of the attribute's values in the "
        "file [m, rad, 1 or 1/m]. No default: taken from the data, symmetric for signed "
        "quantities.",
    )
    colour_map: str | None = Field(
        default=None,
        examples=["roma"],
        description="Table of colours for that attribute, by its name in the cmcrameri package; _r at its end turns it "
        "round. No default: one that suits the kind of quantity, vik for signed ones.",
    )
    no_data: Annotated[Finite | Literal["nan"], BeforeValidator(_named_nan)] = Field(
        default="nan",
        description="Number written where the data support no value, in the unit of the attribute [m, rad,"
        ' 1 or 1/m]; "nan" or for example -9999.0. Default nan, which no program can take for '
        "a measurement.",
    )
    only_significant: bool = Field(
        default=False,
        description="Colour only what survived false-discovery control, the rest grey. Default false, "
        "because the eye also needs the quiet area.",
    )

    report: bool = Field(
        default=True,
        description="Write report.html. Default true: it is what most people read; it takes some ten seconds and a few "
        "megabytes a comparison.",
    )

    ply: bool = Field(
        default=True,
        description="Write the coloured cloud as binary PLY too. Default true, because many viewers know no LAZ; it "
        "takes some 40 bytes a point.",
    )

    keep_stages: bool = Field(
        default=True,
        description="Keep the results of registration, gauges and strain in .stages beside the result. Default true: "
        "with other options only what depends on them is computed again. They take one byte a point of the reference "
        "and some three kilobytes a gauge, far less than the clouds. A run that was stopped goes on where it was "
        "either way.",
    )

    @field_validator("colour_by")
    @classmethod
    def _known_attribute(cls, value: str) -> str:
        if value not in BY_NAME:
            near = difflib.get_close_matches(value, list(BY_NAME), n=1)
            remedy = f"did you mean {near[0]!r}" if near else "choose one of " + ", ".join(BY_NAME)
            refuse("the name of a written attribute", repr(value), remedy)
        return value

    @field_validator("colour_limits")
    @classmethod
    def _fit_the_attribute(cls, value: tuple[float, float] | None, info: ValidationInfo) -> tuple[float, float] | None:
        if value is not None and "colour_by" in info.data:
            from scanstrain.outputs.colour import choose_scale

            try:
                choose_scale(BY_NAME[info.data["colour_by"]], np.empty(0), limits=value)
            except OptionError as error:
                refuse_all([Fault((), str(error).partition(": ")[2].rstrip("."))])
        return value

    @field_validator("colour_map")
    @classmethod
    def _suit_the_attribute(cls, value: str | None, info: ValidationInfo) -> str | None:
        if value is not None and "colour_by" in info.data:
            from scanstrain.outputs.colour import choose_scale

            try:
                choose_scale(BY_NAME[info.data["colour_by"]], np.empty(0), colour_map=value)
            except OptionError as error:
                refuse_all([Fault((), str(error).partition(": ")[2].rstrip("."))])
        return value

    @field_validator("no_data")
    @classmethod
    def _distinct(cls, value: float | str) -> float | str:
        if isinstance(value, str):
            return value
        if abs(value) < SMALLEST_NO_DATA or abs(value) > LARGEST_NO_DATA or float(np.float32(value)) != value:
            required = f'"nan" or a number beyond ±{SMALLEST_NO_DATA:g} that 32 bits hold exactly'
            refuse(required, f"{value!r}", "use for example -9999.0")
        return value

    @property
    def no_data_number(self) -> float | None:
        """The finite number for missing values, or None for NaN."""
        return None if isinstance(self.no_data, str) else float(self.no_data)
