# SPDX-License-Identifier: MIT
"""The options of each stage: one strict, frozen model a stage, each option with unit, limits, default and reason."""

from __future__ import annotations

import difflib
from typing import Annotated, ClassVar, Literal

from pydantic import Field, Strict, ValidationInfo, field_validator, model_validator

from scanstrain.config.assessment import BudgetOptions, faults_of_triggers
from scanstrain.config.base import Auto, FilePath, Options, Point, Positive
from scanstrain.config.faults import contradiction, refuse, refuse_all
from scanstrain.config.joint import JointEntry, repeated_joints
from scanstrain.config.output import OutputOptions
from scanstrain.config.trigger import TriggerEntry
from scanstrain.config.zone import ZoneEntry, repeated_names
from scanstrain.zones import Zone

Names = Annotated[tuple[str, ...], Strict(False)]
Places = Annotated[tuple[Point, ...], Strict(False), Field(min_length=2)]
Hour = Annotated[float, Field(ge=0, le=12)]
Chords = Annotated[tuple[Annotated[tuple[Hour, Hour], Strict(False)], ...], Strict(False)]


FEWEST_IN_TILE = 10_000
"""Points of a tile below which it would be all border."""


class RegistrationOptions(Options):
    """How the current epoch is brought into the reference frame."""

    start: Literal["auto", "identity", "coarse", "file", "targets"] = Field(
        default="auto",
        description="Where the alignment begins: identity takes the coordinates as they are, coarse searches by "
        "surface features, file takes a known motion and targets fits pairs of named points, both from start_file. "
        "Default auto: identity if the clouds already overlap within the capture range, because a search can only "
        "lose what a survey frame already gives.",
    )
    start_file: FilePath | None = Field(
        default=None,
        examples=["targets.csv"],
        description='For start = "file" a 4x4 matrix in a text file or a registered.json; for start = "targets" a '
        "CSV of pairs of points. A relative path starts at this configuration file. No default: other starts need "
        "none.",
    )
    capture_range: Positive = Field(
        default=0.3,
        description="Largest misalignment [m] that the fine alignment must cope with. Default 0.3 m: "
        "several times the error of a levelled set-up tied to site control, and well below the"
        " size of a room.",
    )
    stable: Literal["auto", "all"] = Field(
        default="auto",
        description="Ground taken as not moved: auto finds it by leaving out patches that moved, all uses "
        "everything. Default auto, because ground that moved and is used as stable hides "
        "movement.",
    )
    stable_zones: Names = Field(
        default=(),
        description="Names of zones that did not move; nothing else is then used as stable ground. No default: "
        "only somebody who knows the site can say so.",
    )
    excluded_zones: Names = Field(
        default=(),
        description="Names of zones that are never used as stable ground. No default: all ground may be judged.",
    )
    datum_from_intensity: bool = Field(
        default=True,
        description="Let the returned intensity fix motions that the surfaces leave open, such as a slide along a "
        "tunnel. Default true: what it cannot fix stays open and is named.",
    )
    align_setups: bool = Field(
        default=False,
        description="Bring the set-ups inside each epoch together before anything else. Default false: seams are "
        "reported, and moving part of a delivered scan is the user's decision.",
    )
    seed: int = Field(
        default=0,
        ge=0,
        le=2**32 - 1,
        description="Seed of every random choice [1]. Default 0, fixed so that the same scans give the same answer.",
    )
    max_iterations: int = Field(
        default=60,
        ge=1,
        le=1000,
        description="Steps of the fine alignment before it is refused as not converged [1]. Default 60: "
        "alignments that converge do so in fewer than 30.",
    )


