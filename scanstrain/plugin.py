# SPDX-License-Identifier: MIT
"""The stages for somebody else's pipeline: mappings of NumPy arrays in and out, no files, no global state.

The three functions named in the entry-point group `scanstrain.stages` share one form: each takes a mapping and
returns a new one with its results added, so that a pipeline can chain them knowing nothing but their names:

    data = {"reference": {"x": ..., "y": ..., "z": ..., "intensity": ...}, "current": {...}}
    data = registration(data)
    data = neighbourhood(data, gauge_length=0.6)
    data = strain(data)
    data["points"]["strain_xx"]

Everything that is added consists of arrays, numbers, strings, tuples and mappings of these, and can be pickled.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.epoch import Epoch, make_epoch
from scanstrain.errors import OptionError, explain

Arrays = Mapping[str, Any]
Data = dict[str, Any]

_COLOUR = ("red", "green", "blue")
_RENAMED = {"point_source_id": "setup"}


def annotate(reference: Any, current: Any, **options: Any) -> dict[str, NDArray[np.generic]]:
    """Compare two epochs held in arrays and return every attribute at the reference points.

    Parameters
    ----------
    reference, current : mapping of str to array, or structured array
        `x`, `y`, `z` [m] and, where there are any, `intensity`, `red`, `green`, `blue`, `point_source_id` or
        `setup`, `classification`; one value a point. Large survey coordinates are welcome.
    **options
        Any option of any stage by its name, for example `gauge_length=0.6`.

    Returns
    -------
    dict of str to ndarray of shape (n,)
        The attributes of `scanstrain.attributes.ATTRIBUTES` in the order of the reference points.

    Raises
    ------
    OptionError, InputFileError, OverlapError, RegistrationError, FitError
        With what was required, what came and what to do.
    """
    from scanstrain.config import config_from_options
    from scanstrain.pipeline import compare_epochs

    config = config_from_options(options)
    first = epoch_from(reference, "reference")
    return dict(compare_epochs(first, epoch_from(current, "current", first.origin), config).points)


def registration(data: Arrays, **options: Any) -> Data:
    """Add `registration`: the rigid motion current -> reference with its covariance.

    `data` holds `reference` and `current`, as of `annotate`; options as of `scanstrain.register`.
    """
    from scanstrain.registration import register

    reference, current = _epochs(data)
    return {**data, "registration": _as_mapping(register(reference, current, **options))}


def neighbourhood(data: Arrays, **options: Any) -> Data:
    """Add `field`: the local affine map at every gauge.

    Needs `registration`; without it the epochs count as aligned. Options as of `scanstrain.fit_affine`.
    """
    from scanstrain.neighbourhood import fit_affine

    reference, current = _epochs(data)
    if "registration" in data:
        current = current.moved(np.asarray(data["registration"]["T_ref_cur"]))
    return {**data, "field": _as_mapping(fit_affine(reference, current, **options))}


def strain(data: Arrays, **options: Any) -> Data:
    """Add `gauges` and `points`: every attribute at the gauges and at the reference points.

    Needs `field`; uses the covariance and the stable ground of `registration` where there is one. Options as of
    `scanstrain.compute_strain`.
    """
    from scanstrain.neighbourhood.result import AffineField
    from scanstrain.registration.result import Registration, WeakDirection
    from scanstrain.strain import blend_to_points, calibrate, compute_strain

    if "field" not in data:
        raise OptionError(explain("strain", "a mapping with `field`", "none", "run the neighbourhood stage first"))
    reference, _ = _epochs(data)
    datum = None
    if "registration" in data:
        named = ("weak_directions", "texture_directions")
        directions = {name: tuple(WeakDirection(**w) for w in data["registration"][name]) for name in named}
        datum = Registration(**{**data["registration"], **directions})
    field = AffineField(**data["field"])
    if datum is not None:
        field, calibration, _ = calibrate(field, datum, reference.points)
        options = {"known": {"stable": calibration.steady}, **options}
    result = compute_strain(field, registration=datum, **options)
    points = blend_to_points(result, reference.points)
    if datum is not None:
        points["stable"] = datum.stable.astype(np.uint8)
    return {**data, "gauges": dict(result.values), "points": points}


def epoch_from(arrays: Any, label: str, origin: NDArray[np.float64] | None = None) -> Epoch:
    """Make an epoch from a mapping of arrays or a structured array, as of `annotate`."""
    if not isinstance(arrays, (Mapping, np.ndarray)):
        raise OptionError(
            explain(label, "a mapping of arrays or a structured array", type(arrays).__name__, "name x, y and z")
        )
    names = arrays.dtype.names if isinstance(arrays, np.ndarray) else list(arrays)
    missing = [name for name in ("x", "y", "z") if name not in (names or ())]
    if missing:
        raise OptionError(
            explain(label, "arrays x, y and z", f"no {', '.join(missing)}", "name the coordinates x, y, z")
        )
    lengths = {name: np.shape(arrays[name]) for name in ("x", "y", "z")}
    if len(set(lengths.values())) > 1 or len(lengths["x"]) != 1:
        raise OptionError(explain(label, "x, y and z of one length", f"{lengths}", "give one value a point"))
    xyz = np.stack([np.asarray(arrays[name], np.float64) for name in ("x", "y", "z")], axis=1)
    extra: dict[str, Any] = {}
    for name in names or ():
        target = _RENAMED.get(name, name)
        if target == "intensity":
            extra[target] = np.asarray(arrays[name], np.float32)
        elif target == "setup":
            extra[target] = np.asarray(arrays[name], np.uint16)
        elif target == "classification":
            extra[target] = np.asarray(arrays[name], np.uint8)
    if all(name in (names or ()) for name in _COLOUR):
        extra["colour"] = np.stack([np.asarray(arrays[name], np.float32) for name in _COLOUR], axis=1)
    return make_epoch(xyz, origin=origin, label=label, **extra)


def _epochs(data: Arrays) -> tuple[Epoch, Epoch]:
    for name in ("reference", "current"):
        if name not in data:
            raise OptionError(explain("data", f"an entry {name!r}", f"{sorted(data)}", "give arrays of both epochs"))
    reference = epoch_from(data["reference"], "reference")
    return reference, epoch_from(data["current"], "current", reference.origin)


def _as_mapping(result: Any) -> Data:
    """Turn a result dataclass into a plain mapping, one level of nesting for tuples of dataclasses."""
    out: Data = {}
    for item in fields(result):
        value = getattr(result, item.name)
        if isinstance(value, tuple) and value and hasattr(value[0], "__dataclass_fields__"):
            value = tuple(_as_mapping(each) for each in value)
        out[item.name] = value
    return out
