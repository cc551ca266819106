# SPDX-License-Identifier: MIT
"""The model of a batch file: the epochs, which of them are compared, and the options of every comparison."""

from __future__ import annotations

import datetime as dt
import difflib
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, Strict, ValidationInfo, field_validator, model_validator

from scanstrain.config.assessment import SeriesOptions
from scanstrain.config.base import FilePath, Finite, Options
from scanstrain.config.faults import Fault, contradiction, refuse, refuse_all
from scanstrain.config.models import CompareConfig
from scanstrain.config.output import OutputOptions
from scanstrain.config.place import PlaceEntry, faults_of_places
from scanstrain.errors import OptionError

LABEL = r"^\w[\w.-]*$"


class EpochEntry(Options):
    """One scan, or several set-ups merged in one file, of the object at one date."""

    label: str = Field(
        pattern=LABEL,
        description="Short name of the epoch, used in folder names and messages: letters, digits, dot, "
        "hyphen, underscore.",
    )
    file: FilePath = Field(
        description="The LAS or LAZ file; a relative path starts at this configuration file. * and ? stand for what "
        "differs in names, and must lead to one file; {place} stands for the name of each [[place]]."
    )
    date: dt.date | None = Field(
        default=None,
        description="Day of the scan, without quotes. No default: not needed, but it shows mixed-up epochs.",
    )
    temperature: Finite | None = Field(
        default=None,
        examples=[11.5],
        description="Temperature of the object at the scan [deg C], for a series that takes its expansion off. No "
        "default: it is not in the scan.",
    )


class ComparisonEntry(Options):
    """One pair of epochs."""

    reference: str = Field(description="Label of the earlier epoch; results live on its points.")
    current: str = Field(description="Label of the later epoch.")

    @property
    def name(self) -> str:
        """Folder name of the comparison."""
        return f"{self.reference}_to_{self.current}"


class BatchOutputOptions(OutputOptions):
    """Where results go, and how they look."""

    folder: FilePath = Field(
        description="Folder for the results, one sub-folder REFERENCE_to_CURRENT a comparison, in one folder a place "
        "where there are places; a relative path starts at this configuration file."
    )


class BatchConfig(CompareConfig):
    """A whole batch file."""

    assume_same_crs: bool = Field(
        default=False,
        description="Compare epochs although the coordinate systems that they state differ. Default false, because"
        " two systems taken for one look like movement.",
    )
    comparisons: Literal["first", "previous"] | None = Field(
        default=None,
        description="Compare every epoch with the first one, or with the one before it; instead of "
        '[[comparison]] tables. No default in the file; if neither is given, "first".',
    )
    series: SeriesOptions = Field(
        default=SeriesOptions(), description="Rates, where three dated epochs or more are compared with the first."
    )
    output: BatchOutputOptions = Field(description="Result folder, colours and missing values.")
    epoch: Annotated[tuple[EpochEntry, ...], Strict(False)] = Field(
        min_length=2, description="The epochs, in order of date."
    )
    comparison: Annotated[tuple[ComparisonEntry, ...], Strict(False)] = Field(
        default=(), description="The pairs to compare. No default; if none is given, `comparisons` says which."
    )
    place: Annotated[tuple[PlaceEntry, ...], Strict(False)] = Field(
        default=(),
        description="Places that were all scanned at these epochs, each with its own comparisons; the files of the "
        "epochs then hold {place}.",
    )

    @field_validator("epoch")
    @classmethod
    def _different(cls, value: tuple[EpochEntry, ...]) -> tuple[EpochEntry, ...]:
        refuse_all([*_repeated_epochs(value), *_unordered_dates(value)])
        return value

    @field_validator("comparison")
    @classmethod
    def _known_pairs(cls, value: tuple[ComparisonEntry, ...], info: ValidationInfo) -> tuple[ComparisonEntry, ...]:
        if value and info.data.get("comparisons") is not None:
            refuse("either comparisons or [[comparison]] tables", "both", "remove one of the two")
        if "epoch" in info.data:
            refuse_all(list(_impossible_pairs(value, {entry.label: entry for entry in info.data["epoch"]})))
        return value

    @model_validator(mode="after")
    def _files_of_places(self) -> BatchConfig:
        refuse_all(list(faults_of_places(self.place, tuple(entry.file for entry in self.epoch))))
        return self

    @model_validator(mode="after")
    def _temperatures_of_a_series(self) -> BatchConfig:
        if self.series.thermal is not None:
            missing = [entry.label for entry in self.followed() if entry.temperature is None]
            if missing:
                required = "a temperature for each epoch of the series, to take the expansion off"
                got = f"none for {', '.join(missing)}"
                refuse(required, got, "add them or remove series.free_expansion", key=("series", "free_expansion"))
        return self

    @model_validator(mode="after")
    def _dates_that_show_a_season(self) -> BatchConfig:
        if self.series.season:
            refuse_all(list(_no_season(self.followed())))
        return self

    def followed(self) -> tuple[EpochEntry, ...]:
        """Return the epochs of the series: the first one, and those with a date that are compared with it."""
        first = self.epoch[0]
        later = [current for reference, current in self.pairs() if reference is first and current.date is not None]
        return (first, *later) if first.date is not None else ()

    def pairs(self) -> list[tuple[EpochEntry, EpochEntry]]:
        """Return the (reference, current) epochs of every comparison, in the order of the file."""
        if self.comparison:
            by_label = {entry.label: entry for entry in self.epoch}
            return [(by_label[entry.reference], by_label[entry.current]) for entry in self.comparison]
        if self.comparisons == "previous":
            return list(zip(self.epoch, self.epoch[1:], strict=False))
        return [(self.epoch[0], later) for later in self.epoch[1:]]

    def compare_config(self) -> CompareConfig:
        """Return what a single comparison needs of this file."""
        output = OutputOptions(**self.output.model_dump(exclude={"folder"}))
        return CompareConfig(
            registration=self.registration,
            neighbourhood=self.neighbourhood,
            strain=self.strain,
            tunnel=self.tunnel,
            wall=self.wall,
            budget=self.budget,
            output=output,
            zone=self.zone,
            joint=self.joint,
            trigger=self.trigger,
        )

    def placed(self, base: Path) -> BatchConfig:
        """Return the same batch with relative paths starting at the folder `base`."""
        epochs = tuple(entry.model_copy(update={"file": placed_at(base, entry.file)}) for entry in self.epoch)
        output = self.output.model_copy(update={"folder": placed_at(base, self.output.folder)})
        registration = self.registration
        if registration.start_file is not None:
            start_file = placed_at(base, registration.start_file)
            registration = registration.model_copy(update={"start_file": start_file})
        return self.model_copy(update={"epoch": epochs, "output": output, "registration": registration})


