# SPDX-License-Identifier: MIT
"""Series out of the comparisons of a batch: what zones and sections did through three dated epochs or more."""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

from scanstrain.batch import Outcome
from scanstrain.errors import ScanstrainError

if TYPE_CHECKING:  # the options load NumPy, which must not happen before a worker has set its threads
    from scanstrain.config import BatchConfig, EpochEntry
    from scanstrain.config.trigger import TriggerEntry
    from scanstrain.series import ChangeRow, RateRow, Temperature, Track

Summary = Mapping[str, Any]

FEWEST = 3
"""Epochs of a series, the first one included."""
OF_SECTIONS = ("horizontal_diameter_change", "vertical_diameter_change", "ovality_change", "crown_up")
"""What is followed at every section."""
OF_ZONES = {"mean_strain_u": "strain_u", "mean_strain_v": "strain_v"}
"""What is followed of the whole object and of every zone besides its movement: means of attributes."""
EXPANDING = {"mean_strain_u": 1.0, "mean_strain_v": 1.0}
"""Quantities that follow the temperature where nothing restrains the object, per unit of its coefficient of expansion;
the change of a diameter does so by its length. Movements depend on where the object is held, so they are left alone."""


@dataclass(frozen=True, slots=True)
class Evolution:
    """What became of the series of a batch.

    Parameters
    ----------
    rows : tuple of ChangeRow or RateRow
        Changes and rates by place and quantity; empty where there is no series.
    notes : tuple of str
        What was left out, in sentences.
    file : Path or None
        `series.csv`, if it was written.
    """

    rows: tuple[ChangeRow | RateRow, ...] = ()
    notes: tuple[str, ...] = ()
    file: Path | None = None


def follow_batch(config: BatchConfig, outcomes: Sequence[Outcome], *, write: bool = True) -> dict[str, Evolution]:
    """Follow the epochs of every place; see `follow_epochs`.

    Returns
    -------
    dict of str to Evolution
        By the name of the place, which is empty where the batch has no places.
    """
    from scanstrain.config import sites_of

    found = {}
    for site in sites_of(config):
        before = f"{site.name}/" if site.name else ""
        own = [replace(each, name=each.name.removeprefix(before)) for each in outcomes if each.name.startswith(before)]
        found[site.name] = follow_epochs(site.batch, own, write=write)
        if write and not all(each.up_to_date for each in own):
            show_evolution(site.batch, own, found[site.name])
    return found


def follow_epochs(config: BatchConfig, outcomes: Sequence[Outcome], *, write: bool = True) -> Evolution:
    """Follow every zone and section through the comparisons with the first epoch, and write `series.csv`.

    Nothing is computed anew: changes and standard errors are those of the finished comparisons. A comparison that
    failed is left out. Whatever keeps a series from being made is a note; the comparisons stand as they are.

    Parameters
    ----------
    config : BatchConfig
    outcomes : sequence of Outcome
        Of `run_batch`.
    write : bool
        Write the table beside the folders of the comparisons.

    Returns
    -------
    Evolution
        Without rows where fewer than three dated epochs are compared with the first.
    """
    epochs = config.followed()
    if len(epochs) < FEWEST:
        return Evolution()
    found = {outcome.name: outcome for outcome in outcomes}
    first = epochs[0]
    summaries, notes = [], []
    for entry in epochs[1:]:
        outcome = found.get(f"{first.label}_to_{entry.label}")
        if outcome is None or outcome.summary is None:
            why = "was not run" if outcome is None else "failed"
            notes.append(f"Series: epoch {entry.label!r} is left out, because its comparison with the first one {why}.")
        else:
            summaries.append((entry, outcome.summary))
    if len(summaries) < FEWEST - 1:
        return Evolution(notes=(*notes, "Series: fewer than three epochs are left, so there is none."))
    try:
        rows = tuple(_rows(config, first, summaries))
        file = _written(rows, config.output.folder) if write and rows else None
    except ScanstrainError as error:
        return Evolution(notes=(*notes, f"Series: {str(error).removeprefix('series: ')}"))
    return Evolution(rows, tuple(notes), file)


