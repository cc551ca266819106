# SPDX-License-Identifier: MIT
"""Sentences that belong to every result, and those that this result calls for.

Common practice in deformation monitoring, in our own words; the numbers come from the result.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from scanstrain.outputs.words import NORMAL_95, number, percent
from scanstrain.result import Result

ALWAYS = (
    "These numbers support the judgement of the responsible engineer or surveyor and the monitoring plan "
    "in force; they replace neither. Limits for action come from the designer, never from this program.",
    "“No change” means: none above the detection limits stated here, in the components that are "
    "observable here, where both scans show the surface. It says nothing about stability: failure can "
    "come below these limits or between dates.",
    "Two scans show the state at two dates. They are no alarm: fast processes need instruments that "
    "measure without pause, and nobody should enter a suspect area in order to scan it.",
    "Strain of a surface is neither stress nor capacity, and joints and cracks break the continuity that it assumes.",
    "A value beyond a limit for action is to be verified by raw data, datum, a repeated scan or a second "
    "method, without holding up the response that the plan prescribes.",
    "Do not raise a limit, lengthen the gauge or choose another stable ground after seeing such a value, "
    "unless the reason is recorded and approved; keep both results.",
    "Instruments need a current calibration, and claims at the level of a millimetre need independent check points.",
    "Compare maps of several dates only with the same colour limits and the same gauge length.",
    "Published classes of damage belong to the kind of structure that they were made for; do not apply "
    "those of buildings to linings or dams.",
)


def cautions(result: Result) -> list[str]:
    """Collect the cautions of a result: those for every result first, then those that its own numbers call for."""
    return [*ALWAYS, *_from_numbers(result)]


def _from_numbers(result: Result) -> Iterator[str]:
    registration, strain = result.registration, result.strain
    length = number(strain.gauge_length, 2)
    yield (
        f"Every strain is an average over a gauge length of {length} m; what is shorter, such as a crack, "
        "is spread out or missed. Standard errors come from the data; intervals and detection limits are 95 %."
    )
    yield (
        "Displacement, tilt and rotation assume that the ground taken as stable "
        f"({percent(registration.stable_fraction)} of the reference points) did not move between the dates; "
        "strain does not depend on that."
    )
    for weak in registration.weak_directions:
        yield (
            f"The surfaces do not fix this rigid motion: {weak.description}. "
            "Displacement of that kind was not measured."
        )
    excess = abs(registration.scale_ppm) - NORMAL_95 * registration.scale_ppm_sd
    if excess > 0:
        yield (
            f"The scales of the two scans differ by {number(registration.scale_ppm, 0, sign=True)} ± "
            f"{number(NORMAL_95 * registration.scale_ppm_sd, 0)} ppm. "
            "Nothing was corrected: if the instruments are the cause, every strain carries as many µε "
            "that are not real."
        )
    if np.isfinite(np.asarray(strain.values["bend_1"], dtype=float)).any():
        yield (
            "bend_1 and bend_2 assume the thickness that was given, plane sections and a section that is not cracked. "
            "They are positive where the scanned face is stretched: where it becomes more convex towards the free "
            "side, as at the crown of a lining that sags. The strain of the middle of the thickness (membrane_u and "
            "membrane_v in gauges.csv) is that of the face less that of bending."
        )
    if not registration.converged:
        yield "The registration did not converge: displacement, tilt and rotation must not be used."