def placed_at(base: Path, path: Path) -> Path:
    """Return `path` as seen from the folder `base`, without detours; links are not followed."""
    return Path(os.path.normpath(base / path))


def _repeated_epochs(epochs: tuple[EpochEntry, ...]) -> Iterator[Fault]:
    labels: dict[str, str] = {}
    files: dict[Path, str] = {}
    for position, entry in enumerate(epochs):
        # Folder names on many systems do not tell capitals from small letters.
        folded = entry.label.casefold()
        if folded in labels:
            got = f"{entry.label!r} beside {labels[folded]!r}"
            yield contradiction("a different label for each epoch", got, "rename one of them", key=(position, "label"))
        if entry.file in files:
            got = f"{entry.file} again, which is epoch {files[entry.file]!r}"
            yield contradiction("a different file for each epoch", got, "name each scan once", key=(position, "file"))
        labels.setdefault(folded, entry.label)
        files.setdefault(entry.file, entry.label)


def _unordered_dates(epochs: tuple[EpochEntry, ...]) -> Iterator[Fault]:
    latest: EpochEntry | None = None
    for position, entry in enumerate(epochs):
        if entry.date and latest and latest.date and entry.date < latest.date:
            got = f"{entry.date} after {latest.date} of {latest.label!r}"
            yield contradiction("epochs in order of date", got, "put the older epoch first", key=(position, "date"))
        latest = entry if entry.date else latest


def _no_season(epochs: tuple[EpochEntry, ...]) -> Iterator[Fault]:
    """What keeps an annual wave from being fitted to a series."""
    from scanstrain.series import check_dates

    try:
        check_dates([epoch.date for epoch in epochs if epoch.date is not None], season=True)
    except OptionError as error:
        _, _, said = str(error).rstrip(".").partition(": ")
        yield Fault(("series", "season"), said)


def _impossible_pairs(pairs: tuple[ComparisonEntry, ...], epochs: dict[str, EpochEntry]) -> Iterator[Fault]:
    order = list(epochs)
    for position, pair in enumerate(pairs):
        unknown = [key for key in ("reference", "current") if getattr(pair, key) not in epochs]
        for key in unknown:
            label = getattr(pair, key)
            near = difflib.get_close_matches(label, order, n=1)
            remedy = f"did you mean {near[0]!r}" if near else f"the labels are {', '.join(order)}"
            yield contradiction("the label of an epoch", repr(label), remedy, key=(position, key))
        if unknown:
            continue
        if pair in pairs[:position]:
            yield contradiction("each comparison once", f"{pair.name} again", "remove it", key=(position, "current"))
        if pair.reference == pair.current:
            got = f"{pair.current!r} against itself"
            yield contradiction("two different epochs", got, "name another epoch", key=(position, "current"))
        elif order.index(pair.current) < order.index(pair.reference):
            got = f"{pair.reference!r} as the reference of {pair.current!r}, which stands before it"
            yield contradiction("the earlier epoch as reference", got, "exchange them", key=(position, "reference"))