def show_evolution(config: BatchConfig, outcomes: Sequence[Outcome], evolution: Evolution) -> None:
    """Put curves and rates into the overview of the batch and into the reports; nothing without a series.

    Raises
    ------
    OutputError
        A page could not be written; it then stands as it did before.
    """
    from scanstrain.outputs.manifest import renew_manifest
    from scanstrain.outputs.report import Compared, show_series

    epochs = config.followed()
    if not evolution.rows or epochs[0].date is None:
        return
    first, found = epochs[0].label, {outcome.name: outcome for outcome in outcomes}
    later = [
        Compared(entry.label, entry.date, outcome.folder, outcome.summary)
        for entry in epochs[1:]
        if (outcome := found.get(f"{first}_to_{entry.label}")) and outcome.summary is not None and entry.date
    ]
    show_series(
        outcomes, config.output.folder, evolution.rows, first=(first, epochs[0].date), later=later,
        structure=config.strain.structure,
    )  # fmt: skip
    for each in later:
        renew_manifest(each.folder)


def evolution_data(evolution: Evolution) -> dict[str, Any]:
    """Return the series in a form that JSON can hold; SI units, rates per year, None where there is no value."""
    from scanstrain.outputs.strict import plain

    rows = []
    for row in evolution.rows:
        numbers = asdict(row)
        kind = "rate" if "fit" in numbers else "change"
        numbers |= numbers.pop("fit", {})
        rows.append({"row": kind, **{name: _iso(value) for name, value in numbers.items()}})
    file = None if evolution.file is None else str(evolution.file)
    return dict(plain({"file": file, "notes": list(evolution.notes), "rows": rows}))


def evolutions_data(evolutions: Mapping[str, Evolution]) -> dict[str, Any]:
    """Return the series of all places in a form that JSON can hold, under their names where there are places."""
    data = {place: evolution_data(evolution) for place, evolution in evolutions.items()}
    return data[""] if set(data) == {""} else data


def _iso(value: Any) -> Any:
    return value.isoformat() if isinstance(value, dt.date) else value


def _written(rows: Sequence[ChangeRow | RateRow], folder: Path) -> Path:
    from scanstrain.outputs.series_table import write_series_table

    return write_series_table(rows, folder)


def _rows(
    config: BatchConfig, first: EpochEntry, later: Sequence[tuple[EpochEntry, Summary]]
) -> Iterator[ChangeRow | RateRow]:
    from scanstrain.series import check_dates, follow, rows_of

    labels = (first.label, *(entry.label for entry, _ in later))
    dates = tuple(entry.date for entry in (first, *(entry for entry, _ in later)) if entry.date is not None)
    check_dates(dates, season=config.series.season)
    summaries = [summary for _, summary in later]
    for track, chainage in _tracks(labels, dates, summaries):
        triggers = [trigger for trigger in config.trigger if _concerns(trigger, track, chainage, config)]
        grades = [_grade(triggers, value, sd) for value, sd in zip(track.values, track.sd, strict=True)]
        warmth = _temperature(config, track, (first, *(entry for entry, _ in later)), summaries)
        yield from rows_of(follow(track, season=config.series.season, temperature=warmth), grades=grades)


def _temperature(
    config: BatchConfig, track: Track, epochs: Sequence[EpochEntry], summaries: Sequence[Summary]
) -> Temperature | None:
    """What free expansion adds to a track; None where that was not asked for or the quantity does not follow it."""
    import numpy as np

    from scanstrain.series import Temperature

    given = config.series.thermal
    per_unit = EXPANDING.get(track.quantity) or _diameter(track, summaries)
    if given is None or per_unit is None:
        return None
    expansion, expansion_sd, reading_sd = given
    warmth = np.array([entry.temperature for entry in epochs], float)
    return Temperature(warmth[1:] - warmth[0], expansion * per_unit, expansion_sd * per_unit, reading_sd)


def _diameter(track: Track, summaries: Sequence[Summary]) -> float | None:
    """Length of a diameter whose change is followed [m], at the reference epoch."""
    if not track.quantity.endswith("_diameter_change"):
        return None
    name = track.quantity.removesuffix("_change") + "_ref"
    rows = ((summary.get("sections") or {}).get("rows", ()) for summary in summaries)
    known = [row.get(name) for each in rows for row in each if _place(row) == track.place]
    return next((float(length) for length in known if length is not None), None)


