# SPDX-License-Identifier: MIT
"""The text of `TRUTH.md`: what the demonstration scans show, in formulas and numbers."""

from __future__ import annotations

import numpy as np

from scanstrain.synthetic.demo import NAMES, ORIGIN, SampleTruth, first_epoch, sample_truth
from scanstrain.synthetic.surfaces import FloatArray
from scanstrain.synthetic.truth import truth_at

GRID_STEP = 0.02
"""Spacing of the places at which extremes are looked for [m]."""

_SCENARIO = """# What the sample scans show

Simulated scans of a place that does not exist. `scanstrain sample FOLDER` writes these files again, byte for byte.
Coordinates are metres on an invented works grid; local coordinates are file coordinates minus
({ox:.0f}, {oy:.0f}, {oz:.0f}).

## The objects

**Service adit.** A circular lining, radius 1.9 m, 8 m long; its axis is level, starts at local (1.0, 2.0, 1.4)
and runs 0.6 rad counter-clockwise from east. The lining covers the angles t = -30 to 210 degrees from the right
springline, counter-clockwise looking along the axis; below is a floor slab. At chainage 8 m a bulkhead closes
the adit. A cabinet stands at chainage 6.3 m and a pipe runs along the left wall. Three epochs.

**Yard wall.** A vertical wall, 8 m long and 3.5 m high; its lower start is at local (40.0, 10.0, 0.2), and it
runs 0.35 rad clockwise from east. The free side is to the right. A pavement, a return wall at its far end, a
buttress, a downpipe and a post stand before it. Two epochs.

Both have a relief of 1 mm rms (correlation exp(-(d/50 mm)^2)) and a reflectance texture of 30 % rms
(exp(-(d/40 mm)^2)), which ride on the surface. Floor, bulkhead, cabinet, pipe, pavement, return wall, buttress,
downpipe and post have neither, and never move. LAS classes: 6 the structure, 2 floor and pavement, 1 the rest.

## The scanner

Two set-ups an epoch (point source id 1 and 2), at slightly different places each time, the beams on a new grid
each time: no point is measured twice. Range noise 0.5 mm at normal incidence i = 0, growing as
sqrt(1 + (0.6 tan i)^2); angle noise 0.04 mrad. The spot is 3.5 mm + 0.3 mrad wide, and the texture is averaged
over it. Intensity falls as cos(i) and as range^-0.5, with relative noise of 2 %. Echoes beyond 65 degrees of
incidence are dropped; some echoes at edges are mixed. Each set-up is thinned to 18 mm (adit) or 14 mm (wall)
where denser. The noise is white. The set-ups of an epoch fit each other exactly.

## The motion

q1, q2 are arc length (t times radius) and chainage in the adit, distance along the wall and height at the wall,
in metres; the normal n points to the free side, into the adit or out of the wall. W(x; a, b, r) rises as
s^3 (10 - 15 s + 6 s^2), s = (x - a)/r, from 0 at a to 1 at a + r, and falls likewise to 0 at b.

* Adit, oval: u_r = a cos 2t outwards, u_t = -(a/2) sin 2t, times W(q2; 0.8, 4.4, 1.6): the ring keeps its
  length. a = 2 mm in June, 5 mm in September.
* Adit, inward bulge of the right shoulder: u_n = w (1 - d^2)^4 for d < 1, d the distance along the surface from
  q1 = 1.9 m x 50 degrees, q2 = 2.6 m, over 1.5 m. w = 2 mm in June, 6 mm in September.
* Wall, lean: u_n = 9 mm (z^4 - 4 z^3 + 6 z^2)/3, z = q2/3.5 m, times W(q1; 0.2, 3.6, 1.6).
* Wall, bulge: u_n = 5 mm (1 - d^2)^4 for d < 1, d the distance from q1 = 1.9 m, q2 = 1.6 m, over 1.4 m.
* Wall, stretch along q1: u_1 = 0.0015 (q1 - 1.9 m) W(q1; 0.2, 3.6, 1.1) W(q2; 0.2, 3.3, 1.1).

Elsewhere nothing moves. A skin at height h over the base surface moves by u + h (m - n), m the normal after the
motion.
"""

_HOW_TO = """
## The truth at a point

```python
import laspy
from scanstrain.synthetic import sample_truth, truth

sample = sample_truth("adit_2031-09-12")            # the current epoch: its motion since the first one
points = laspy.read("adit_2031-03-04.laz").xyz - sample.scene.origin
exact = truth(sample.scene, points)                 # disp_x ... curv_2 as in strain.laz, on_structure
```

Places are found by projecting the noisy reference points onto the base surface. Noise across the surface, about
1 mm at 65 degrees of incidence, shifts the place by as much; with gradients up to 0.012 the displacement errs by
about 0.01 mm at worst. `sample.scan()` returns the scan with the material coordinates that every beam met, without
such an error. Truth is given from the first epoch of an object to a later one.
"""


