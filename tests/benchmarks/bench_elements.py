# SPDX-License-Identifier: MIT
"""Strains of finite-element bodies recovered from scans, over several draws: errors and coverage of 95 % intervals.

    python tests/benchmarks/bench_elements.py [--seeds 5] [--spacing 0.008]

The bodies of `tests/scenes/test_scene_finite_elements.py`: a wall panel with a settling foot and a ring in plane
strain. "Average" is the exact strain over the gauge's patch with the weights of an affine fit, which is what a gauge
states; "point" is the strain at its middle.
"""

from __future__ import annotations

import argparse
import runpy
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
BODIES = runpy.run_path(str(HERE.parent / "scenes" / "test_scene_finite_elements.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))


def _slope(found, true):
    """Slope of found over true strain, where there is any."""
    return f"{found @ true / (true @ true):.3f}" if np.abs(true).max() > 1e-5 else ""


def main():
    """Run all bodies and print one table each."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=5, help="draws of every body")
    parser.add_argument("--spacing", type=float, default=0.008, help="point spacing [m]")
    given = parser.parse_args()
    print(MACHINE["machine"]())
    for name in ("panel", "ring"):
        runs = [BODIES[name](seed, given.spacing) for seed in range(1, given.seeds + 1)]
        found, sd, average, point = (
            np.concatenate([getattr(run, part) for run in runs]) for part in ("found", "sd", "average", "point")
        )
        print(f"\n{name}, {given.seeds} draws, {len(found)} gauges of {BODIES['GAUGE']} m, spacing {given.spacing} m")
        rows = []
        for k, quantity in enumerate((*BODIES["NAMES"], "all")):
            part = slice(None) if quantity == "all" else slice(k, k + 1)
            f, s, a, p = (each[:, part].ravel() for each in (found, sd, average, point))
            rows.append(
                (
                    quantity, f"{1e6 * a.min():.0f} to {1e6 * a.max():.0f}",
                    f"{1e6 * BODIES['MEASURES']['rms'](f - a):.0f}",
                    f"{1e6 * np.mean(s):.0f}", _slope(f, a), f"{100 * BODIES['covered'](f, a, s):.1f}",
                    f"{100 * BODIES['covered'](f, p, s):.1f}", f"{1e6 * np.abs(a - p).max():.0f}",
                )
            )  # fmt: skip
        MACHINE["table"](
            ("strain", "true range ue", "RMS error ue", "mean sd ue", "slope", "cover average %", "cover point %",
             "largest average - point ue"),
            rows,
        )  # fmt: skip


if __name__ == "__main__":
    main()