Seen = dict[tuple[str, str, str], list[tuple[int, float, float]]]
"""By place, quantity and unit: number of the epoch, change and standard error."""


def _tracks(
    labels: tuple[str, ...], dates: tuple[dt.date, ...], summaries: Sequence[Summary]
) -> Iterator[tuple[Track, float | None]]:
    """Yield every track, with the chainage of its section or None."""
    import numpy as np

    from scanstrain.series import Track

    seen: Seen = {}
    stations: dict[str, float] = {}
    for number, summary in enumerate(summaries):
        _gather_bodies(seen, number, summary)
        _gather_sections(seen, stations, number, summary)
    for (place, quantity, unit), changes in seen.items():
        values, sd = np.full(len(summaries), np.nan), np.full(len(summaries), np.nan)
        for number, value, error in changes:
            values[number], sd[number] = value, error
        yield Track(place, quantity, unit, labels, dates, values, sd), stations.get(place)


def _gather_bodies(seen: Seen, number: int, summary: Summary) -> None:
    """How the whole object and each zone moved and strained."""
    from scanstrain.attributes import BY_NAME, OF_BODIES

    for place, body in summary.get("rigid_motion", {}).items():
        means = summary.get("zones", {}).get(place, {}).get("quantities", {})
        mean = means.get("disp_n", {})
        known = {**body, "mean_disp_n": mean.get("mean"), "mean_disp_n_sd": mean.get("mean_sd")}
        for quantity, (unit, _) in OF_BODIES.items():
            _gather(seen, (place, quantity, unit), number, known)
        for quantity, attribute in OF_ZONES.items():
            mean = means.get(attribute, {})
            known = {quantity: mean.get("mean"), f"{quantity}_sd": mean.get("mean_sd")}
            _gather(seen, (place, quantity, BY_NAME[attribute].unit), number, known)


def _gather_sections(seen: Seen, stations: dict[str, float], number: int, summary: Summary) -> None:
    """How each section changed; all comparisons share the axis of the first epoch, so they share its chainages."""
    from scanstrain.structures import section_units

    units = section_units()
    for row in (summary.get("sections") or {}).get("rows", ()):
        place = _place(row)
        stations[place] = float(row["chainage"])
        chords = (name for name in row if name.startswith("chord_") and name.endswith("_change"))
        for quantity in (*OF_SECTIONS, *chords):
            _gather(seen, (place, quantity, units[quantity][0] if quantity in units else "m"), number, row)


def _place(section: Mapping[str, Any]) -> str:
    """Name of a section by its chainage."""
    return f"section {section['chainage']:.2f} m"


def _gather(seen: Seen, key: tuple[str, str, str], number: int, known: Mapping[str, Any]) -> None:
    value, sd = known.get(key[1]), known.get(f"{key[1]}_sd")
    if value is not None and sd is not None and sd > 0:
        seen.setdefault(key, []).append((number, float(value), float(sd)))


def _concerns(trigger: TriggerEntry, track: Track, chainage: float | None, config: BatchConfig) -> bool:
    """Whether a trigger is about a track; without a zone it is about the whole object and all sections."""
    from scanstrain.result import WHOLE

    if trigger.quantity != track.quantity:
        return False
    if chainage is None:
        return (trigger.zone or WHOLE) == track.place
    zone = next((zone for zone in config.zone if zone.name == trigger.zone), None)
    return zone is None or zone.chainage is None or zone.chainage[0] <= chainage <= zone.chainage[1]


def _grade(triggers: Sequence[TriggerEntry], value: float, sd: float) -> str:
    """How a change stands to some triggers, in words."""
    from scanstrain.limits import BELOW, UNSEEN, grade, worst_level

    said = []
    for trigger in triggers:
        grades = {
            level: str(grade(value, sd, limit, direction=trigger.side)) for level, limit in trigger.limits().items()
        }
        worst = worst_level(grades)
        levels = ((worst.exceeded, "exceeded"), (worst.possible, "possible"))
        words = ", ".join(f"{level} {word}" for level, word in levels if level is not None)
        said.append(f"{trigger.name}: {words or (UNSEEN if UNSEEN in grades.values() else BELOW)}")
    return "; ".join(said)
