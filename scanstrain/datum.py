# SPDX-License-Identifier: MIT
"""What the configuration says about the datum, in the form that the registration takes."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from scanstrain.config import CompareConfig
from scanstrain.epoch import Epoch
from scanstrain.zones import Unrolled, mask_of

if TYPE_CHECKING:  # the stage compiles when it is loaded
    from scanstrain.registration.seams import Seam
    from scanstrain.registration.start import GivenStart


def datum_options(reference: Epoch, config: CompareConfig, unrolled: Unrolled | None = None) -> dict[str, Any]:
    """Turn options into keywords of `register`.

    Parameters
    ----------
    reference : Epoch
    config : CompareConfig
    unrolled : Unrolled, optional
        Reference points on the structure laid flat, for zones that are given so.

    Returns
    -------
    dict

    Raises
    ------
    OptionError
        A zone that holds no points or cannot be judged.
    InputFileError
        The file that the start comes from cannot be read.
    RegistrationError
        Targets that fix no motion or contradict one another.
    """
    options = config.registration
    stable: str | NDArray[np.bool_] = options.stable
    if options.stable_zones:
        stable = mask_of(config.zones(options.stable_zones), reference, unrolled)
    excluded = None
    if options.excluded_zones:
        excluded = mask_of(config.zones(options.excluded_zones), reference, unrolled)
    start: str | GivenStart = options.start
    if options.start_file is not None:
        start = _start_from(options.start, options.start_file, reference)
    return {
        "start": start,
        "stable": stable,
        "excluded": excluded,
        "capture_range": options.capture_range,
        "use_intensity": options.datum_from_intensity,
        "seed": options.seed,
        "max_iterations": options.max_iterations,
    }


def _start_from(kind: str, path: Path, reference: Epoch) -> GivenStart:
    """Read where to begin: a motion as it stands, or targets that are fitted."""
    from scanstrain.io import read_targets, read_transform
    from scanstrain.io.targets import DEFAULT_SD
    from scanstrain.registration.start import start_from_matrix, start_from_targets
    from scanstrain.registration.targets import fit_targets

    if kind == "file":
        known = read_transform(path)
        return start_from_matrix(
            known.T_ref_cur, reference.origin, covariance=known.covariance, pivot=known.pivot
        )  # fmt: skip
    table = read_targets(path)
    fit = fit_targets(
        table.names,
        table.reference,
        table.current,
        reference_sd=table.reference_sd,
        current_sd=table.current_sd,
    )
    if not table.sd_stated:
        assumed = f"{path.name}: {DEFAULT_SD * 1e3:.0f} mm were assumed where no standard deviation is stated"
        fit = replace(fit, warnings=(*fit.warnings, assumed))
    return start_from_targets(fit, reference.origin)


def check_setups(epoch: Epoch, *, align: bool) -> tuple[Epoch, tuple[Seam, ...], tuple[str, ...]]:
    """Compare the set-ups of an epoch, and bring them together if that is wanted.

    Parameters
    ----------
    epoch : Epoch
    align : bool

    Returns
    -------
    epoch : Epoch
        As it came, or with its set-ups aligned.
    seams : tuple of Seam
        As they were before.
    warnings : tuple of str
    """
    from scanstrain.registration.seams import find_seams, seam_warnings
    from scanstrain.registration.setups import align_setups

    seams = find_seams(epoch)
    said = seam_warnings(seams, epoch.label)
    if align and any(seam.compared for seam in seams):
        return align_setups(epoch, seams), seams, (*said, f"{epoch.label}: set-ups were aligned with one another")
    return epoch, seams, said
