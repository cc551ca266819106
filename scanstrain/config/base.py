# SPDX-License-Identifier: MIT
"""What all option models share: how strict they are, and the kinds of numbers that they hold."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, Strict

Auto = Literal["auto"]
Finite = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[float, Field(strict=True, gt=0, allow_inf_nan=False)]
FilePath = Annotated[Path, Strict(False)]
# TOML has lists only, so the containers are read leniently and their numbers strictly.
Point = Annotated[tuple[Finite, Finite, Finite], Strict(False)]
Limits = Annotated[tuple[Finite, Finite], Strict(False)]


class Options(BaseModel):
    """Base of all option models: unknown keys and wrong types are refused, nothing changes after checking."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)
