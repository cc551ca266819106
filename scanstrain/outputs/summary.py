# SPDX-License-Identifier: MIT
"""Everything about a comparison that is not an array per point, as one mapping."""

from __future__ import annotations

import platform
import sys
from dataclasses import asdict, fields
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

import numpy as np

from scanstrain.epoch import Epoch
from scanstrain.neighbourhood.result import PARAMETERS, Status
from scanstrain.outputs.cautions import cautions
from scanstrain.outputs.even_strain import budget_data
from scanstrain.outputs.findings import verdict
from scanstrain.outputs.joint_table import joint_rows
from scanstrain.outputs.motions import body_numbers, directions, seam_numbers, target_numbers
from scanstrain.outputs.options import OutputOptions
from scanstrain.outputs.regions import region_data
from scanstrain.outputs.registered import rigid_motion
from scanstrain.outputs.section_table import section_data
from scanstrain.outputs.statistics import attribute_statistics
from scanstrain.outputs.strict import plain, write_json
from scanstrain.outputs.triggers import trigger_cautions, trigger_data, trigger_warnings
from scanstrain.outputs.wall_table import wall_data
from scanstrain.outputs.words import OBSERVED_WORDS, percent, status_word
from scanstrain.outputs.zone_table import values_of_parts, zone_data
from scanstrain.registration.result import Registration
from scanstrain.result import Result
from scanstrain.structures import section_units

__all__ = ["summary", "verdict", "write_summary"]

RIGID_LEVEL = 0.05
"""p-value below which a rigid motion does not suffice [1]; where it does, so many gauges fall below it by chance."""
PACKAGES = ("scanstrain", "numpy", "scipy", "numba", "laspy", "open3d")


def write_summary(result: Result, folder: Path, options: OutputOptions) -> Path:
    """Write `summary.json`."""
    return write_json(summary(result, no_data=options.no_data), folder / "summary.json")


def summary(result: Result, *, no_data: float | None = None) -> dict[str, Any]:
    """Summarise a comparison.

    Parameters
    ----------
    result : Result
        The comparison.
    no_data : float, optional
        Finite value that stands for no-data in the clouds, NaN by default.

    Returns
    -------
    dict
        Only dicts, lists, strings, finite numbers, booleans and None, in SI units: ready for `json.dumps`.
    """
    strain = result.strain
    values = values_of_parts(result)
    triggers = trigger_data(result, values)
    content = {
        "registration": _registration(result),
        "rigid_motion": {body.name: body_numbers(body, result.reference.origin) for body in result.bodies},
        "gauges": _gauges(result),
        "regions": region_data(result),
        "sections": {"definitions": _section_words(result), "rows": section_data(result)} if result.sections else None,
        "zones": zone_data(result, values),
        "triggers": triggers,
        "budget": budget_data(result, values),
        "wall": wall_data(result),
        "joints": joint_rows(result.joints, result.reference.origin) if result.joints else None,
        "setups": {epoch: [seam_numbers(seam) for seam in seams] for epoch, seams in result.seams.items()},
        "shared_noise": _shared_noise(result),
        "calibration": {
            "factors": result.calibration.factors,
            "ground": result.calibration.ground,
            "gauges": result.calibration.gauges,
        },
        "results": attribute_statistics(result),
        "strain_measure": {
            "used": strain.measure,
            "why": strain.measure_reason,
            "compared": [asdict(row) for row in strain.compared],
        },
        "inputs": {"reference": _input(result.reference), "current": _input(result.current)},
        "software": _software(),
        "config": result.config.model_dump(mode="json"),
        "timing": _timing(result),
        "warnings": [*_warnings(result), *trigger_warnings(triggers)],
        "cautions": [*cautions(result), *trigger_cautions(result)],
        "no_data": {
            "value": "NaN" if no_data is None else no_data,
            "meaning": "the data do not support a value here; observed and status say why",
        },
        "status_codes": {str(int(code)): status_word(code) for code in Status},
        "observed_bits": {str(bit): word for bit, word in enumerate(OBSERVED_WORDS)},
    }
    return dict(plain(content))


def _registration(result: Result) -> dict[str, Any]:
    registration = result.registration
    return {
        **rigid_motion(registration),
        "rms": registration.rms,
        "stable_fraction": registration.stable_fraction,
        "stable_ground": _ground(registration),
        "overlap": registration.overlap,
        "weak_directions": directions(registration.weak_directions),
        "texture_directions": directions(registration.texture_directions),
        "targets": None if registration.targets is None else target_numbers(registration.targets),
        "converged": registration.converged,
        "iterations": registration.iterations,
        "start": registration.start,
        "scale_ppm": registration.scale_ppm,
        "scale_ppm_sd": registration.scale_ppm_sd,
    }


