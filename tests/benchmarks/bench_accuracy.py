# SPDX-License-Identifier: MIT
"""Accuracy of the local fit against exact truth: RMSE over the Cramér-Rao bound, coverage, squared errors, bias.

    python tests/benchmarks/bench_accuracy.py [--seeds 3] [--spacing 0.007] [--gauge 0.6]

A textured, slightly rough wall and lining with a homogeneous motion, white noise and noise of which 20 % is shared by
neighbours. The bounds count surface and reflectance as known, which no method has: what it must estimate of both
costs some 8 % (unknown texture). With correlated noise the bound is still that of white noise of the same variance.
"""

from __future__ import annotations

import argparse
import runpy
import time
from pathlib import Path

import numpy as np

from scanstrain.neighbourhood import fit_affine
from scanstrain.synthetic import Linear, Lining, Ovalisation, Sum, Wall, sample_epoch

HERE = Path(__file__).parent
MEASURES = runpy.run_path(str(HERE.parent / "scenes" / "scene_measures.py"))
MACHINE = runpy.run_path(str(HERE / "bench_machine.py"))
NOISE, GREY_NOISE = 5e-4, 30.0
HOMOGENEOUS = Linear(((6e-4, 2e-4), (-3e-4, -4e-4), (1e-3, -8e-4)), centre=(1.5, 1.5), offset=(3e-4, -2e-4, 2e-3))
SCENES = {
    "wall": lambda seed: MEASURES["textured"](Wall(3.0, 3.0), HOMOGENEOUS, seed=seed),
    "lining": lambda seed: MEASURES["textured"](Lining(2.0, 2.0), Sum((Ovalisation(2e-3),)), seed=seed),
}
CORRELATIONS = {"white": {}} | {
    f"20 % over {mm} mm": {"correlated_share": 0.2, "correlation_length": mm / 1000} for mm in (30, 50, 100)
}
ROWS = {"un": 0, "gn1": 1, "gn2": 2}
IN_PLANE = ("u1", "u2", "g11", "g12", "g21", "g22")
PROBES = 25
"""Gauges at which the bound is computed; it hardly varies over a drawn scene."""


def one(scene, options, seed, spacing, gauge):
    """Errors of every gauge and root mean square bounds by unknown."""
    reference, current = (
        sample_epoch(
            scene,
            deformed=deformed,
            spacing=spacing,
            noise=NOISE,
            intensity_noise=GREY_NOISE,
            seed=2 * seed + deformed,
            **options,
        )
        for deformed in (False, True)
    )
    axis = np.array([1.0, 0.0, 0.0]) if isinstance(scene.surface, Lining) else None
    start = time.perf_counter()
    field = fit_affine(reference, current, gauge_length=gauge, gauge_spacing=gauge / 4, axis=axis)
    seconds = time.perf_counter() - start
    errors = MEASURES["errors_of"](scene, field)
    # The bounds know nothing of a ring that closes: probes keep off the place where its coordinate jumps.
    a0, a1, *_ = scene.surface.bounds
    q1 = errors.material[:, 0]
    inner = np.flatnonzero(errors.inside & (q1 > a0 + gauge / 2) & (q1 < a1 - gauge / 2))
    probes = errors.material[inner[:: max(1, len(inner) // PROBES)]]
    q = [scene.surface.project(epoch.points)[0] for epoch in (reference, current)]
    normal = MEASURES["normal_bounds"](scene.surface, probes, gauge / 2, *[(each, NOISE**2) for each in q])
    bounds = {name: MEASURES["rms"](normal[:, k]) for name, k in ROWS.items()}
    tangential = np.array(
        [MEASURES["in_plane_bound"](scene, place, q[0], gauge / 2, 2 * NOISE**2, 2 * GREY_NOISE**2) for place in probes]
    )
    bounds |= {name: MEASURES["rms"](tangential[:, k]) for k, name in enumerate(IN_PLANE)}
    return errors, bounds, len(field), seconds


def main():
    """Run all scenes and print one table each."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=2, help="pairs drawn of every scene")
    parser.add_argument("--spacing", type=float, default=0.007, help="point spacing [m]")
    parser.add_argument("--gauge", type=float, default=0.6, help="gauge length [m]")
    given = parser.parse_args()
    print(MACHINE["machine"]())
    for name, make in SCENES.items():
        for noise, options in CORRELATIONS.items():
            runs = [one(make(seed), options, 100 + seed, given.spacing, given.gauge) for seed in range(given.seeds)]
            gauges, seconds = sum(run[2] for run in runs), sum(run[3] for run in runs)
            print(f"\n{name}, {noise} noise, {given.seeds} pairs, {gauges} gauges, {seconds:.1f} s in the stage")
            rows = []
            for unknown in (*ROWS, *IN_PLANE):
                error, sd = (np.concatenate(part) for part in zip(*[run[0].of(unknown) for run in runs], strict=True))
                if not len(error):
                    rows.append((unknown, 0, "", "", "", "", ""))
                    continue
                bound = MEASURES["rms"]([run[1][unknown] for run in runs])
                rms = MEASURES["rms"](error)
                rows.append(
                    (
                        unknown, len(error), f"{1e6 * rms:.1f}", f"{1e6 * bound:.1f}", f"{rms / bound:.2f}",
                        f"{100 * MEASURES['coverage'](error, sd):.1f}", f"{np.mean((error / sd) ** 2):.2f}",
                        f"{1e6 * error.mean():+.1f}",
                    )
                )  # fmt: skip
            MACHINE["table"](("unknown", "n", "RMSE 1e-6", "bound", "ratio", "cover %", "MNSE", "mean 1e-6"), rows)


if __name__ == "__main__":
    main()