class NeighbourhoodOptions(Options):
    """How surface gauges are laid out and fitted."""

    gauge_length: Positive | Auto = Field(
        default="auto",
        description="Diameter of the patch that one gauge averages over [m]. A longer gauge sees smaller "
        "strains and blurs them more. Default auto: so long that strain meets half of its required standard error "
        "where texture allows that, at least 60 point spacings and at most a quarter of the object; summary.json "
        "says why.",
    )
    gauge_ladder: Positive | None = Field(
        default=None,
        examples=[1.2],
        description="Longest gauge length [m] of a ladder that rises from gauge_length by factors of 1.41: each gauge "
        "takes the longest one whose values agree with those of all shorter ones. No default: all gauges then have "
        "one length, which maps of several dates need.",
    )
    gauge_spacing: Positive | Auto = Field(
        default="auto",
        description="Distance between neighbouring gauges [m], at most the gauge length. Default auto: a "
        "quarter of the gauge length, so that no place lies between gauges that do not "
        "overlap.",
    )
    use_intensity: bool = Field(
        default=True,
        description="Use the returned intensity as texture. Default true: without it a smooth surface "
        "shows nothing in its own plane. Set false where the scanner or its settings changed "
        "between the epochs.",
    )
    use_colour: bool = Field(
        default=True,
        description="Use colour beside the intensity where both scans have it and it shows clearly more. Default true, "
        "because texture is what in-plane strain is seen by. Set false where light or camera changed between the "
        "epochs. Not used in tiles.",
    )
    resolution: Positive | Auto = Field(
        default="auto",
        description="Edge of the cells that carry the surface model [m], at most the gauge length. Default "
        "auto: the point spacing of the coarser scan, at least a hundredth of the gauge length, "
        "because wider cells lose fine texture and narrower ones only cost time.",
    )
    min_points: int = Field(
        default=30,
        ge=12,
        description="Points that a gauge must have, counted as cells that both epochs show [1]. Default 30: "
        "five for each of the six unknowns of the normal part, so that its noise can be judged; "
        "below 12 there is no redundancy left.",
    )
    required_displacement_sd: Positive | Auto = Field(
        default="auto",
        description="Largest standard error at which a displacement along the surface counts as observable [m]."
        " Default auto: 0.002 m, because a vaguer one says nothing about a structure.",
    )
    required_strain_sd: Positive | Auto = Field(
        default="auto",
        description="Largest standard error at which an in-plane strain counts as observable [1]. Default auto:"
        " 0.001, because a vaguer one cannot tell cracking from nothing.",
    )
    tiles: bool | Auto = Field(
        default="auto",
        description="Work on the scans in tiles, from disk, so that memory does not grow with them; LAS and LAZ only."
        " Default auto: from three million points a scan, because below that one piece is quicker.",
    )
    tile_points: int | Auto = Field(
        default="auto",
        description="Points of one scan in a tile and about it [1]. Default auto: 1.8 million, which take some 2.5 GB"
        " of memory.",
    )

    @field_validator("tile_points")
    @classmethod
    def _enough_for_a_tile(cls, value: int | str) -> int | str:
        if isinstance(value, int) and value < FEWEST_IN_TILE:
            refuse(f"at least {FEWEST_IN_TILE}", f"{value}", "make it larger or leave it out")
        return value

    @field_validator("gauge_ladder")
    @classmethod
    def _above_the_gauge(cls, value: float | None, info: ValidationInfo) -> float | None:
        length = info.data.get("gauge_length")
        if value is not None and isinstance(length, float | int) and value <= length:
            refuse(f"above the gauge_length, {length:g} m", f"{value:g}", "make it longer or leave it out")
        return value

    @field_validator("gauge_spacing", "resolution")
    @classmethod
    def _within_the_gauge(cls, value: float | str, info: ValidationInfo) -> float | str:
        length = info.data.get("gauge_length")
        if isinstance(value, float | int) and isinstance(length, float | int) and value > length:
            refuse(f"at most the gauge_length, {length:g} m", f"{value:g}", "make it smaller or leave it out")
        return value


class StrainOptions(Options):
    """Which strain is formed, in which axes, and how strictly a change must show."""

    confidence: ClassVar[float] = 0.95
    """Of every interval and detection limit [1]; fixed, so that results can be compared."""

    measure: Literal["auto", "small", "green_lagrange", "almansi", "hencky", "biot"] = Field(
        default="auto",
        description="Strain measure. Default auto: small strain, and a finite measure beyond 1 % of strain"
        " or 0.01 rad of rotation, where the small one is no longer true.",
    )
    structure: Literal["tunnel", "wall", "free"] = Field(
        default="free",
        description="Kind of object, which names the axes u and v: hoop and axial in a tunnel, horizontal "
        "and upward on a wall. Default free, because nothing is assumed that the user did not "
        "say.",
    )
    compare_measures: bool = Field(
        default=False,
        description="State how far strains in the other measures lie from those in the one used. Default false: below"
        " 1 % of strain they hardly differ.",
    )
    thickness: Positive | None = Field(
        default=None,
        examples=[0.35],
        description="Thickness of the lining or wall [m], for bending strain on its faces. No default: "
        "without it bending strain is not formed.",
    )
    bending_form: Literal["thin", "thick"] = Field(
        default="thin",
        description="Strain of bending from a change of curvature: thin takes half the thickness times the change, "
        "thick counts that the inside of a ring has a shorter arc than its middle. Default thin, the usual form; on the"
        " inside of a ring of twelve thicknesses it is 4 % too large.",
    )
    free_side: Point | None = Field(
        default=None,
        examples=[[0.0, 0.0, 1.5]],
        description="A point [x, y, z] on the free side in file coordinates [m], towards which normals "
        "look. No default: normals look into a tunnel, or to the middle of the object; on a single plane the side "
        "is arbitrary, and a warning says which was taken.",
    )
    false_discovery_rate: float = Field(
        default=0.05,
        gt=0,
        le=0.5,
        description="Expected share of false ones among the changes marked as discovered [1]. Default "
        "0.05, the usual level for maps of many tests (Benjamini and Hochberg 1995).",
    )