def _ground(registration: Registration) -> dict[str, Any] | None:
    """What the datum stands on; the second best choice with its effect at the worst place [m]."""
    ground = registration.ground
    return None if ground is None else {field.name: getattr(ground, field.name) for field in fields(ground)}


def _shared_noise(result: Result) -> dict[str, Any] | None:
    """Noise that neighbouring points share, and the factors on standard errors that follow from it (medians)."""
    found = result.field.correlation
    if found is None:
        return None
    kinds = {"height": found.height, "intensity": found.intensity}
    return {
        **{kind: noise and {"share": noise.share, "length": noise.length} for kind, noise in kinds.items()},
        "factors": dict(zip(PARAMETERS, found.factor, strict=True)),
    }


def _section_words(result: Result) -> dict[str, str]:
    """Unit and meaning of what is measured in a section."""
    units = section_units(result.config.tunnel.chords)
    return {name: f"{meaning} [{unit}]" for name, (unit, meaning) in units.items() if not name.endswith("_sd")}


def _gauges(result: Result) -> dict[str, Any]:
    strain = result.strain
    codes, counts = np.unique(strain.status, return_counts=True)
    return {
        "count": len(strain),
        "fine": int((strain.status == Status.FINE).sum()),
        "discovered": int((np.asarray(strain.values["discovery"]) == 1).sum()),
        "by_status": {status_word(int(code)): int(count) for code, count in zip(codes, counts, strict=True)},
        "gauge_length": strain.gauge_length,
        "gauge_spacing": strain.gauge_spacing,
        "gauge_length_reason": result.field.gauge_length_reason,
        "gauge_lengths": _lengths(result),
        "rigid": _rigid(result),
    }


def _lengths(result: Result) -> dict[str, int] | None:
    """How many fitted gauges have which length, where a ladder chose it."""
    lengths = result.strain.gauge_lengths
    if lengths is None:
        return None
    found, counts = np.unique(lengths[result.strain.status == Status.FINE], return_counts=True)
    return {f"{length:.4g}": int(count) for length, count in zip(found, counts, strict=True)}


def _rigid(result: Result) -> dict[str, Any] | None:
    """For how many gauges a rigid motion suffices: neither strain nor bending survives the test at 5 %."""
    p = result.strain.rigid_p
    tested = p[np.isfinite(p)] if p is not None else np.empty(0)
    if not len(tested):
        return None
    share = float((tested >= RIGID_LEVEL).mean())
    return {
        "tested": len(tested),
        "share_sufficient": share,
        "sentence": f"At {percent(share)} of the gauges a rigid motion describes what happened: strain and change of "
        f"curvature there are within their noise (F-test at {percent(RIGID_LEVEL)}, one gauge at a time).",
    }


def _input(epoch: Epoch) -> dict[str, Any]:
    source = epoch.provenance
    return {
        "file": Path(source.path).name,
        "path": source.path,
        "label": epoch.label,
        "sha256": source.sha256,
        "points": source.file_points or len(epoch),
        "dropped_points": source.dropped_points,
        "crs": source.crs,
        "unit": source.unit,
        "date": source.date,
        "notices": source.notices,
    }


def _software() -> dict[str, str | None]:
    """Versions from the metadata of the distributions: importing open3d would take seconds."""
    found: dict[str, str | None] = {"python": platform.python_version(), "platform": platform.platform()}
    for package in PACKAGES:
        try:
            found[package] = version(package)
        except PackageNotFoundError:
            found[package] = None
    return found


def _timing(result: Result) -> dict[str, Any]:
    total = float(sum(result.timing.values()))
    points = len(result.reference) + len(result.current)
    return {
        "stages": dict(result.timing),
        "total": total,
        "points_per_second": points / total if total > 0 else None,
        "peak_memory": _peak_memory(),
    }


def _peak_memory() -> int | None:
    """Peak resident memory of this process [byte], None where the system does not tell."""
    try:
        import resource
    except ImportError:
        return None
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return int(peak if sys.platform == "darwin" else peak * 1024)


def _warnings(result: Result) -> list[str]:
    """Warnings of the run and of its stages, each once."""
    stages = (result.warnings, result.registration.warnings, result.field.warnings, result.strain.warnings)
    return list(dict.fromkeys(sentence for stage in stages for sentence in stage))
