# SPDX-License-Identifier: MIT
"""Registration and stable ground as tables: what the datum stands on, and what it leaves open."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from scanstrain.attributes import BY_NAME
from scanstrain.outputs.report.tables import MISSING, Cell, Table, measured, neat, plain_number, sized, table
from scanstrain.outputs.words import NORMAL_95, amount, number, percent

Summary = Mapping[str, Any]
_LENGTH = BY_NAME["disp_n"]
_CHOSEN = {"auto": "found by the program", "given": "named by the user", "all": "everything, as the user asked"}


def ground_tables(summary: Summary) -> list[Table]:
    """Give the tables that this comparison has."""
    found = [_motion(summary), _open(summary), _targets(summary), _seams(summary), _bodies(summary)]
    return [each for each in found if each is not None]


def _motion(summary: Summary) -> Table:
    return table("Registration of the current epoch on the reference", ("What", "Value"), list(_facts(summary)))


def _facts(summary: Summary) -> Iterator[tuple[str, str]]:
    registration = summary["registration"]
    yield "Residual on stable ground, rms", _or_missing(registration["rms"])
    yield "Stable ground", f"{percent(registration['stable_fraction'])} of the points of the reference"
    ground = registration["stable_ground"]
    if ground:
        yield "Chosen", _CHOSEN.get(ground["chosen_by"], ground["chosen_by"])
        yield "Surface that shares this motion", percent(ground["share"])
        if ground["second_share"]:
            change = amount(ground["second_shift"], _LENGTH)
            yield (
                "Second best choice",
                f"{percent(ground['second_share'])} of the surface; displacements would change by up to {change}",
            )
        else:
            yield "Second best choice", "none found"
    yield "Overlap", f"{percent(registration['overlap'])} of the reference"
    turned = sum(part**2 for part in registration["rotation_vector"]) ** 0.5
    moved = sum(part**2 for part in registration["translation"]) ** 0.5
    yield "The current epoch was turned by", amount(turned, BY_NAME["tilt"])
    yield (
        "and shifted by",
        f"{amount(moved, _LENGTH)} at x {{:.2f}}, y {{:.2f}}, z {{:.2f}}".format(*registration["pivot"]),
    )
    half = NORMAL_95 * (registration["scale_ppm_sd"] or 0.0)
    known = registration["scale_ppm"] is not None and registration["scale_ppm_sd"] is not None
    scale = f"{number(registration['scale_ppm'], 0, sign=True)} ± {number(half, 0)} ppm" if known else "not known"
    yield "Difference in scale, not corrected", neat(scale)
    yield "Started from", registration["start"]
    yield "Steps", f"{registration['iterations']}" + ("" if registration["converged"] else ", not converged")


def _open(summary: Summary) -> Table | None:
    registration = summary["registration"]
    kinds = (("weak_directions", "the surfaces do not fix it"), ("texture_directions", "fixed by intensity alone"))
    rows = [
        [each["description"], kind, sized(each["sd"], "disp_n") if each["sd"] is not None else Cell("unbounded")]
        for key, kind in kinds
        for each in registration.get(key) or []
    ]
    if not rows:
        return None
    heads = ("Motion", "What fixes it", "Standard error at the farthest place")
    return table("Motions that the surfaces leave open", heads, rows)


def _targets(summary: Summary) -> Table | None:
    targets = summary["registration"].get("targets")
    if not targets:
        return None
    rows = [
        [name, "yes" if row["used"] else "left out", *(sized(part, "disp_n") for part in row["residual"]),
         plain_number(row["w"] if not isinstance(row["w"], list) else max(map(abs, row["w"])), 1)]
        for name, row in targets["residuals"].items()
    ]  # fmt: skip
    p = "not known" if targets["p"] is None else f"{targets['p']:.2g}"
    note = f"rms {_or_missing(targets['rms'])}; p-value of the adjustment {p}; critical w {targets['critical_w']:.1f}."
    return table("Targets", ("Target", "Used", "x", "y", "z", "Largest w"), rows, note=note)


def _seams(summary: Summary) -> Table | None:
    rows = [
        [f"{epoch}: {seam['first']} – {seam['second']}", plain_number(seam["points"]),
         measured(seam["offset_n"], seam["offset_n_sd"], "disp_n"), plain_number(seam["p"], 3),
         seam["note"] or "; ".join(weak["description"] for weak in seam["weak_directions"]) or MISSING]
        for epoch, seams in summary["setups"].items()
        for seam in seams
    ]  # fmt: skip
    if not rows:
        return None
    heads = ("Set-ups", "Common points", "Step along the normal, 95 %", "p-value of no step", "Left open")
    return table("Seams between set-ups", heads, rows)


def _bodies(summary: Summary) -> Table | None:
    rows = [
        [name, body["verdict"], measured(body["shift"], body["shift_sd"], "disp_n"),
         measured(body["lean"], body["lean_sd"], "spin"), measured(body["yaw"], body["yaw_sd"], "spin"),
         measured(body["largest_residual"], body["largest_residual_sd"], "disp_n"), plain_number(body["gauges"])]
        for name, body in summary["rigid_motion"].items()
    ]  # fmt: skip
    if not rows:
        return None
    heads = ("Part", "Verdict", "Shift to the free side", "Lean", "Yaw", "Largest rest", "Gauges")
    note = (
        "After registration, with 95 % intervals. Lean is positive where the top came forward, yaw is anticlockwise "
        f"from above. {MISSING}: not known, or the part faces no one side."
    )
    return table("How each part moved as one body", heads, rows, note=note)


def _or_missing(length: float | None) -> str:
    return MISSING if length is None else amount(length, _LENGTH)