class TunnelOptions(Options):
    """The axis of a tunnel and the sections that are cut square to it."""

    axis: Places | None = Field(
        default=None,
        examples=[[[0.0, 0.0, 1.5], [10.0, 0.0, 1.6]]],
        description="Points [x, y, z] along the axis in file coordinates [m], in the direction of rising chainage. No "
        "default: the axis is found on the reference scan.",
    )
    section_spacing: Positive | Auto = Field(
        default="auto",
        description="Distance between sections [m]. Default auto: about the radius of the lining, which shows every "
        "ring or two.",
    )
    section_thickness: Positive | Auto = Field(
        default="auto",
        description="Length of tunnel that goes into one section [m]. Default auto: 0.01 m, which is too thin to blur "
        "a step between rings, or more where points are sparse.",
    )
    chords: Chords = Field(
        default=(),
        description="Chords [from, to] by the clock hours of their ends, 12 at the crown [1]. No default: horizontal "
        "and vertical diameter are always measured.",
    )


class WallOptions(Options):
    """The face of a wall and the parts that its movement is measured in."""

    plane: Places | None = Field(
        default=None,
        examples=[[[0.0, 0.0, 0.0], [10.0, 0.0, 0.0]]],
        description="Two points [x, y, z] at the foot in file coordinates [m], left to right for somebody who faces "
        "the wall, for a vertical face, or a third one on the face. No default: the main face is found on the "
        "reference scan.",
    )
    panel: Annotated[tuple[Positive, Positive], Strict(False)] | None = Field(
        default=None,
        examples=[[2.0, 1.5]],
        description="Width and height of panels whose movement is given one by one [m]. No default: the wall is one "
        "panel.",
    )
    band: Positive | None = Field(
        default=None,
        examples=[0.5],
        description="Height of the bands of the verticality profile [m]. No default: one gauge length.",
    )


class CompareConfig(Options):
    """Everything that one comparison needs to know."""

    registration: RegistrationOptions = Field(default=RegistrationOptions(), description="Alignment of the two epochs.")
    neighbourhood: NeighbourhoodOptions = Field(default=NeighbourhoodOptions(), description="Gauges and their fit.")
    strain: StrainOptions = Field(default=StrainOptions(), description="Strain, rotation, significance.")
    tunnel: TunnelOptions = Field(default=TunnelOptions(), description="Axis and sections of a tunnel.")
    wall: WallOptions = Field(default=WallOptions(), description="Face of a wall and its parts.")
    budget: BudgetOptions = Field(default=BudgetOptions(), description="Even strain from temperature, for comparison.")
    output: OutputOptions = Field(default=OutputOptions(), description="Colours and missing values.")
    zone: Annotated[tuple[ZoneEntry, ...], Strict(False)] = Field(
        default=(), description="Named parts of the object, for stable ground and for results by zone."
    )
    joint: Annotated[tuple[JointEntry, ...], Strict(False)] = Field(
        default=(), description="Joints and cracks that gauges do not reach across, each with what it did."
    )
    trigger: Annotated[tuple[TriggerEntry, ...], Strict(False)] = Field(
        default=(), description="Your own limits on quantities of the results, in the whole object or in a zone."
    )

    @field_validator("registration")
    @classmethod
    def _start_and_its_file(cls, value: RegistrationOptions) -> RegistrationOptions:
        needs = value.start in ("file", "targets")
        if needs and value.start_file is None:
            refuse(f'start_file, for start = "{value.start}"', "none", "name the file", key=("start",))
        if value.start_file is not None and not needs:
            got = f'start = "{value.start}"'
            refuse('start = "file" or "targets", to use start_file', got, "set it", key=("start_file",))
        if value.stable == "all" and value.stable_zones:
            got = 'stable = "all" beside stable_zones'
            refuse("one statement of what is stable", got, "remove one of the two", key=("stable",))
        return value

    @field_validator("zone")
    @classmethod
    def _different_names(cls, value: tuple[ZoneEntry, ...]) -> tuple[ZoneEntry, ...]:
        refuse_all(list(repeated_names(value)))
        return value

    @field_validator("joint")
    @classmethod
    def _different_joints(cls, value: tuple[JointEntry, ...]) -> tuple[JointEntry, ...]:
        refuse_all(list(repeated_joints(value)))
        return value

    @model_validator(mode="after")
    def _zones_that_exist(self) -> CompareConfig:
        known = [zone.name for zone in self.zone]
        faults = []
        for key in ("stable_zones", "excluded_zones"):
            for name in getattr(self.registration, key):
                if name not in known:
                    near = difflib.get_close_matches(name, known, n=1)
                    remedy = f"did you mean {near[0]!r}" if near else "add a [[zone]] of that name"
                    location = ("registration", key)
                    faults.append(contradiction("the name of a [[zone]]", repr(name), remedy, key=location))
        if self.trigger:
            faults += faults_of_triggers(self)
        refuse_all(faults)
        return self

    def zones(self, names: tuple[str, ...] | None = None) -> tuple[Zone, ...]:
        """Return zones by name, or all of them."""
        return tuple(entry.zone() for entry in self.zone if names is None or entry.name in names)

    @field_validator("output")
    @classmethod
    def _bending_needs_thickness(cls, value: OutputOptions, info: ValidationInfo) -> OutputOptions:
        strain = info.data.get("strain")
        if value.colour_by.startswith("bend_") and strain is not None and strain.thickness is None:
            refuse(
                f"strain.thickness, to colour by {value.colour_by}",
                "none",
                "give the thickness in metres",
                key=("colour_by",),
            )
        return value