def truth_statement() -> str:
    """Return the whole text, the same at every call."""
    ox, oy, oz = ORIGIN
    later = [sample_truth(name) for name in NAMES if sample_truth(name).name != first_epoch(name).name]
    parts = [_SCENARIO.format(ox=ox, oy=oy, oz=oz), _extremes(later), _registrations(later), _HOW_TO]
    return "".join(parts)


def surface_grid(sample: SampleTruth, step: float = GRID_STEP) -> FloatArray:
    """Return material coordinates (n, 2) of a regular grid over the structure, cell by cell of `step` [m]."""
    a0, a1, b0, b1 = sample.scene.surface.bounds
    sides = [np.arange(low + step / 2, high, step) for low, high in ((a0, a1), (b0, b1))]
    return np.stack(np.meshgrid(*sides, indexing="ij"), axis=-1).reshape(-1, 2)


_ROWS = (
    ("normal displacement", "disp_n", 1e3, "mm"),
    ("hoop or horizontal strain", "strain_u", 1e6, "microstrain"),
    ("axial or upward strain", "strain_v", 1e6, "microstrain"),
    ("tensor shear strain", "shear_uv", 1e6, "microstrain"),
    ("larger principal strain", "strain_1", 1e6, "microstrain"),
    ("tilt", "tilt", 1e3, "mrad"),
    ("spin", "spin", 1e3, "mrad"),
    ("larger change of curvature", "curv_1", 1e3, "1/km"),
    ("smaller change of curvature", "curv_2", 1e3, "1/km"),
)


def _extremes(later: list[SampleTruth]) -> str:
    lines = ["\n## Extremes, against the first epoch\n"]
    for sample in later:
        q = surface_grid(sample)
        exact = truth_at(sample.scene, q)
        still = float((np.linalg.norm(exact["displacement"], axis=1) == 0).mean())
        lines += [
            f"\n### {sample.name}\n",
            f"\n{100 * still:.0f} % of the structure does not move at all. ",
            "Small strain; places (q1, q2) in metres.\n",
            "\n| quantity | attribute | unit | lowest | at | highest | at |\n|---|---|---|---|---|---|---|\n",
        ]
        for words, name, factor, unit in _ROWS:
            cells = [
                f"{_plain(exact[name][i] * factor)} | ({_plain(q[i, 0])}, {_plain(q[i, 1])})"
                for i in (_place_of_highest(-exact[name]), _place_of_highest(exact[name]))
            ]
            lines.append(f"| {words} | `{name}` | {unit} | {cells[0]} | {cells[1]} |\n")
    return "".join(lines)


def _place_of_highest(values: FloatArray) -> int:
    """The first place within 1e-9 of the highest value, so that rounding does not choose among equal ones."""
    return int(np.flatnonzero(values >= values.max() - 1e-9 * np.ptp(values))[0])


def _plain(value: float) -> str:
    return f"{round(float(value), 2) + 0.0:.2f}"


def _registrations(later: list[SampleTruth]) -> str:
    lines = [
        "\n## Registration\n\nLater epochs arrive with a small error of their datum. These matrices take their\n",
        "file coordinates back to those of the first epoch.\n",
    ]
    for sample in later:
        T = sample.file_matrix()
        T[np.abs(T) < 1e-16] = 0.0
        rows = ["  ".join([*(f"{v:+.14f}" for v in row[:3]), f"{row[3]:+.6f}"]) for row in T]
        shift = sample.T_ref_cur @ np.append(_middle(sample), 1.0) - np.append(_middle(sample), 1.0)
        turn = np.degrees(np.arccos((np.trace(T[:3, :3]) - 1) / 2))
        lines.append(
            f"\n{sample.name}: turned by {turn:.3f} degrees, the middle of the object shifted by "
            f"({', '.join(f'{1e3 * v:.2f}' for v in shift[:3])}) mm\n\n```\n" + "\n".join(rows) + "\n```\n"
        )
    return "".join(lines)


def _middle(sample: SampleTruth) -> FloatArray:
    a0, a1, b0, b1 = sample.scene.surface.bounds
    return np.asarray(sample.scene.surface.points(np.array([[(a0 + a1) / 2, (b0 + b1) / 2]]))[0])
